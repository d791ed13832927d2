"""What lies in the ground: features with plan, top and base depth, turned into point scatterers.

Plan coordinates are metres in the scene's frame (the first grid's local frame unless a layout says otherwise), depths
metres below the surface. ``strength`` of a surface is its reflectivity per square metre, so that the answer does not
depend on how finely it is cut; ``strength`` of a stone is its reflectivity itself.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any, Protocol

import numpy as np
import shapely
from shapely.geometry import LineString, Polygon, mapping
from shapely.geometry.base import BaseGeometry
from shapely.ops import linemerge, substring, unary_union

from planum.synthetic.modelling import Ground

__all__ = [
    "Ditch",
    "Feature",
    "Floor",
    "Gravel",
    "Layer",
    "Pipe",
    "Pit",
    "Roots",
    "Scatterers",
    "Scene",
    "Stone",
    "Stones",
    "Wall",
    "box",
    "disc",
]

Points = tuple[tuple[float, float], ...]


@dataclass(frozen=True, eq=False)
class Scatterers:
    """Point scatterers: ``points`` (n, 3) x, y, depth in m; ``reflectivity`` (n), amplitude at 1 m without loss."""

    points: np.ndarray
    reflectivity: np.ndarray

    @classmethod
    def joined(cls, parts: list[Scatterers]) -> Scatterers:
        """Return all parts as one; none gives an empty set."""
        if not parts:
            return cls(np.zeros((0, 3)), np.zeros(0))
        return cls(np.concatenate([p.points for p in parts]), np.concatenate([p.reflectivity for p in parts]))


class Feature(Protocol):
    """Anything that reflects: where it lies, and the scatterers it is made of."""

    @property
    def name(self) -> str: ...  # noqa: D102
    @property
    def kind(self) -> str: ...  # noqa: D102

    def plan(self) -> BaseGeometry | None:
        """Outline in plan; None for what has no place of its own (clutter)."""

    def depths(self) -> tuple[float, float]:
        """Top and base depth, m."""

    def scatterers(self, rng: np.random.Generator) -> Scatterers:
        """Return the point scatterers."""


def box(x0: float, y0: float, x1: float, y1: float) -> Points:
    """Corners of an upright rectangle, m."""
    return ((x0, y0), (x1, y0), (x1, y1), (x0, y1))


def disc(x: float, y: float, radius_m: float, corners: int = 24) -> Points:
    """Corners of a regular polygon round (x, y), m."""
    turn = 2.0 * np.pi * np.arange(corners) / corners
    return tuple((float(x + radius_m * np.cos(t)), float(y + radius_m * np.sin(t))) for t in turn)


def _lattice(area: BaseGeometry, step: float, rng: np.random.Generator) -> np.ndarray:
    """Return (n, 2) places inside ``area``: one in every step × step cell, anywhere in it."""
    west, south, east, north = area.bounds
    x, y = np.meshgrid(np.arange(west, east, step), np.arange(south, north, step))
    places = np.column_stack([x.ravel(), y.ravel()]) + step * rng.random((x.size, 2))
    return places[shapely.contains_xy(area, places[:, 0], places[:, 1])]


def _scatterers(xy: np.ndarray, z: np.ndarray, q: np.ndarray) -> Scatterers:
    """Join places and depths; nothing lies above 2 cm."""
    return Scatterers(np.column_stack([xy, np.maximum(z, 0.02)]), q)


def _smooth_field(xy: np.ndarray, reach_m: float, rng: np.random.Generator, waves: int = 24) -> np.ndarray:
    """Return a smooth field of unit variance at places (n, 2): random plane waves no shorter than ``reach_m``."""
    k = 2.0 * np.pi / (reach_m * rng.uniform(1.0, 4.0, waves))
    turn, phase = rng.uniform(0.0, 2.0 * np.pi, (2, waves))
    total = np.zeros(len(xy))
    for ki, ti, pi in zip(k, turn, phase, strict=True):
        total += np.cos(ki * (xy[:, 0] * np.cos(ti) + xy[:, 1] * np.sin(ti)) + pi)
    return total * np.sqrt(2.0 / waves)


@dataclass(frozen=True)
class Wall:
    """A masonry wall: a rough top face and stones down to the base.

    Parameters
    ----------
    centre_line : points
        Polyline in m; first = last makes it closed.
    width_m, top_m, base_m : float
    strength : float
        Reflectivity of the top face, 1/m².
    roughness : float
        Share by which single stones differ (standard deviation).
    body : float
        Reflectivity of the stones below the top, as a share of the top's; random in sign.
    openings : pairs of float
        Doorways: from and to along the centre line, m.
    """

    name: str
    centre_line: Points
    width_m: float = 0.55
    top_m: float = 0.45
    base_m: float = 1.0
    strength: float = 1.0
    roughness: float = 0.5
    body: float = 0.5
    openings: tuple[tuple[float, float], ...] = ()
    kind: str = "wall"

    def centre_lines(self) -> list[LineString]:
        """Pieces of the centre line left between the openings."""
        whole = LineString(self.centre_line)
        edges = [0.0, *(e for pair in sorted(self.openings) for e in pair), whole.length]
        spans = [(a, b) for a, b in zip(edges[::2], edges[1::2], strict=True) if b > a]
        pieces = [LineString(substring(whole, a, b).coords) for a, b in spans]
        if whole.is_ring and len(pieces) > 1:
            joined = linemerge(pieces)
            return list(getattr(joined, "geoms", [joined]))
        return pieces

    def plan(self) -> BaseGeometry:
        """Outline with the openings left out."""
        return unary_union(
            [
                (Polygon(p).exterior if p.is_ring else p).buffer(self.width_m / 2, cap_style="flat", join_style="mitre")
                for p in self.centre_lines()
            ]
        )

    def depths(self) -> tuple[float, float]:
        """Top and base, m."""
        return self.top_m, self.base_m

    def scatterers(self, rng: np.random.Generator) -> Scatterers:
        """Top face at 5 cm, then courses of stones every 11 cm."""
        step, course = 0.05, 0.11
        area = self.plan()
        xy = _lattice(area, step, rng)
        q = self.strength * step**2 * (1.0 + self.roughness * rng.standard_normal(len(xy)))
        parts = [_scatterers(xy, self.top_m + 0.015 * np.abs(rng.standard_normal(len(xy))), q)]
        for level in np.arange(self.top_m + course, self.base_m, course):
            xy = _lattice(area, 2 * step, rng)
            z = level + course * (rng.random(len(xy)) - 0.5)
            q = self.body * self.strength * (2 * step) ** 2 * rng.standard_normal(len(xy))
            parts.append(_scatterers(xy, np.minimum(z, self.base_m), q))
        return Scatterers.joined(parts)


@dataclass(frozen=True)
class Floor:
    """A level surface: floor, hearth, paving, the bottom of a fill."""

    name: str
    outline: Points
    depth_m: float
    thickness_m: float = 0.08
    strength: float = 0.5
    roughness: float = 0.5
    kind: str = "floor"

    def plan(self) -> BaseGeometry:
        """Outline, m."""
        return Polygon(self.outline)

    def depths(self) -> tuple[float, float]:
        """Top and base, m."""
        return self.depth_m, self.depth_m + self.thickness_m

    def scatterers(self, rng: np.random.Generator) -> Scatterers:
        """Cut the top face into pieces of 5 cm."""
        xy = _lattice(self.plan(), 0.05, rng)
        q = self.strength * 0.05**2 * (1.0 + self.roughness * rng.standard_normal(len(xy)))
        return _scatterers(xy, self.depth_m + 0.01 * rng.standard_normal(len(xy)), q)


@dataclass(frozen=True)
class _Outlined:
    """A feature known by its outline between two depths."""

    name: str
    outline: Points
    top_m: float
    base_m: float

    def plan(self) -> Polygon:
        """Outline, m."""
        return Polygon(self.outline)

    def depths(self) -> tuple[float, float]:
        """Top and base, m."""
        return self.top_m, self.base_m


@dataclass(frozen=True)
class Pit(_Outlined):
    """A cut with sloping sides: the interface falls from ``top_m`` at the rim to ``base_m`` at the middle."""

    strength: float = 0.2
    kind: str = "pit"

    def scatterers(self, rng: np.random.Generator) -> Scatterers:
        """Cut the interface into pieces of 6 cm; the profile is a half cosine of the distance from the rim."""
        area = self.plan()
        xy = _lattice(area, 0.06, rng)
        rim = shapely.distance(area.exterior, shapely.points(xy))
        share = np.clip(rim / max(float(rim.max(initial=0.0)), 1e-9), 0.0, 1.0)
        z = self.top_m + (self.base_m - self.top_m) * np.sin(np.pi / 2 * share)
        q = self.strength * 0.06**2 * (1.0 + 0.5 * rng.standard_normal(len(xy)))
        return _scatterers(xy, z, q)


@dataclass(frozen=True)
class Ditch:
    """A long cut with sloping sides: like a pit, drawn by centre line and width."""

    name: str
    centre_line: Points
    width_m: float
    top_m: float
    base_m: float
    strength: float = 0.2
    kind: str = "ditch"

    def plan(self) -> BaseGeometry:
        """Outline, m."""
        return LineString(self.centre_line).buffer(self.width_m / 2, cap_style="flat", join_style="round")

    def depths(self) -> tuple[float, float]:
        """Top and base, m."""
        return self.top_m, self.base_m

    def scatterers(self, rng: np.random.Generator) -> Scatterers:
        """Cut the interface into pieces of 6 cm; the profile is a parabola across."""
        xy = _lattice(self.plan(), 0.06, rng)
        away = shapely.distance(LineString(self.centre_line), shapely.points(xy)) / (self.width_m / 2)
        z = self.base_m - (self.base_m - self.top_m) * np.clip(away, 0.0, 1.0) ** 2
        q = self.strength * 0.06**2 * (1.0 + 0.5 * rng.standard_normal(len(xy)))
        return _scatterers(xy, z + 0.01 * rng.standard_normal(len(xy)), q)


@dataclass(frozen=True)
class Pipe:
    """A straight or bent pipe; ``strength`` is reflectivity per metre, ``depth_m`` its crown."""

    name: str
    centre_line: Points
    depth_m: float
    diameter_m: float = 0.1
    strength: float = 0.05
    kind: str = "pipe"

    def plan(self) -> BaseGeometry:
        """Outline, m."""
        return LineString(self.centre_line).buffer(self.diameter_m / 2, cap_style="flat")

    def depths(self) -> tuple[float, float]:
        """Crown and invert, m."""
        return self.depth_m, self.depth_m + self.diameter_m

    def scatterers(self, rng: np.random.Generator) -> Scatterers:  # noqa: ARG002  (the protocol's)
        """One piece every 2 cm; smooth, so nothing is random."""
        line = LineString(self.centre_line)
        n = max(round(line.length / 0.02), 1)
        at = (np.arange(n) + 0.5) * line.length / n
        xy = shapely.get_coordinates(shapely.line_interpolate_point(line, at))
        return _scatterers(xy, np.full(n, self.depth_m), np.full(n, self.strength * line.length / n))


@dataclass(frozen=True)
class Stone:
    """One point scatterer."""

    name: str
    x_m: float
    y_m: float
    depth_m: float
    strength: float = 0.004
    kind: str = "stone"

    def plan(self) -> BaseGeometry:
        """Draw a disc of 10 cm."""
        return Polygon(disc(self.x_m, self.y_m, 0.05, 8))

    def depths(self) -> tuple[float, float]:
        """Depth of the point, m, twice."""
        return self.depth_m, self.depth_m

    def scatterers(self, rng: np.random.Generator) -> Scatterers:  # noqa: ARG002  (the protocol's)
        """One."""
        return Scatterers(np.array([[self.x_m, self.y_m, self.depth_m]]), np.array([self.strength]))


@dataclass(frozen=True)
class Stones:
    """Many small reflectors anywhere in a volume: clutter. Strengths are normal about 0, so half are negative."""

    name: str
    outline: Points
    number: int
    top_m: float
    base_m: float
    strength: float = 0.001
    kind: str = "clutter"

    def plan(self) -> None:
        """No place of its own."""
        return

    def depths(self) -> tuple[float, float]:
        """Top and base of the volume, m."""
        return self.top_m, self.base_m

    def scatterers(self, rng: np.random.Generator) -> Scatterers:
        """Uniform in the bounding box of the outline, then cut to it."""
        area = Polygon(self.outline)
        west, south, east, north = area.bounds
        xy = rng.uniform((west, south), (east, north), (self.number, 2))
        z, q = rng.uniform(self.top_m, self.base_m, self.number), self.strength * rng.standard_normal(self.number)
        inside = shapely.contains_xy(area, xy[:, 0], xy[:, 1])
        return _scatterers(xy[inside], z[inside], q[inside])


@dataclass(frozen=True)
class Gravel(_Outlined):
    """A patch of pebbles: dense, random in sign and depth. ``strength`` is one pebble's, pebbles lie 8 cm apart."""

    strength: float = 0.001
    kind: str = "gravel"

    def scatterers(self, rng: np.random.Generator) -> Scatterers:
        """One pebble per 8 cm cell, anywhere in it."""
        xy = _lattice(self.plan(), 0.08, rng)
        z = rng.uniform(self.top_m, self.base_m, len(xy))
        return _scatterers(xy, z, self.strength * rng.standard_normal(len(xy)))


@dataclass(frozen=True)
class Roots:
    """Roots that wander outward and downward from a stump and thin out; ``strength`` per metre at the stump."""

    name: str
    x_m: float
    y_m: float
    reach_m: float = 2.5
    number: int = 7
    top_m: float = 0.12
    base_m: float = 0.45
    strength: float = 0.01
    kind: str = "roots"

    def plan(self) -> BaseGeometry:
        """Draw the circle the roots stay in."""
        return Polygon(disc(self.x_m, self.y_m, self.reach_m))

    def depths(self) -> tuple[float, float]:
        """Top and base, m."""
        return self.top_m, self.base_m

    def scatterers(self, rng: np.random.Generator) -> Scatterers:
        """Random walks in steps of 4 cm."""
        n = round(self.reach_m / 0.04)
        gone = np.arange(1, n + 1) / n
        parts = []
        for start in 2.0 * np.pi * (np.arange(self.number) + rng.random(self.number)) / self.number:
            turn = start + np.cumsum(0.12 * rng.standard_normal(n))
            xy = np.column_stack([self.x_m + 0.04 * np.cumsum(np.cos(turn)), self.y_m + 0.04 * np.cumsum(np.sin(turn))])
            z = self.top_m + (self.base_m - self.top_m) * gone * rng.uniform(0.4, 1.0)
            parts.append(_scatterers(xy, z, self.strength * 0.04 * (1.0 - 0.8 * gone)))
        return Scatterers.joined(parts)


@dataclass(frozen=True)
class Layer:
    """An undulating boundary over an area, as between plough soil and subsoil; partly mirror, partly rough."""

    name: str
    outline: Points
    depth_m: float
    undulation_m: float = 0.03
    reach_m: float = 3.0
    strength: float = 0.1
    roughness: float = 1.0
    kind: str = "layer"

    def plan(self) -> None:
        """Everywhere, so no place of its own."""
        return

    def depths(self) -> tuple[float, float]:
        """Range of the boundary, m (two standard deviations each way)."""
        return self.depth_m - 2 * self.undulation_m, self.depth_m + 2 * self.undulation_m

    def scatterers(self, rng: np.random.Generator) -> Scatterers:
        """One piece per 6 cm cell."""
        xy = _lattice(Polygon(self.outline), 0.06, rng)
        z = self.depth_m + self.undulation_m * _smooth_field(xy, self.reach_m, rng)
        q = self.strength * 0.06**2 * (1.0 + self.roughness * rng.standard_normal(len(xy)))
        return _scatterers(xy, z, q)


@dataclass(frozen=True)
class Scene:
    """Features in a uniform ground."""

    features: tuple[Feature, ...] = ()
    ground: Ground = field(default_factory=Ground)

    def scatterers(self, seed: int) -> Scatterers:
        """Return all scatterers; feature i draws from its own stream (seed, 1, i), so adding one moves no other."""
        return Scatterers.joined(
            [f.scatterers(np.random.default_rng([seed, 1, i])) for i, f in enumerate(self.features)]
        )

    def walls(self) -> list[Wall]:
        """Return the walls among the features."""
        return [f for f in self.features if isinstance(f, Wall)]

    def truth(self) -> dict[str, Any]:
        """Return plans and depths as a GeoJSON-shaped mapping in metres of the scene's frame."""
        found = []
        for f in self.features:
            plan, (top, base) = f.plan(), f.depths()
            if plan is None:
                continue
            facts: dict[str, Any] = {"name": f.name, "kind": f.kind, "top_m": round(top, 4), "base_m": round(base, 4)}
            if isinstance(f, Wall):
                facts["width_m"] = f.width_m
                facts["centre_lines"] = [_rounded(p.coords) for p in f.centre_lines()]
            geometry = mapping(shapely.set_precision(plan, 1e-4))
            found.append({"type": "Feature", "properties": facts, "geometry": geometry})
        return {"type": "FeatureCollection", "frame": "grid-local metres, not degrees", "features": found}


def _rounded(coords: Any) -> list[list[float]]:
    return [[round(float(x), 4), round(float(y), 4)] for x, y in coords]
