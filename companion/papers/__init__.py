"""What people hand in: the daily log, the trend."""
