"""Strapping tables: read from a survey's CSV, or worked out from a tank's shape."""
