"""Writes a survey folder as a crew would bring it, and beside it the truth only an invented ground has."""

from __future__ import annotations

import csv
import datetime as dt
import json
from collections.abc import Collection, Iterator, Sequence
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Any, Literal

import numpy as np

from planum.lines import segy_write
from planum.records import Similarity
from planum.synthetic.modelling import Ground
from planum.synthetic.recording import Faults, Noise, Pass, Radar, record_pass
from planum.synthetic.scene import Scatterers, Scene

__all__ = ["Layout", "Site", "Written", "passes", "record", "write_survey"]


@dataclass(frozen=True)
class Layout:
    """One grid: its size, how it was walked, with what, and where it lies in the scene.

    Parameters
    ----------
    grid : str
        Name of the grid; also part of the file names.
    length_m, width_m : float
        Along and across the lines. There is a line at 0 and one every ``line_spacing_m``.
    along : {"x", "y"}
        Local axis the lines run along; they advance along the other.
    walk : {"zigzag", "one-way"}
    origin_m : (float, float)
        Local place of the first line's low end.
    frame : Similarity
        Local metres to scene metres; the identity unless given.
    ground : Ground, optional
        Soil on the day of this grid; the scene's unless given.
    visit : date, optional
        Day of this grid; the site's date unless given.
    headers : {"none", "local"}
        Whether the files carry positions.
    """

    grid: str = "A"
    length_m: float = 6.0
    width_m: float = 4.0
    line_spacing_m: float = 0.25
    trace_spacing_m: float = 0.05
    along: Literal["x", "y"] = "x"
    walk: Literal["zigzag", "one-way"] = "zigzag"
    origin_m: tuple[float, float] = (0.0, 0.0)
    frame: Similarity = field(default_factory=Similarity)
    radar: Radar = field(default_factory=Radar)
    noise: Noise = field(default_factory=Noise)
    faults: Faults = field(default_factory=Faults)
    ground: Ground | None = None
    visit: dt.date | None = None
    headers: Literal["none", "local"] = "none"

    @property
    def n_lines(self) -> int:
        """Lines of the plan, missing ones counted."""
        return round(self.width_m / self.line_spacing_m) + 1

    def place(self, along_m: float, line: int) -> tuple[float, float]:
        """Local x, y of a place on line ``line`` (from 1), ``along_m`` from its low end."""
        across = (line - 1) * self.line_spacing_m
        dx, dy = (along_m, across) if self.along == "x" else (across, along_m)
        return self.origin_m[0] + dx, self.origin_m[1] + dy

    def corners(self) -> tuple[tuple[float, float], ...]:
        """Local corners, counter-clockwise."""
        dx, dy = (self.length_m, self.width_m) if self.along == "x" else (self.width_m, self.length_m)
        x, y = self.origin_m
        return ((x, y), (x + dx, y), (x + dx, y + dy), (x, y + dy))


@dataclass(frozen=True)
class Site:
    """What the survey says of itself as a whole.

    Parameters
    ----------
    crs : str, optional
        With it, ``frame`` takes scene metres to map metres and control points are written.
    control_scatter_m : float
        Standard deviation of each control coordinate, m; written to the centimetre.
    slices : mapping
        Keys of the ``[slices]`` table, as typed.
    velocity_m_per_ns : float, optional
        Written into ``[ground]`` when given.
    """

    title: str = "Invented survey"
    code: str = "TEST"
    crs: str | None = None
    frame: Similarity = field(default_factory=Similarity)
    control_scatter_m: float = 0.0
    date: dt.date = dt.date(2026, 4, 18)
    conditions: str = "short grass, dry"
    slices: dict[str, float] = field(default_factory=dict)
    velocity_m_per_ns: float | None = None
    about: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Written:
    """What was written: the folder, its line files in register order, the truth as in ``truth/*``."""

    folder: Path
    files: tuple[Path, ...]
    features: dict[str, Any]
    facts: dict[str, Any]


def write_survey(
    folder: Path,
    scene: Scene,
    layout: Layout | Sequence[Layout],
    *,
    seed: int = 0,
    site: Site | None = None,
    only: Collection[int] | None = None,
) -> Written:
    """Write survey.toml, lines.csv, control.csv, lines/*.sgy and truth/ into ``folder``.

    Parameters
    ----------
    folder : Path
        Made when missing; files of the same names are replaced.
    scene : Scene
    layout : Layout or sequence of Layout
        One per grid; names must differ.
    seed : int
        Every scatterer, line and control point draws from a stream of its own below this seed: the same call writes
        the same bytes on one machine and numpy version.
    only : line numbers, optional
        Record only these lines; registers and truth are complete all the same.

    Returns
    -------
    Written

    Raises
    ------
    ValueError
        When two grids have one name.
    LineError
        When a line does not fit its file format.
    """
    site = site or Site()
    layouts = (layout,) if isinstance(layout, Layout) else tuple(layout)
    names = [a.grid for a in layouts]
    if len(set(names)) < len(names):
        raise ValueError(f"grids are called {names}; names must differ")
    folder = Path(folder)
    for part in ("lines", "truth"):
        (folder / part).mkdir(parents=True, exist_ok=True)
    scatterers = scene.scatterers(seed)
    rows, files, facts = [], [], []
    for number, one in enumerate(layouts):
        for walked in passes(one, seed=seed, number=number):
            row = _row(one, walked)
            path = folder / row["file"]
            rows.append(row)
            files.append(path)
            facts.append(_facts(one, walked))
            if only is None or walked.line in only:
                data = record(one, walked, scene.ground, scatterers, seed=(seed, number))
                _write_line(path, one, walked, data, site)
    _write_table(folder / "lines.csv", rows)
    if site.crs:
        _write_table(folder / "control.csv", _control(layouts, site, seed))
    (folder / "survey.toml").write_text(_toml(layouts, site), encoding="utf-8", newline="\n")
    features = scene.truth()
    survey_facts = _survey_facts(scene, layouts, site, facts)
    _write_json(folder / "truth" / "features.geojson", features)
    _write_json(folder / "truth" / "survey.json", survey_facts)
    return Written(folder, tuple(files), features, survey_facts)


def passes(layout: Layout, *, seed: int = 0, number: int = 0) -> Iterator[Pass]:
    """Yield every walked piece of a grid (the ``number``-th of its survey), with the layout's faults applied."""
    faults = layout.faults
    for line in range(1, layout.n_lines + 1):
        if line in faults.missing:
            continue
        draw = np.random.default_rng([seed, 2, number, line])
        gain_db = faults.gain_db * draw.standard_normal() + faults.line_gain_db.get(line, 0.0)
        share = (line - 1) / max(layout.n_lines - 1, 1)
        for piece, (low, high) in enumerate(faults.pieces.get(line, ((0.0, layout.length_m),))):
            n = round((high - low) / layout.trace_spacing_m) + 1
            start, end = (high, low) if _down(layout, line) else (low, high)
            counted = np.linspace(0.0, abs(end - start), n)
            way = 1.0 if end > start else -1.0
            true = start + way * (counted * faults.scale(line) + faults.lag_m)
            local = np.array([layout.place(float(a), line) for a in true])
            x, y = layout.frame.forward(local[:, 0], local[:, 1])
            within = counted / max(layout.length_m, 1e-9) / max(layout.n_lines - 1, 1)
            zero = layout.radar.time_zero_ns + faults.jump_ns(line) + faults.zero_drift_ns * (share + within)
            yield Pass(line, piece, np.column_stack([x, y]), zero, float(10.0 ** (gain_db / 20.0)))


def record(
    layout: Layout, walked: Pass, ground: Ground, scatterers: Scatterers, *, seed: tuple[int, int]
) -> np.ndarray:
    """Return the samples (trace, sample) of one pass; ``seed`` is (survey's seed, number of the grid)."""
    return record_pass(
        walked,
        scatterers,
        ground=layout.ground or ground,
        radar=layout.radar,
        noise=layout.noise,
        faults=layout.faults,
        rng=np.random.default_rng([seed[0], 3, seed[1], walked.line, walked.piece]),
    )


def _down(layout: Layout, line: int) -> bool:
    """Whether a line was walked towards smaller coordinates."""
    return (layout.walk == "zigzag" and line % 2 == 0) != (line in layout.faults.backwards)


def _ends(layout: Layout, walked: Pass) -> tuple[tuple[float, float], tuple[float, float]]:
    """Local start and end of a piece as the crew wrote them down."""
    pieces = layout.faults.pieces.get(walked.line, ((0.0, layout.length_m),))
    low, high = pieces[walked.piece]
    flip = _down(layout, walked.line) != (walked.line in layout.faults.misregistered)
    start, end = (high, low) if flip else (low, high)
    return layout.place(start, walked.line), layout.place(end, walked.line)


def _row(layout: Layout, walked: Pass) -> dict[str, Any]:
    start, end = _ends(layout, walked)
    several = walked.line in layout.faults.pieces and len(layout.faults.pieces[walked.line]) > 1
    letter = "abcdefghijklmnopqrstuvwxyz"[walked.piece] if several else ""
    texts = [f"{v:.3f}".rstrip("0").rstrip(".") for v in (*start, *end)]
    return {
        "grid": layout.grid,
        "line": str(walked.line),
        "file": f"lines/{layout.grid}_{walked.line:03d}{letter}.sgy",
        **dict(zip(("start_x_m", "start_y_m", "end_x_m", "end_y_m"), texts, strict=True)),
        "note": f"piece {walked.piece + 1}" if several else "",
    }


def _facts(layout: Layout, walked: Pass) -> dict[str, Any]:
    """Return what only an invented survey knows of a piece; places in scene metres."""
    return {
        "grid": layout.grid,
        "line": walked.line,
        "piece": walked.piece,
        "start_m": [round(float(v), 5) for v in walked.positions[0]],
        "end_m": [round(float(v), 5) for v in walked.positions[-1]],
        "zero_ns": [round(float(walked.zero_ns[0]), 5), round(float(walked.zero_ns[-1]), 5)],
        "gain_db": round(float(20.0 * np.log10(walked.gain)), 5),
    }


def _survey_facts(scene: Scene, layouts: Sequence[Layout], site: Site, lines: list[dict[str, Any]]) -> dict[str, Any]:
    grids = {
        a.grid: {
            "ground": asdict(a.ground or scene.ground),
            "radar": asdict(a.radar),
            "local_to_scene": a.frame.model_dump(include={"a", "b", "e0", "n0", "mirrored"}),
        }
        for a in layouts
    }
    frame = site.frame.model_dump(include={"a", "b", "e0", "n0", "mirrored"}) if site.crs else None
    return {"grids": grids, "scene_to_map": frame, "crs": site.crs, "lines": lines}


def _write_line(path: Path, layout: Layout, walked: Pass, data: np.ndarray, site: Site) -> None:
    x = y = None
    if layout.headers == "local":
        start, end = np.array(_ends(layout, walked))
        share = np.linspace(0.0, 1.0, len(data))[:, None]
        x, y = (start + share * (end - start)).T
    segy_write.write_segy(
        path,
        data,
        interval_ns=layout.radar.interval_ns,
        interval_unit="ps",
        sample_format=layout.radar.sample_format,
        text=(
            f"{site.title}: an invented survey"[:76],
            f"GRID {layout.grid} LINE {walked.line} PIECE {walked.piece + 1}",
        ),
        x=x,
        y=y,
        field_record=walked.line,
    )


def _control(layouts: Sequence[Layout], site: Site, seed: int) -> list[dict[str, Any]]:
    """Four corners of every grid, scattered as a careful survey would and rounded to the centimetre."""
    rows = []
    for number, layout in enumerate(layouts):
        draw = np.random.default_rng([seed, 4, number])
        for corner, (x, y) in enumerate(layout.corners(), start=1):
            east, north = site.frame.forward(*layout.frame.forward(x, y))
            off = site.control_scatter_m * draw.standard_normal(2)
            rows.append(
                {
                    "point": f"{layout.grid}{corner}",
                    "local_x_m": f"{x:.2f}",
                    "local_y_m": f"{y:.2f}",
                    "easting_m": f"{east + off[0]:.2f}",
                    "northing_m": f"{north + off[1]:.2f}",
                    "grid": layout.grid,
                }
            )
    return rows


def _toml(layouts: Sequence[Layout], site: Site) -> str:
    """Return the survey file's text; strings are written as JSON strings, which are valid TOML."""
    text = json.dumps
    out = [f"# {line}" for line in site.about]
    out += ["[survey]", f"title = {text(site.title)}", f"code = {text(site.code)}"]
    out += [f"crs = {text(site.crs)}"] if site.crs else []
    radars = {a.radar.name: a.radar for a in layouts}
    for radar in radars.values():
        out += ["", "[[radar]]"] + ([f"name = {text(radar.name)}"] if len(radars) > 1 else [])
        out += [f"centre_frequency_mhz = {radar.centre_frequency_mhz:g}"]
        out += [f"antenna_separation_m = {radar.aerial.separation_m:g}"]
        out += ['interval_unit = "ps"               # what the interval field of the files holds']
        out += ['recorded_gain = "none"']
    visits = sorted({a.visit or site.date for a in layouts})
    for day in visits:
        out += ["", "[[visit]]", f"date = {day.isoformat()}", f"conditions = {text(site.conditions)}"]
    for a in layouts:
        out += ["", "[[grid]]", f"name = {text(a.grid)}", 'register = "lines.csv"']
        out += [f"radar = {text(a.radar.name)}"] if len(radars) > 1 else []
        out += [f"visit = {(a.visit or site.date).isoformat()}"] if len(visits) > 1 else []
    if site.velocity_m_per_ns is not None:
        out += ["", "[ground]", f"velocity_m_per_ns = {site.velocity_m_per_ns:g}"]
    if site.slices:
        out += ["", "[slices]", *(f"{k} = {float(v)!r}" for k, v in site.slices.items())]
    return "\n".join(out) + "\n"


def _write_table(path: Path, rows: Sequence[dict[str, Any]]) -> None:
    with path.open("w", encoding="utf-8", newline="") as stream:
        table = csv.DictWriter(stream, list(rows[0]), lineterminator="\n")
        table.writeheader()
        table.writerows(rows)


def _write_json(path: Path, content: dict[str, Any]) -> None:
    path.write_text(json.dumps(content, indent=1, allow_nan=False) + "\n", encoding="utf-8", newline="\n")
