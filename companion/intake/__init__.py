"""From outside into the book: the wire's packs, MQTT."""
