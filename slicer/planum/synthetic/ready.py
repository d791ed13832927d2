"""Small scenes with one lesson each, with the grid that shows it. Every function returns (scene, layout)."""

from __future__ import annotations

from planum.synthetic.folder import Layout
from planum.synthetic.modelling import Ground
from planum.synthetic.recording import Faults, Noise
from planum.synthetic.scene import Layer, Scene, Stone, Stones, Wall, box

__all__ = ["one_page", "quiet_wall", "staggered", "stones", "wall_along_lines"]

_CLUTTER = (
    Stones("clutter", box(-1.0, -1.0, 7.0, 5.0), 3000, 0.15, 1.8, 0.0006),
    Layer("plough soil", box(-1.0, -1.0, 7.0, 5.0), 0.28, 0.03, 3.0, 0.04),
)


def one_page() -> tuple[Scene, Layout]:
    """One wall across a grid of 6 m x 4 m at 25 cm: 17 lines of 121 traces, with soil and noise."""
    wall = Wall("wall", ((2.2, -0.5), (3.6, 4.5)), 0.5, 0.45, 0.95)
    return Scene((wall, *_CLUTTER)), Layout()


def quiet_wall() -> tuple[Scene, Layout]:
    """Return the wall of :func:`one_page` alone: no soil, no noise, only the direct air wave."""
    wall = Wall("wall", ((2.2, -0.5), (3.6, 4.5)), 0.5, 0.45, 0.95)
    return Scene((wall,)), Layout(noise=Noise.none())


def stones() -> tuple[Scene, Layout]:
    """Five stones at known places, almost without noise, in lossless ground: they must come to a point."""
    places = ((1.5, 1.0, 0.4), (3.0, 2.0, 0.6), (4.5, 3.0, 0.8), (1.5, 3.0, 1.0), (4.5, 1.0, 0.5))
    found = tuple(Stone(f"stone {i}", x, y, z, 0.01) for i, (x, y, z) in enumerate(places, 1))
    quiet = Noise(white=1e-4, coloured=0.0, coupling=0.0, wow=0.0)
    return Scene(found, Ground(0.09, 0.0)), Layout(noise=quiet)


def wall_along_lines() -> tuple[Scene, Layout]:
    """One wall that runs along the lines for their whole length: a mean along each line would delete it."""
    wall = Wall("wall", ((-0.5, 2.0), (6.5, 2.0)), 0.5, 0.45, 0.95)
    return Scene((wall, *_CLUTTER)), Layout()


def staggered(lag_m: float = 0.1) -> tuple[Scene, Layout]:
    """Return :func:`one_page` walked to and fro with the antenna ``lag_m`` ahead of the count."""
    scene, _ = one_page()
    return scene, Layout(faults=Faults(lag_m=lag_m))
