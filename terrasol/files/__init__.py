"""The only rooms that take a file name."""
