"""Where raw readings lie: what a reading is, its CSV, the SQLite store."""
