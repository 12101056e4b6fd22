"""Raw readings to figures: level, volume, hydraulic grade and their uncertainty."""
