"""The one way to write, and all that must be sure before a record is acknowledged."""
