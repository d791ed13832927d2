"""Census, estimate, resolve, run; recipe and provenance."""
