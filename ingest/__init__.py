"""What comes in: finding, reading, checking and storing drops."""
