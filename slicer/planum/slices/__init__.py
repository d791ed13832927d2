"""Depth intervals, amplitude over them, and the plan grid between lines."""
