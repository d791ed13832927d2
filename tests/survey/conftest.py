"""A small good survey to spoil: three lines, dummy line files (this layer never opens them)."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

TOML = """\
[survey]
title = "Marrowby Field"
code = "MBF1"
crs = "EPSG:25832"

[[radar]]
name = "400"
centre_frequency_mhz = 400
antenna_separation_m = 0.16
interval_unit = "ps"

[[visit]]
date = 2026-04-18

[[grid]]
name = "A"
register = "lines.csv"

[ground]
velocity_m_per_ns = 0.085

[slices]
top_m = 0.0
bottom_m = 2.0
thickness_m = 0.10
step_m = 0.05

[recipe]
"""

LINES = """\
grid,line,file,start_x_m,start_y_m,end_x_m,end_y_m
A,1,lines/A_1.sgy,0,0,20,0
A,2,lines/A_2.sgy,20,0.25,0,0.25
A,10,lines/A_10.sgy,0,0.5,20,0.5
"""

CONTROL = """\
point,local_x_m,local_y_m,easting_m,northing_m
P1,0,0,500000,5400000
P2,20,0,500020,5400000
"""


@pytest.fixture
def toml() -> str:
    """A good ``survey.toml``."""
    return TOML


@pytest.fixture
def lines() -> str:
    """A good ``lines.csv``."""
    return LINES


@pytest.fixture
def control() -> str:
    """A good ``control.csv``."""
    return CONTROL


@pytest.fixture
def folder(tmp_path: Path) -> Callable[..., Path]:
    """Write a survey folder; what is not named is good, ``None`` is left out."""

    def write(
        toml: str | bytes | None = TOML,
        lines: str | bytes | None = LINES,
        control: str | bytes | None = None,
        files: tuple[str, ...] = ("lines/A_1.sgy", "lines/A_2.sgy", "lines/A_10.sgy"),
    ) -> Path:
        site = tmp_path / "site"
        site.mkdir(exist_ok=True)
        for name, text in (("survey.toml", toml), ("lines.csv", lines), ("control.csv", control)):
            if text is not None:
                (site / name).write_bytes(text.encode() if isinstance(text, str) else text)
        for name in files:
            (site / name).parent.mkdir(parents=True, exist_ok=True)
            (site / name).write_bytes(b"a line file, not opened here")
        return site

    return write
