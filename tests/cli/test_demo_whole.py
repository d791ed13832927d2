"""The README's first command and an interrupted run, as a person starts them: real processes, nothing replaced."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
import rasterio

from planum.synthetic.folder import write_survey
from planum.synthetic.ready import one_page

PLANUM = [sys.executable, "-m", "planum_cli"]


def test_demo_maps_and_says_where_to_look(tmp_path: Path) -> None:
    """`planum demo` ends with 0, its files are there, placed on the map, and the next step is named."""
    done = subprocess.run([*PLANUM, "demo"], cwd=tmp_path, capture_output=True, text=True, timeout=600)
    assert done.returncode == 0, done.stderr
    out = tmp_path / "marrowby-demo" / "out"
    assert "report.html" in done.stderr
    record = json.loads((out / "run.json").read_text(encoding="utf-8"))
    assert all((out / name).is_file() for name in record["files"])
    velocity = record["plan"]["sets"][0]["velocity"]
    # the ground of the demo has 0.0875 m/ns; the run states its own error
    assert abs(velocity["v_m_per_ns"][0] - 0.0875) <= 2 * velocity["covariance"][0][0] ** 0.5
    assert (out / "pictures" / "isosurface.png").stat().st_size > 50_000
    with rasterio.open(out / "slices" / "MBF1_d045-055cm.tif") as raster:
        assert raster.crs.to_epsg() == 25832
        assert raster.bounds.left == pytest.approx(566407.6, abs=1.0)
    again = subprocess.run([*PLANUM, "demo"], cwd=tmp_path, capture_output=True, text=True, timeout=600)
    assert again.returncode == 0
    assert "migrating" not in again.stderr


@pytest.mark.skipif(os.name == "nt", reason="Windows has no SIGINT to send to one process")
def test_interrupt_ends_with_130_and_leaves_the_former_run(tmp_path: Path) -> None:
    """Ctrl-C in the middle of a run: one sentence, 130, and every file of the former run as it was."""
    site = tmp_path / "site"
    scene, layout = one_page()
    write_survey(site, scene, layout, seed=1)
    first = subprocess.run([*PLANUM, "map", str(site)], capture_output=True, text=True, timeout=600)
    assert first.returncode == 0, first.stderr
    before = {p: p.stat().st_mtime_ns for p in (site / "out").rglob("*")}
    text = (site / "survey.toml").read_text(encoding="utf-8")
    (site / "survey.toml").write_text(text.replace("Invented survey", "Another title"), encoding="utf-8")
    process = subprocess.Popen([*PLANUM, "map", str(site)], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    assert process.stderr is not None
    for line in process.stderr:  # until it is at work
        if "writing rasters" in line:
            break
    time.sleep(0.2)
    process.send_signal(signal.SIGINT)
    _, said = process.communicate(timeout=120)
    assert process.returncode == 130
    assert "Traceback" not in said
    assert {p: p.stat().st_mtime_ns for p in (site / "out").rglob("*")} == before
