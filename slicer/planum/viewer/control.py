"""What the window can do, without a window: the state, and which parts of the picture each change touches."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Literal

import numpy as np
import pyvista as pv

from planum.records import Statement
from planum.scene.build import Scene

__all__ = ["HELP", "Controller", "Part"]

Part = Literal["slice", "isosurface", "lines", "text"]

HELP = (
    "Up, Down: next slice above, below\n"
    "I: isosurface on, off\n"
    "L: lines on, off\n"
    "S: picture to a PNG\n"
    "Home: camera back\n"
    "H: this list on, off\n"
    "Q: close"
)


@dataclass(eq=False)
class Controller:
    """State of a window and its changes; each change returns the parts to draw again, none when nothing changed.

    Parameters
    ----------
    scene
        What the window opens with.
    statements
        The run's statements; the slice of a statement is found by its top and bottom.
    """

    scene: Scene
    statements: Sequence[Statement] = ()
    isosurface: bool = True
    lines: bool = True
    help: bool = False
    message: str = field(default="", init=False)

    def __post_init__(self) -> None:
        """Note the levels the slider runs over: from the middle of the smoothed cells to the strongest."""
        known = self.scene.soft.amplitude[np.isfinite(self.scene.soft.amplitude)]
        low, high = float(np.median(known)), float(known.max())
        self.levels = (low, high if high > low else low + 1.0)
        self.depths = (float(self.scene.block.depth[0]), float(self.scene.block.depth[-1]))

    def step(self, by: int) -> frozenset[Part]:
        """Go ``by`` slices down; stays at the ends."""
        return self._slice(self.scene.index + by)

    def to_depth(self, depth_m: float) -> frozenset[Part]:
        """Go to the slice whose centre is nearest to ``depth_m``."""
        return self._slice(int(np.argmin(np.abs(self.scene.block.depth - depth_m))))

    def to_level(self, level: float) -> frozenset[Part]:
        """Cut the isosurface at another amplitude."""
        if level == self.scene.level:
            return frozenset()
        self.scene = self.scene.at_level(level)
        return self._changed("isosurface", "text")

    def toggle_isosurface(self) -> frozenset[Part]:
        """Show or hide the isosurface."""
        self.isosurface = not self.isosurface
        return self._changed("isosurface", "text")

    def toggle_lines(self) -> frozenset[Part]:
        """Show or hide the lines."""
        self.lines = not self.lines
        return self._changed("lines")

    def toggle_help(self) -> frozenset[Part]:
        """Show or hide the list of keys."""
        self.help = not self.help
        return self._changed("text")

    def say(self, message: str) -> frozenset[Part]:
        """Show a message until the next change."""
        self.message = message
        return frozenset({"text"})

    def shown(self) -> Scene:
        """Return the scene with the parts that are switched off left empty."""
        scene = self.scene
        if not self.isosurface:
            scene = replace(scene, isosurface=pv.PolyData(), hidden=True)
        return scene if self.lines else replace(scene, lines=pv.PolyData())

    def status(self) -> str:
        """Return the statement of the current slice, or its interval where the run left none."""
        top, bottom = self.scene.block.bounds_m[self.scene.index]
        for statement in self.statements:
            # intervals are typed in centimetres; half a millimetre only covers float32 files
            if abs(statement.top_m - top) < 5e-4 and abs(statement.bottom_m - bottom) < 5e-4:
                return statement.sentence()
        return f"{self.scene.slice_text()} below the surface."

    def level_text(self) -> str:
        """Return what the isosurface shows, or that it is switched off."""
        return self.shown().level_text()

    def picture_name(self) -> str:
        """Return a file name for a picture of the current slice, without ending."""
        top, bottom = (round(100 * float(v)) for v in self.scene.block.bounds_m[self.scene.index])
        return f"{self.scene.code or 'view'}_d{top:03d}-{bottom:03d}cm"

    def _slice(self, index: int) -> frozenset[Part]:
        moved = self.scene.at_slice(index)
        if moved.index == self.scene.index:
            return frozenset()
        self.scene = moved
        return self._changed("slice", "text")

    def _changed(self, *parts: Part) -> frozenset[Part]:
        parts = (*parts, "text") if self.message else parts
        self.message = ""
        return frozenset(parts)
