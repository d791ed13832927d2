"""Plug-ins by entry point: what is installed is found, what is broken warns, and the rest goes on."""

from __future__ import annotations

import warnings
from importlib import metadata
from typing import TypeVar

from planum.errors import PlanumWarning, Problem

__all__ = ["load"]

T = TypeVar("T")


def load(group: str, protocol: type[T], what: str) -> dict[str, T]:
    """Return the plug-ins of an entry-point group by name, in alphabetical order.

    Parameters
    ----------
    group : str
        Such as ``planum.steps``.
    protocol : type
        A runtime-checkable protocol each one must satisfy.
    what : str
        What a plug-in of the group is called in messages.

    Warns
    -----
    PlanumWarning
        For each one that cannot be loaded or lacks something; it is left out.
    """
    found: dict[str, T] = {}
    for entry in sorted(metadata.entry_points(group=group), key=lambda e: (e.name, e.value)):
        try:
            plugin = entry.load()
            if not isinstance(plugin, protocol):
                raise TypeError(f"it is no {what}: it lacks one of {', '.join(_members(protocol))}")
        except Exception as fault:  # a plug-in may fail in any way, the others go on
            problem = Problem(
                came=f"the {what} {entry.name!r} ({entry.value}) cannot be loaded: {fault}",
                do="repair or remove that package; the others work",
                severity="warning",
            )
            warnings.warn(PlanumWarning(problem), stacklevel=3)
            continue
        found[entry.name] = plugin
    return found


def _members(protocol: type) -> list[str]:
    """Names a protocol asks for."""
    own = {*getattr(protocol, "__annotations__", {}), *vars(protocol)}
    return sorted(name for name in own if not name.startswith("_") or name == "__call__")
