"""Plan maps and depth slices from parallel ground-penetrating-radar lines."""

__version__ = "0.1.0"
