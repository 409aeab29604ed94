"""Statistics, records and monitoring: the engine of yellowbay."""
