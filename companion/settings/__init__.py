"""What people tell us: the site file, read, checked and dated, in SI."""
