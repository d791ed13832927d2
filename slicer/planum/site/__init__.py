"""Grids placed on the map by control points."""
