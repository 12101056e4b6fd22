"""levelbook's half on the logger: counts to level, volume and hydraulic grade. Runs wherever MicroPython runs."""
