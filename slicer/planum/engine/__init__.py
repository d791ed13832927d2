"""The line pass: raw line to strip."""
