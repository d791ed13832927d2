"""Lines placed by the positions in their own files."""

from __future__ import annotations

import math
import shutil
from pathlib import Path

import numpy as np
import pytest

from planum.errors import SurveyError
from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.lines.segy_write import write_segy
from planum.pipeline.run import map_site, plan_site
from planum.records import Similarity

TURN = math.radians(30.0)
MAP = Similarity(a=math.cos(TURN), b=math.sin(TURN), e0=566400.0, n0=5934100.0)


def with_headers(scrap: Path, tmp_path: Path, *, frame: Similarity, bend_m: float = 0.0) -> Path:
    """Copy the small survey with map positions in its trace headers; its register is 1 m off along y."""
    site = tmp_path / "site"
    shutil.copytree(scrap, site)
    rows = (site / "lines.csv").read_text(encoding="utf-8").splitlines()
    names = rows[0].split(",")
    moved = [rows[0]]
    for row in rows[1:]:
        cells = dict(zip(names, row.split(","), strict=False))
        path = site / cells["file"]
        data = read_line(path, ReadOptions(interval_unit="ps")).data
        share = np.linspace(0, 1, len(data))
        x = float(cells["start_x_m"]) + share * (float(cells["end_x_m"]) - float(cells["start_x_m"]))
        y = float(cells["start_y_m"]) + share * (float(cells["end_y_m"]) - float(cells["start_y_m"]))
        y = y + bend_m * np.sin(np.pi * share)
        east, north = frame.forward(x, y)
        write_segy(path, data, interval_ns=0.3, x=east, y=north)
        for key in ("start_y_m", "end_y_m"):
            cells[key] = f"{float(cells[key]) + 1.0:.2f}"
        moved.append(",".join(cells.get(n, "") for n in names))
    (site / "lines.csv").write_text("\n".join(moved) + "\n", encoding="utf-8")
    text = (site / "survey.toml").read_text(encoding="utf-8")
    text = text.replace('register = "lines.csv"', 'register = "lines.csv"\npositions = "header"')
    text = text.replace('code = "TEST"', 'code = "TEST"\ncrs = "EPSG:25832"')
    (site / "survey.toml").write_text(text, encoding="utf-8")
    return site


def test_oblique_headers_make_a_frame_of_their_own(scrap: Path, tmp_path: Path, no_isosurface: None) -> None:
    """Lines at 30 degrees on the map: local x along them, and the raster where the headers say, not the register."""
    site = with_headers(scrap, tmp_path, frame=MAP)
    plan = plan_site(site)
    (s,) = plan.sets
    # 1e-3: header coordinates are whole centimetres, 5 mm over 3 m of line is 0.1 degree at worst
    assert abs(s.frame.rotation_deg - 30.0) < 0.2
    assert s.geometry.direction == "x"
    assert s.geometry.n_lines == 5
    assert s.geometry.line_step_m == pytest.approx(0.25, abs=5e-3)
    for e in s.entries:
        east, north = s.frame.forward(*e.start)
        x, y = MAP.inverse(east, north)
        assert min(abs(float(x)), abs(float(x) - 3.0)) < 0.02
        assert abs(float(y) / 0.25 - round(float(y) / 0.25)) * 0.25 < 0.02
        assert -0.02 < float(y) < 1.02  # the register would say 1 to 2
    result = map_site(site)
    west, south, east, north = plan.bounds
    corners = MAP.forward(np.array([0.0, 3.0, 3.0, 0.0]), np.array([0.0, 0.0, 1.0, 1.0]))
    assert west <= corners[0].min() + 1e-6
    assert east >= corners[0].max() - 1e-6
    assert south <= corners[1].min() + 0.01
    assert north >= corners[1].max() - 0.01
    assert result.set_aside == ()


def test_headers_along_the_map_axes_keep_the_map_frame(scrap: Path, tmp_path: Path) -> None:
    """Unturned lines need no frame of their own: local metres are map metres."""
    plan = plan_site(with_headers(scrap, tmp_path, frame=Similarity(e0=566400.0, n0=5934100.0)))
    assert plan.sets[0].frame.rotation_deg == 0.0
    assert plan.sets[0].geometry.along0_m == pytest.approx(566400.0, abs=0.01)


def test_bent_lines_are_told(scrap: Path, tmp_path: Path, no_isosurface: None) -> None:
    """A bow of 15 cm: mapped on its row, and said so."""
    result = map_site(with_headers(scrap, tmp_path, frame=MAP, bend_m=0.15))
    told = [str(w) for w in result.warnings]
    # header coordinates are whole centimetres: 0.14 to 0.16 m may be told
    assert sum("leave the straight line by up to 0.1" in w for w in told) == 5


def test_headers_without_positions_and_control_cannot_be_placed(scrap: Path, tmp_path: Path) -> None:
    """Neither header positions nor control points: refused, with what would help."""
    site = with_headers(scrap, tmp_path, frame=MAP)
    path = sorted((site / "lines").glob("*.sgy"))[1]
    data = read_line(path, ReadOptions(interval_unit="ps")).data
    write_segy(path, data, interval_ns=0.3)
    with pytest.raises(SurveyError, match="the file carries no position, and the grid has no control points"):
        plan_site(site)
