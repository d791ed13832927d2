"""Plan maps and depth slices from parallel ground-penetrating-radar lines.

Names are loaded when they are used, so that ``import planum`` costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_PUBLIC = {
    "background": "planum.conditioning.background",
    "bandpass": "planum.conditioning.bandpass",
    "dewow": "planum.conditioning.dewow",
    "gain": "planum.conditioning.gain",
    "map_site": "planum.pipeline.run",
    "open_cube": "planum.pipeline.cubes",
    "open_line": "planum.lines.reading",
    "plan_site": "planum.pipeline.run",
    "read_survey": "planum.survey.folder",
    "stolt": "planum.migration.stolt",
    "window_means": "planum.slices.windows",
    "write_segy": "planum.lines.segy_write",
}

__all__ = ["__version__", *_PUBLIC]  # noqa: PLE0604 - the names are strings


def __getattr__(name: str) -> Any:
    if name in _PUBLIC:
        return getattr(import_module(_PUBLIC[name]), name)
    raise AttributeError(f"module 'planum' has no attribute {name!r}")


def __dir__() -> list[str]:
    return __all__
