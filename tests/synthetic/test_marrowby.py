"""The demo survey is what its maker makes, small enough, and as hard to read as it says."""

from __future__ import annotations

import json
import runpy
from pathlib import Path

import numpy as np
import pytest

HOME = Path(__file__).parents[2] / "grids" / "marrowby"


@pytest.fixture(scope="module")
def maker():
    return runpy.run_path(str(HOME / "make.py"))


def test_folder_is_at_most_15_megabytes():
    """What a release carries along."""
    kept = [p for p in (HOME / "lines", HOME / "truth") for p in p.iterdir()] + [
        p for p in HOME.iterdir() if p.is_file()
    ]
    assert sum(p.stat().st_size for p in kept) <= 15_000_000


def test_maker_makes_the_committed_files(maker, tmp_path):
    """Two lines, one of them in pieces with all that is written beside the lines.

    Bytes agree on the machine type the files were made on; elsewhere a transform may round differently and turn a
    few samples by one count, so samples may differ by 1 in one of a thousand.
    """
    maker["make"](tmp_path, only=(11, 40))
    made = sorted(p.relative_to(tmp_path) for p in tmp_path.rglob("*") if p.is_file())
    assert [p.name for p in made if p.suffix == ".sgy"] == ["A_011a.sgy", "A_011b.sgy", "A_040.sgy"]
    for name in made:
        new, old = (tmp_path / name).read_bytes(), (HOME / name).read_bytes()
        if name.suffix != ".sgy":
            assert new.decode() == old.decode(), name
            continue
        assert len(new) == len(old)
        assert new[:3600] == old[:3600]
        kind = np.dtype([("head", "V240"), ("words", ">i2", (160,))])
        a, b = (np.frombuffer(raw, kind, offset=3600) for raw in (new, old))
        assert (a["head"] == b["head"]).all()
        away = np.abs(a["words"].astype(int) - b["words"])
        assert away.max() <= 1
        assert np.mean(away > 0) <= 1e-3


def test_every_registered_file_is_there_and_no_other():
    """64 lines, one in two pieces; line 38 was never recorded."""
    rows = [r.split(",") for r in (HOME / "lines.csv").read_text().splitlines()[1:]]
    assert sorted(r[2] for r in rows) == sorted(f"lines/{p.name}" for p in (HOME / "lines").iterdir())
    assert sorted({int(r[1]) for r in rows}) == [n for n in range(1, 66) if n != 38]


def test_readme_table_agrees_with_the_truth():
    """Every feature's top and base stands in the README as in ``truth/features.geojson``."""
    text = (HOME / "README.md").read_text()
    rows = {
        c[1].strip(): c for c in (line.split("|") for line in text.splitlines() if line.startswith("|")) if len(c) == 6
    }
    for feature in json.loads((HOME / "truth" / "features.geojson").read_text())["features"]:
        facts = feature["properties"]
        if facts["kind"] == "stone":
            assert f"{facts['top_m']:.2f}" in rows["stones 1 to 6"][2]
        else:
            assert [float(c) for c in rows[facts["name"]][2:4]] == [facts["top_m"], facts["base_m"]]


def test_walls_stand_out_by_8_to_12_decibel(maker):
    """By the separate float64 chain at the true velocity: readable, and not a cartoon."""
    contrast, auc = maker["measure"](HOME)
    assert 8.0 <= contrast <= 12.0
    assert auc >= 0.95
