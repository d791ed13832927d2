"""Migration, line by line."""
