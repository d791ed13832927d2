"""``site.gpkg``: where the lines ran, the grids, what is covered, the control points, and the statement."""

from __future__ import annotations

import sqlite3
import warnings
from collections.abc import Mapping, Sequence
from contextlib import closing
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
import pyogrio
import shapely
from rasterio.features import shapes

from planum.constants import CAUTIONS
from planum.errors import MachineError, Problem
from planum.outputs.raster import Raster
from planum.outputs.writing import aside
from planum.records import Statement
from planum.schema import COVERAGE

__all__ = [
    "STATEMENT_TABLE",
    "ControlShape",
    "GridShape",
    "LineShape",
    "SiteShapes",
    "coverage_frame",
    "write_geopackage",
]

STATEMENT_TABLE = "statement"

Attributes = Mapping[str, str | int | float | bool | None]


@dataclass(frozen=True, eq=False)
class LineShape:
    """One line as walked: ``coords`` (n, 2) east, north in the map frame, m, in walking order."""

    name: str
    set: str
    file: str
    coords: np.ndarray
    attrs: Attributes = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class GridShape:
    """Outline of one grid: ``coords`` (n, 2) corners in the map frame, m; closed by itself."""

    name: str
    coords: np.ndarray
    attrs: Attributes = field(default_factory=dict)


@dataclass(frozen=True)
class ControlShape:
    """One control point in the map frame, m; ``residual_m`` is its distance to the fit, None when it has none."""

    name: str
    east: float
    north: float
    residual_m: float | None = None
    attrs: Attributes = field(default_factory=dict)


@dataclass(frozen=True, eq=False)
class SiteShapes:
    """What is drawn in plan.

    ``crs`` is WKT or a code, empty for a local frame (stored as undefined Cartesian, srs_id -1); ``coverage`` holds the
    classes (y, x) uint8 on ``raster`` and is left out without them.
    """

    crs: str
    lines: Sequence[LineShape]
    grids: Sequence[GridShape] = ()
    control: Sequence[ControlShape] = ()
    coverage: np.ndarray | None = None
    raster: Raster | None = None


def write_geopackage(
    path: Path, shapes: SiteShapes, statements: Sequence[Statement] = (), *, changed: str = "1970-01-01"
) -> None:
    """Write the whole file aside, then put it in place of an earlier one.

    Parameters
    ----------
    shapes
        Become the layers ``lines``, ``grids``, ``control`` and ``coverage``.
    statements
        One row each in the table ``statement``.
    changed
        ISO date written as the time of last change: a date of the survey, not of the clock, so that a repeated run
        gives the same content.

    Raises
    ------
    MachineError
        When the file cannot be written.

    Notes
    -----
    Source: OGC 12-128r17, GeoPackage Encoding Standard 1.3.
    """
    layers: dict[str, tuple[gpd.GeoDataFrame, str]] = {
        "lines": (_line_frame(shapes.lines), "LineString"),
        "grids": (_grid_frame(shapes.grids), "Polygon"),
        "control": (_control_frame(shapes.control), "Point"),
    }
    if shapes.coverage is not None and shapes.raster is not None:
        layers["coverage"] = (coverage_frame(shapes.coverage, shapes.raster), "MultiPolygon")
    with aside(path) as part:
        try:
            for name, (frame, kind) in layers.items():
                _write_layer(part, name, frame, kind=kind, crs=shapes.crs)
            if statements:
                _write_statements(part, statements)
        except pyogrio.errors.DataSourceError as error:
            raise MachineError(Problem(f"cannot write the GeoPackage: {error}", file=str(path))) from error
        _settle(part, changed)


def coverage_frame(coverage: np.ndarray, raster: Raster) -> gpd.GeoDataFrame:
    """Return one multipolygon per coverage class present, with its area; class 0 (not surveyed) is left out."""
    parts: dict[int, list[Any]] = {}
    values = np.ascontiguousarray(coverage, np.uint8)
    for outline, value in shapes(values, mask=values > 0, connectivity=4, transform=raster.transform):
        parts.setdefault(int(value), []).append(shapely.geometry.shape(outline))
    classes = sorted(parts)
    return gpd.GeoDataFrame(
        {
            "class": np.array(classes, np.int32),
            "meaning": [COVERAGE.get(c, f"class {c}").replace("_", " ") for c in classes],
            "area_m2": [float(sum(p.area for p in parts[c])) for c in classes],
        },
        geometry=[shapely.MultiPolygon(parts[c]) for c in classes],
    )


def _line_frame(lines: Sequence[LineShape]) -> gpd.GeoDataFrame:
    rows = [
        {"name": line.name, "set": line.set, "file": line.file, "length_m": _length(line.coords), **line.attrs}
        for line in lines
    ]
    return _frame(rows, ["name", "set", "file", "length_m"], [shapely.LineString(line.coords) for line in lines])


def _length(coords: np.ndarray) -> float:
    return float(np.hypot(*np.diff(np.asarray(coords, float), axis=0).T).sum())


def _grid_frame(grids: Sequence[GridShape]) -> gpd.GeoDataFrame:
    outlines = [shapely.Polygon(grid.coords) for grid in grids]
    rows = [
        {"name": grid.name, "area_m2": outline.area, **grid.attrs}
        for grid, outline in zip(grids, outlines, strict=True)
    ]
    return _frame(rows, ["name", "area_m2"], outlines)


def _control_frame(control: Sequence[ControlShape]) -> gpd.GeoDataFrame:
    rows = [
        {"name": point.name, "east": point.east, "north": point.north, "residual_m": point.residual_m, **point.attrs}
        for point in control
    ]
    columns = ["name", "east", "north", "residual_m"]
    frame = _frame(rows, columns, [shapely.Point(point.east, point.north) for point in control])
    frame["residual_m"] = frame["residual_m"].astype(float)
    return frame


def _frame(rows: list[dict[str, Any]], columns: list[str], geometry: list[Any]) -> gpd.GeoDataFrame:
    table = pd.DataFrame(rows) if rows else pd.DataFrame({name: pd.Series(dtype=object) for name in columns})
    return gpd.GeoDataFrame(table, geometry=geometry)


def _write_layer(path: Path, name: str, frame: gpd.GeoDataFrame, *, kind: str, crs: str) -> None:
    if crs:
        frame = frame.set_crs(crs)
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", "'crs' was not provided")  # a local frame has none, and srs_id -1 says so
        pyogrio.write_dataframe(
            frame,
            path,
            layer=name,
            driver="GPKG",
            geometry_type=kind,
            dataset_options={"VERSION": "1.3"},
            layer_options={
                "DESCRIPTION": " ".join(CAUTIONS),
                "GEOMETRY_NAME": "geom",
                **({} if crs else {"SRID": "-1"}),
            },
            layer_metadata={"cautions": " ".join(CAUTIONS)},
        )


def _write_statements(path: Path, statements: Sequence[Statement]) -> None:
    rows = []
    for statement in statements:
        values = statement.attrs()
        rows.append({**values, "sentence": statement.sentence()})
    pyogrio.write_dataframe(
        pd.DataFrame(rows),
        path,
        layer=STATEMENT_TABLE,
        driver="GPKG",
        dataset_options={"VERSION": "1.3"},
        layer_options={"DESCRIPTION": "What every slice says of itself"},
    )


def _settle(path: Path, changed: str) -> None:
    """Replace the clock's times by the survey's date."""
    with closing(sqlite3.connect(path)) as base:
        base.execute("UPDATE gpkg_contents SET last_change = ?", (f"{changed}T00:00:00.000Z",))
        if base.execute("SELECT 1 FROM sqlite_master WHERE name = 'gpkg_metadata_reference'").fetchone():
            base.execute("UPDATE gpkg_metadata_reference SET timestamp = ?", (f"{changed}T00:00:00.000Z",))
        base.commit()
