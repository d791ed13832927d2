"""Puts a scene into a plotter: colours, light, camera, text. Shared by the picture and the window."""

from __future__ import annotations

from dataclasses import dataclass
from functools import partial
from typing import Any, Literal

import numpy as np
import pyvista as pv

from planum.scene.build import Scene

__all__ = [
    "INK",
    "WARM",
    "aim",
    "draw_frame",
    "draw_isosurface",
    "draw_legend",
    "draw_lines",
    "draw_plane",
    "draw_text",
    "greys",
    "light",
    "pixels",
    "write",
]

INK, QUIET, PAPER = "#22262b", "#59616a", "white"
WARM = "#d9601a"
"""Vermilion near the one of Okabe & Ito's colour-blind-safe set: told from every grey by all common eyes."""
LINE = "#8b97a3"
_LIGHTEST, _DARKEST = 0.95, 0.07
"""Greys of the weakest and strongest cells: the weakest still stands off the white paper."""


@dataclass(frozen=True)
class Letters:
    """How a text looks: size in pixels, colour, weight; ``side`` and ``hanging`` say which part sits at its place."""

    size: int
    color: str = QUIET
    bold: bool = False
    side: Literal["left", "right"] = "left"
    hanging: bool = False


def greys() -> np.ndarray:
    """Return the 256 greys of a slice as (256, 4) bytes: weak is light, strong is dark, even in linear steps."""
    grey = np.linspace(_LIGHTEST, _DARKEST, 256)
    return np.column_stack([grey, grey, grey, np.ones(256)]) * 255.0 + 0.5


def draw_plane(plotter: pv.Plotter, scene: Scene, *, scale: float = 1.0) -> Any:
    """Draw the slice; unknown cells are left out, not painted."""
    known = np.flatnonzero(np.isfinite(scene.plane.cell_data["amplitude"]))
    mesh = scene.plane.extract_cells(known)
    table = pv.LookupTable(values=greys().astype(np.uint8), scalar_range=scene.stretch)
    grow = 0.001 * scene.width_m  # a rim in the very edge of the slice would flicker
    west, south, east, north = (scene.block.box[i] + by for i, by in ((0, -grow), (2, -grow), (1, grow), (3, grow)))
    z = -scene.depth_m
    rim = pv.MultipleLines([(west, south, z), (east, south, z), (east, north, z), (west, north, z), (west, south, z)])
    _put(plotter, rim, scene, name="slice rim", color="#8a9097", line_width=1.4 * scale, lighting=False)
    return _put(plotter, mesh, scene, name="slice", scalars="amplitude", cmap=table, lighting=False)


def draw_isosurface(plotter: pv.Plotter, scene: Scene) -> Any:
    """Draw the isosurface, matt and warm."""
    material = {"smooth_shading": True, "ambient": 0.30, "diffuse": 0.80, "specular": 0.12, "specular_power": 12}
    return _put(plotter, scene.isosurface, scene, name="isosurface", color=WARM, **material)


def draw_lines(plotter: pv.Plotter, scene: Scene, *, scale: float = 1.0) -> Any:
    """Draw the recorded lines on the surface, thin and pale."""
    look = {"color": LINE, "opacity": 0.3, "line_width": 1.2 * scale, "lighting": False}
    return _put(plotter, scene.lines, scene, name="lines", **look)


def draw_frame(plotter: pv.Plotter, scene: Scene, *, scale: float = 1.0) -> None:
    """Draw edges, staffs, north arrow and labels; ``scale`` multiplies widths and letters."""
    frame = scene.frame
    _put(plotter, frame.edges, scene, name="edges", color="#b9bfc6", line_width=1.3 * scale, lighting=False)
    _put(plotter, frame.dark, scene, name="staff dark", color=INK, lighting=False)
    _put(plotter, frame.light, scene, name="staff light", color="#d3d7db", lighting=False)
    _put(plotter, frame.north, scene, name="north", color=INK, lighting=False)
    for number, label in enumerate(frame.labels):
        x, y, z = label.at
        text = pv.Label(
            label.text, position=(x, y, z * scene.exaggeration), size=int((19 if label.strong else 17) * scale)
        )
        text.prop.color = INK if label.strong else QUIET
        text.prop.font_family = "arial"
        text.prop.bold = label.strong
        text.prop.justification_horizontal = {"centre": "center"}.get(label.side, label.side)
        text.prop.justification_vertical = "center"
        plotter.add_actor(text, name=f"label {number}", reset_camera=False, pickable=False)


def draw_text(plotter: pv.Plotter, scene: Scene, *, scale: float = 1.0) -> None:
    """Draw title, slice, isosurface, notes, the legend of greys and the caution round the block."""
    put = partial(write, plotter, scale=scale)
    put("title", scene.title or "depth slices", (0.035, 0.955), Letters(30, color=INK, bold=True))
    put("slice text", scene.slice_text(), (0.035, 0.915), Letters(20, color=INK))
    put("level text", scene.level_text(), (0.035, 0.883), Letters(20, color=WARM, bold=True))
    notes = [*scene.notes(), "lines on the surface" if scene.lines.n_cells else ""]
    put("notes", "; ".join(note for note in notes if note), (0.035, 0.851), Letters(17))
    put("caution", scene.caution, (0.035, 0.03), Letters(16))
    put("weak", "weak", (0.822, 0.952), Letters(17, side="right"))
    put("strong", "strong", (0.950, 0.952), Letters(17))


def draw_legend(plotter: pv.Plotter, actor: Any) -> None:
    """Draw the ramp of the slice's greys between the words weak and strong."""
    plotter.add_scalar_bar(
        title="",
        mapper=actor.mapper,
        n_labels=0,
        width=0.115,
        height=0.022,
        position_x=0.830,
        position_y=0.943,
        vertical=False,
        render=False,
    )


def light(plotter: pv.Plotter) -> None:
    """Set soft light from the north-west, as relief is shaded on maps, with a faint fill from the south."""
    plotter.set_background(PAPER)
    plotter.remove_all_lights()
    for position, strength in (((-1.2, 0.8, 2.0), 0.72), ((-0.3, -1.6, 1.0), 0.45), ((1.5, -0.4, 0.8), 0.15)):
        lamp = pv.Light(position=position, focal_point=(0, 0, 0), light_type="scene light", intensity=strength)
        lamp.positional = False
        plotter.add_light(lamp)


def aim(
    plotter: pv.Plotter,
    scene: Scene,
    *,
    bearing_deg: float = 208.0,
    height_deg: float = 40.0,
    window: tuple[float, float, float, float] = (0.04, 0.96, 0.12, 0.83),
) -> None:
    """Point the camera from the south-west and above, so that frame and labels fill ``window``.

    Parameters
    ----------
    bearing_deg
        Where the camera stands, clockwise from north as seen from the block.
    height_deg
        How high it stands above the horizon.
    window
        Left, right, bottom, top of the free part of the picture as shares of its size.
    """
    bearing, height = np.radians(bearing_deg), np.radians(height_deg)
    back = np.array([np.sin(bearing) * np.cos(height), np.cos(bearing) * np.cos(height), np.sin(height)])
    right = np.cross([0.0, 0.0, 1.0], back)
    right /= np.linalg.norm(right)
    up = np.cross(back, right)
    places = np.array([label.at for label in scene.frame.labels] + list(scene.frame.edges.points), float)
    places[:, 2] *= scene.exaggeration
    wide, high = plotter.window_size
    tangent = np.tan(np.radians(12.0))  # half of a 24 degree view: enough depth, little distortion
    left, right_edge, low, top = (2.0 * w - 1.0 for w in window)
    focus, distance = places.mean(axis=0), 4.0 * np.ptp(places, axis=0).max()
    for _ in range(25):  # a fixed point: each round centres, then scales what the round before saw
        seen = places - focus
        depth = distance - seen @ back
        across = (seen @ right) / (depth * tangent * wide / high)
        above = (seen @ up) / (depth * tangent)
        reach = distance * tangent
        middle = ((across.max() + across.min()) / 2.0, (above.max() + above.min()) / 2.0)
        focus = focus + right * (middle[0] - (left + right_edge) / 2.0) * reach * wide / high
        focus = focus + up * (middle[1] - (low + top) / 2.0) * reach
        distance *= max(np.ptp(across) / (right_edge - left), np.ptp(above) / (top - low))
    camera = plotter.camera
    camera.parallel_projection = False
    camera.view_angle = 24.0
    camera.focal_point = focus
    camera.position = focus + distance * back
    camera.up = (0.0, 0.0, 1.0)
    plotter.renderer.ResetCameraClippingRange()


def pixels(scene: Scene, *, size: tuple[int, int], scale: float) -> np.ndarray:
    """Draw the whole scene off screen; return (height, width, 3) bytes. ``scale`` multiplies widths and letters."""
    plotter = pv.Plotter(off_screen=True, window_size=list(size), lighting="none")
    try:
        light(plotter)
        draw_frame(plotter, scene, scale=scale)
        actor = draw_plane(plotter, scene, scale=scale)
        draw_isosurface(plotter, scene)
        draw_lines(plotter, scene, scale=scale)
        draw_text(plotter, scene, scale=scale)
        if actor is not None:
            draw_legend(plotter, actor)
        aim(plotter, scene)
        # soft shade where surfaces meet: a wall stands in its slice instead of floating above it
        plotter.enable_ssao(radius=0.04 * scene.width_m, bias=0.002 * scene.width_m, kernel_size=16, blur=True)
        return np.asarray(plotter.screenshot(return_img=True))[..., :3]
    finally:
        plotter.close()


def write(
    plotter: pv.Plotter, name: str, text: str, at: tuple[float, float], look: Letters, *, scale: float = 1.0
) -> None:
    """Write a text at a place of the picture (shares of its size), replacing the one of that name."""
    actor = pv.Text(text)
    actor.GetPositionCoordinate().SetCoordinateSystemToNormalizedViewport()
    actor.SetPosition(*at)
    actor.prop.font_size = int(look.size * scale)
    actor.prop.font_family = "arial"
    actor.prop.SetLineSpacing(1.35)
    actor.prop.color, actor.prop.bold = look.color, look.bold
    actor.prop.justification_horizontal = look.side
    actor.prop.justification_vertical = "top" if look.hanging else "center"
    plotter.add_actor(actor, name=name, reset_camera=False, render=False, pickable=False)


def _put(plotter: pv.Plotter, mesh: pv.DataSet, scene: Scene, *, name: str, **look: Any) -> Any:
    """Add a mesh under its name, replacing the one before, stretched downwards; an empty one removes it."""
    if mesh.n_cells == 0:
        plotter.remove_actor(name, reset_camera=False, render=False)
        return None
    mesh = mesh.scale(
        (1.0, 1.0, scene.exaggeration), inplace=False
    )  # an actor's scale would leave normals as they were
    return plotter.add_mesh(
        mesh, name=name, reset_camera=False, render=False, show_scalar_bar=False, pickable=False, **look
    )
