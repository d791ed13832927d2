"""Comparable traces: dewow, gain, band-pass, background."""
