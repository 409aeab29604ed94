"""The front door: command line, schedule, the nightly pass."""
