"""What goes out to the tanks; and tanks, loggers and a broker simulated on this machine."""
