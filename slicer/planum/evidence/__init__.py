"""Velocity from the site's own data."""
