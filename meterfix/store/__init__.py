"""The database and the archive."""
