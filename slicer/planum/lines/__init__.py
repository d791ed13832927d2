"""One recorded line at a time: readers, positions."""
