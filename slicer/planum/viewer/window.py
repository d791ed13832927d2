"""The window: sliders and keys on a :class:`~planum.viewer.control.Controller`, a plotter that follows it."""

from __future__ import annotations

import textwrap
from collections.abc import Callable, Sequence
from functools import partial
from pathlib import Path
from typing import Any

import pyvista as pv
import xarray as xr

from planum.errors import MachineError, Problem
from planum.records import Statement
from planum.scene import picture
from planum.scene.build import Lines, build_scene
from planum.scene.drawing import (
    INK,
    WARM,
    Letters,
    aim,
    draw_frame,
    draw_isosurface,
    draw_legend,
    draw_lines,
    draw_plane,
    light,
    write,
)
from planum.scene.environment import has_screen
from planum.scene.probe import rendering_problem
from planum.viewer.control import HELP, Controller, Part

__all__ = ["SIZE", "Window", "open_window"]

SIZE = (1500, 1000)
_FREE = (0.05, 0.96, 0.20, 0.83)
_EVERYTHING: frozenset[Part] = frozenset({"slice", "isosurface", "lines", "text"})


class Window:
    """A plotter that shows what its controller says.

    Parameters
    ----------
    controller
        State and changes.
    pictures
        Folder the key S writes into.
    size
        Width and height of the window in pixels.
    picture_size
        The same of the pictures the key S writes.
    off_screen
        Draw without opening a window, for tests and pictures.
    """

    def __init__(
        self,
        controller: Controller,
        *,
        pictures: Path,
        size: tuple[int, int] = SIZE,
        picture_size: tuple[int, int] = picture.SIZE,
        off_screen: bool = False,
    ) -> None:
        self.controller = controller
        self.picture_size = picture_size
        self.pictures = pictures
        title = f"planum: {controller.scene.title}" if controller.scene.title else "planum"
        self.plotter = pv.Plotter(window_size=list(size), title=title, lighting="none", off_screen=off_screen)
        light(self.plotter)
        draw_frame(self.plotter, controller.scene, scale=0.85)
        self.plotter.enable_anti_aliasing("msaa", multi_samples=4)
        self._sliders: dict[str, Any] = {}
        self.draw(_EVERYTHING)
        self.aim()

    def connect(self) -> None:
        """Add sliders and keys; needs an interactor, so not off screen."""
        control = self.controller
        # pyvista moves a new slider once: what it calls must find the value it already has
        depth, level = control.scene.depth_m, control.scene.level
        self._sliders["depth"] = self._slider(control.to_depth, control.depths, depth, "depth of the slice, m", 0.045)
        self._sliders["level"] = self._slider(control.to_level, control.levels, level, "isosurface, amplitude", 0.315)
        self.plotter.enable_terrain_style(mouse_wheel_zooms=True)  # depth stays downwards however the mouse turns
        self.plotter.reset_key_events()
        keys: dict[str, Callable[[], frozenset[Part]]] = {
            "Up": partial(control.step, -1),
            "Down": partial(control.step, 1),
            "i": control.toggle_isosurface,
            "l": control.toggle_lines,
            "s": self.save,
            "h": control.toggle_help,
        }
        for name, action in keys.items():
            for typed in {name, name.upper()} if len(name) == 1 else {name}:
                self.plotter.add_key_event(typed, self._doing(action))
        self.plotter.add_key_event("Home", self._home)
        # VTK's own letters would turn surfaces into wires or send the camera flying
        self.plotter.iren.interactor.GetInteractorStyle().AddObserver("CharEvent", _ignore)
        for closing in ("q", "Q", "Escape"):
            self.plotter.add_key_event(closing, self._leave)

    def act(self, action: Callable[..., frozenset[Part]], *values: float) -> None:
        """Do a change of the controller and show it."""
        self.draw(action(*values))
        self._sync()
        self.plotter.render()

    def draw(self, parts: frozenset[Part]) -> None:
        """Draw the named parts again."""
        scene = self.controller.shown()
        if "slice" in parts:
            actor = draw_plane(self.plotter, scene)
            if actor is not None and not self.plotter.scalar_bars:
                draw_legend(self.plotter, actor)
        if "isosurface" in parts:
            draw_isosurface(self.plotter, scene)
        if "lines" in parts:
            draw_lines(self.plotter, scene)
        if "text" in parts:
            self._text()

    def aim(self) -> None:
        """Put the camera where it began."""
        aim(self.plotter, self.controller.scene, window=_FREE)

    def save(self) -> frozenset[Part]:
        """Write a picture of what is shown under the next free name; say where, or why not."""
        name = self.controller.picture_name()
        number = 1
        while (path := self.pictures / f"{name}_{number}.png").exists():
            number += 1
        try:
            picture.render(self.controller.shown(), path, size=self.picture_size)
        except OSError as error:
            return self.controller.say(f"no picture: {error}")
        return self.controller.say(f"picture written to {path}")

    def _text(self) -> None:
        control, scene = self.controller, self.controller.scene
        put = partial(write, self.plotter)
        put("title", scene.title or "depth slices", (0.035, 0.955), Letters(24, color=INK, bold=True))
        put("slice text", scene.slice_text(), (0.035, 0.915), Letters(17, color=INK))
        put("level text", control.level_text(), (0.035, 0.885), Letters(17, color=WARM, bold=True))
        put("notes", "; ".join([*scene.notes(), "H shows the keys"]), (0.035, 0.855), Letters(14))
        put("weak", "weak", (0.822, 0.952), Letters(14, side="right"))
        put("strong", "strong", (0.950, 0.952), Letters(14))
        said = control.message or control.status()
        put("status", textwrap.fill(said, 92), (0.60, 0.125), Letters(12, color=INK, hanging=True))
        put("caution", scene.caution, (0.035, 0.025), Letters(12))
        put("help", HELP if control.help else "", (0.80, 0.905), Letters(14, color=INK, hanging=True))

    def _slider(
        self,
        action: Callable[[float], frozenset[Part]],
        ends: tuple[float, float],
        value: float,
        title: str,
        left: float,
    ) -> Any:
        low, high = ends
        slider = self.plotter.add_slider_widget(
            partial(self.act, action),
            rng=(low, high if high > low else low + 1e-3),
            value=value,
            title=title,
            pointa=(left, 0.105),
            pointb=(left + 0.23, 0.105),
            style="modern",
            color=INK,
            title_height=0.017,
            fmt="%.4g",
            interaction_event="end",
        )
        slider.KeyPressActivationOff()  # VTK's key i would hide the slider
        look = slider.GetRepresentation()
        look.SetTubeWidth(0.003)
        look.SetSliderWidth(0.018)
        look.SetSliderLength(0.010)
        look.SetLabelHeight(0.017)
        look.GetTitleProperty().SetBold(False)
        return slider

    def _doing(self, action: Callable[[], frozenset[Part]]) -> Callable[[], None]:
        def do() -> None:  # key events take no arguments, not even optional ones
            self.act(action)

        return do

    def _sync(self) -> None:
        for name, value in (("depth", self.controller.scene.depth_m), ("level", self.controller.scene.level)):
            if name in self._sliders:
                self._sliders[name].GetRepresentation().SetValue(value)

    def _home(self) -> None:
        self.aim()
        self.plotter.render()

    def _leave(self) -> None:
        self.plotter.iren.terminate_app()


def _ignore(*_: Any) -> None:
    return None


def open_window(
    slices: xr.Dataset,
    lines: Lines = (),
    *,
    statements: Sequence[Statement] = (),
    pictures: Path | None = None,
    level: float | None = None,
    slice_depth: float | None = None,
    exaggeration: float | None = None,
) -> None:
    """Open the window on a slice stack and return when it is closed.

    Parameters
    ----------
    slices, lines, level, slice_depth, exaggeration
        As for :func:`~planum.scene.build.build_scene`.
    statements
        What each slice says of itself; shown for the current one.
    pictures
        Folder the key S writes into, by default the working folder.

    Raises
    ------
    MachineError
        When there is no screen, or the drawing library does not work here.
    ValueError
        As :func:`~planum.scene.build.build_scene`.
    """
    check_screen()
    scene = build_scene(slices, lines=lines, level=level, slice_depth=slice_depth, exaggeration=exaggeration)
    window = Window(Controller(scene, statements), pictures=Path.cwd() if pictures is None else pictures)
    window.connect()
    window.plotter.show()


def check_screen() -> None:
    """Raise MachineError unless a window can open here."""
    if not has_screen():
        raise MachineError(
            Problem(
                came="there is no screen: DISPLAY is not set",
                allowed="a window needs a screen",
                do="planum view SITE --picture FILE writes a picture without one",
                key="DISPLAY",
            )
        )
    problem = rendering_problem()
    if problem is not None:
        raise MachineError(problem)
