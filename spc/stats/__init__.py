"""Pure statistics on arrays: no files, no database, no clock, no configuration."""
