"""A set of lines as one regular array."""
