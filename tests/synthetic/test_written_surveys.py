"""Survey folders: readable by others, the same every time, with the faults they were asked for."""

from __future__ import annotations

import csv
import datetime as dt
import json
import math
from dataclasses import replace

import numpy as np
import pytest
import segyio

from planum.lines.reading import read_line
from planum.lines.recording import ReadOptions
from planum.records import Similarity
from planum.survey.folder import read_survey
from planum.synthetic import ready
from planum.synthetic.folder import Layout, Site, passes, record, write_survey
from planum.synthetic.recording import Faults, Noise, Radar
from planum.synthetic.scene import Scene, Stone

SMALL = Layout(length_m=1.0, width_m=0.75, radar=Radar(n_samples=64), noise=Noise())
SCENE = Scene((Stone("stone", 0.5, 0.25, 0.4, 0.01),))


def register(folder):
    with (folder / "lines.csv").open(newline="") as stream:
        return list(csv.DictReader(stream))


def bytes_of(folder):
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


def test_files_hold_the_recorded_numbers_for_segyio(tmp_path):
    """An independent reader finds the samples, their count and the interval in ps."""
    written = write_survey(tmp_path, SCENE, SMALL, seed=3)
    walked = list(passes(SMALL, seed=3))
    assert len(written.files) == len(walked) == 4
    scatterers = SCENE.scatterers(3)
    for path, one in zip(written.files, walked, strict=True):
        with segyio.open(path, ignore_geometry=True) as f:
            np.testing.assert_array_equal(f.trace.raw[:], record(SMALL, one, SCENE.ground, scatterers, seed=(3, 0)))
            assert f.bin[segyio.BinField.Interval] == 300
            assert f.bin[segyio.BinField.Format] == 3
            assert f.header[0][segyio.TraceField.FieldRecord] == one.line


@pytest.mark.parametrize(("code", "step"), [(1, 1e-6), (2, 0), (5, 0)])
def test_other_sample_formats_for_segyio(tmp_path, code, step):
    """IBM floats to 24 bits less the leading nibble (1e-6), whole numbers and IEEE floats exactly."""
    layout = replace(SMALL, radar=replace(SMALL.radar, sample_format=code))
    written = write_survey(tmp_path, SCENE, layout, seed=3)
    expected = record(layout, next(iter(passes(layout, seed=3))), SCENE.ground, SCENE.scatterers(3), seed=(3, 0))
    with segyio.open(written.files[0], ignore_geometry=True) as f:
        np.testing.assert_allclose(f.trace.raw[:], expected, rtol=step, atol=0)


def test_the_program_reads_what_was_written(tmp_path):
    """Survey and lines pass every check of the border; nothing is warned of."""
    site = Site(crs="EPSG:25832", frame=Similarity(e0=5e5, n0=5.8e6), velocity_m_per_ns=0.09, slices={"bottom_m": 1.0})
    written = write_survey(tmp_path, SCENE, SMALL, site=site)
    survey = read_survey(tmp_path)
    assert survey.warnings == ()
    assert [r.file for r in survey.rows] == [p.relative_to(tmp_path).as_posix() for p in written.files]
    assert survey.config.ground.velocity_m_per_ns == 0.09
    assert survey.config.radar[0].antenna_separation_m == 0.16
    assert len(survey.control) == 4
    found = read_line(written.files[1], ReadOptions(interval_unit="ps", centre_frequency_ghz=0.4))
    assert found.data.shape == (21, 64)
    assert found.interval_ns == pytest.approx(0.3, rel=1e-12)


def test_same_seed_same_bytes_other_seed_other_bytes(tmp_path):
    """Every file, byte for byte."""
    for name, seed in (("a", 5), ("b", 5), ("c", 6)):
        write_survey(tmp_path / name, SCENE, SMALL, seed=seed)
    a, b, c = (bytes_of(tmp_path / n) for n in "abc")
    assert a == b
    assert a.keys() == c.keys()
    assert all(a[k] != c[k] for k in a if k.endswith(".sgy"))


def test_one_line_alone_is_the_line_of_the_whole(tmp_path):
    """``only`` saves time, nothing else."""
    write_survey(tmp_path / "all", SCENE, SMALL, seed=5)
    write_survey(tmp_path / "one", SCENE, SMALL, seed=5, only=(3,))
    whole, one = bytes_of(tmp_path / "all"), bytes_of(tmp_path / "one")
    assert [k for k in one if k.endswith(".sgy")] == ["lines/A_003.sgy"]
    assert all(whole[k] == v for k, v in one.items())


def test_zigzag_lines_turn_and_one_way_lines_do_not(tmp_path):
    """Start and end are in walking order."""
    write_survey(tmp_path / "z", SCENE, SMALL)
    write_survey(tmp_path / "o", SCENE, replace(SMALL, walk="one-way", along="y", origin_m=(2.0, 3.0)))
    z, o = register(tmp_path / "z"), register(tmp_path / "o")
    assert [(r["start_x_m"], r["end_x_m"]) for r in z] == [("0", "1"), ("1", "0")] * 2
    assert [(r["start_x_m"], r["start_y_m"], r["end_x_m"], r["end_y_m"]) for r in o] == [
        (x, "3", x, "4") for x in ("2", "2.25", "2.5", "2.75")
    ]


def test_faults_of_the_register(tmp_path):
    """Missing, in pieces, walked backwards, written down the wrong way round."""
    faults = Faults(missing=(1,), pieces={2: ((0.0, 0.3), (0.6, 1.0))}, backwards=(3,), misregistered=(4,))
    layout = replace(SMALL, faults=faults)
    write_survey(tmp_path, SCENE, layout)
    rows = [(r["line"], r["file"], r["start_x_m"], r["end_x_m"]) for r in register(tmp_path)]
    assert rows == [
        ("2", "lines/A_002a.sgy", "0.3", "0"),
        ("2", "lines/A_002b.sgy", "1", "0.6"),
        ("3", "lines/A_003.sgy", "1", "0"),
        ("4", "lines/A_004.sgy", "0", "1"),
    ]
    assert not (tmp_path / "lines" / "A_001.sgy").exists()
    truly = {(p.line, p.piece): (p.positions[0, 0], p.positions[-1, 0]) for p in passes(layout)}
    assert truly[4, 0] == (1.0, 0.0)
    assert truly[3, 0] == (1.0, 0.0)
    with segyio.open(tmp_path / "lines" / "A_002b.sgy", ignore_geometry=True) as f:
        assert f.tracecount == 9


def test_faults_of_the_wheel():
    """A lag moves every line in its walking direction; a scale stretches from the start."""
    moved = list(passes(replace(SMALL, faults=Faults(lag_m=0.1, odometer_scale={2: 1.02}))))
    np.testing.assert_allclose(moved[0].positions[[0, -1], 0], [0.1, 1.1], atol=1e-12)
    np.testing.assert_allclose(moved[1].positions[[0, -1], 0], [0.9, 1.0 - 1.02 - 0.1], atol=1e-12)
    np.testing.assert_allclose(moved[1].positions[:, 1], 0.25, atol=1e-12)


def test_faults_of_the_clock_and_the_amplifier():
    """Drift runs through from line to line, jumps stay, gains are as stated."""
    faults = Faults(zero_drift_ns=0.3, zero_jumps_ns={3: 1.0}, line_gain_db={2: 6.0})
    walked = list(passes(replace(SMALL, faults=faults)))
    np.testing.assert_allclose([p.zero_ns[0] for p in walked], [6.0, 6.1, 7.2, 7.3], atol=1e-9)
    np.testing.assert_allclose([p.zero_ns[-1] for p in walked], [6.1, 6.2, 7.3, 7.4], atol=1e-9)
    assert [20 * math.log10(p.gain) for p in walked] == pytest.approx([0, 6, 0, 0], abs=1e-12)
    random = [20 * math.log10(p.gain) for p in passes(Layout(width_m=100.0, faults=Faults(gain_db=0.5)), seed=2)]
    assert np.std(random) == pytest.approx(0.5, rel=0.15)  # 401 lines: 3.5 % (1 sigma)


def test_lag_moves_a_stone_apart_on_neighbouring_lines():
    """Seen end to end: the apex stands 2 x 0.1 m apart on two lines walked to and fro over the same place."""
    scene = Scene((Stone("stone", 3.0, 0.005, 0.4, 0.05),))
    layout = Layout(width_m=0.01, line_spacing_m=0.01, noise=Noise.none(), faults=Faults(lag_m=0.1))
    apex = []
    for one in passes(layout):
        data = record(layout, one, scene.ground, scene.scatterers(0), seed=(0, 0)).astype(float)
        counted = np.linspace(0, 6, 121) if one.line % 2 else np.linspace(6, 0, 121)
        late = np.abs(data - np.median(data, axis=0))[:, 40:].max(axis=1)
        apex.append(np.sum(counted * late**2) / np.sum(late**2))
    # antenna ahead of the count: the stone comes 0.1 m too early on each; the energy's centre, to a trace fifth
    assert apex == pytest.approx([2.9, 3.1], abs=0.01)


def test_control_points_carry_frame_and_scatter(tmp_path):
    """Corners through the true similarity, off by the stated scatter and a centimetre's rounding."""
    turn = math.radians(17)
    frame = Similarity(a=math.cos(turn), b=math.sin(turn), e0=566412.0, n0=5934187.0)
    write_survey(tmp_path, SCENE, SMALL, site=Site(crs="EPSG:25832", frame=frame, control_scatter_m=0.012))
    with (tmp_path / "control.csv").open(newline="") as stream:
        rows = [{k: float(v) for k, v in r.items() if k.endswith("_m")} for r in csv.DictReader(stream)]
    off = []
    for r in rows:
        east, north = frame.forward(r["local_x_m"], r["local_y_m"])
        off += [r["easting_m"] - east, r["northing_m"] - north]
    assert 0.001 < np.abs(off).max() < 4 * 0.012 + 0.005


def test_two_grids_two_radars_two_days(tmp_path):
    """The second grid is turned in the scene; its lines pass over the same stone."""
    other = replace(
        SMALL,
        grid="B",
        radar=Radar(name="200", centre_frequency_mhz=200.0),
        frame=Similarity(a=0.0, b=1.0, e0=0.75),
        visit=dt.date(2026, 4, 19),
    )
    write_survey(tmp_path, SCENE, (SMALL, other))
    survey = read_survey(tmp_path)
    assert {r.grid: (r.radar, r.visit) for r in survey.rows} == {"A": ("400", "2026-04-18"), "B": ("200", "2026-04-19")}
    first = next(iter(passes(other, number=1))).positions
    np.testing.assert_allclose(first[[0, -1]], [[0.75, 0.0], [0.75, 1.0]], atol=1e-12)
    facts = json.loads((tmp_path / "truth" / "survey.json").read_text())
    assert {line["grid"] for line in facts["lines"]} == {"A", "B"}


def test_positions_in_the_headers_are_local_centimetres(tmp_path):
    """Group coordinates with scalar -100, as an independent reader sees them."""
    written = write_survey(tmp_path, SCENE, replace(SMALL, headers="local"))
    with segyio.open(written.files[1], ignore_geometry=True) as f:
        x = f.attributes(segyio.TraceField.GroupX)[:]
        assert f.header[0][segyio.TraceField.SourceGroupScalar] == -100
    np.testing.assert_array_equal(x, np.arange(100, -1, -5))


def test_grids_of_one_name_are_refused(tmp_path):
    """File names would collide."""
    with pytest.raises(ValueError, match="names must differ"):
        write_survey(tmp_path, SCENE, (SMALL, SMALL))


@pytest.mark.parametrize(
    "scene_of", [ready.one_page, ready.quiet_wall, ready.stones, ready.wall_along_lines, ready.staggered]
)
def test_ready_scenes_show_their_feature(scene_of):
    """One line over it: the strongest late answer is at the feature's time, not the noise's."""
    scene, layout = scene_of()
    feature = scene.features[0]
    line = 5 if feature.kind == "stone" else 9
    one = next(p for p in passes(layout, seed=1) if p.line == line)
    data = record(layout, one, scene.ground, scene.scatterers(1), seed=(1, 0)).astype(float)
    if scene_of is not ready.wall_along_lines:  # there the wall is in every trace
        data -= np.median(data, axis=0)
    x, y = feature.plan().centroid.x, feature.plan().centroid.y
    near = int(np.argmin(np.hypot(*(one.positions - (x, y)).T)))
    top = feature.depths()[0]
    arrival = 6.0 + 2 * math.hypot(top, 0.08) / scene.ground.velocity_m_per_ns
    first = round((arrival - 3.0) / 0.3)
    window = np.abs(data[near, first : first + 60])
    # half a period of the wavelet (1.25 ns) round the arrival; rubble and the plane's slower tail blur by as much
    assert (first + np.argmax(window)) * 0.3 == pytest.approx(arrival, abs=2.5)
    far = np.abs(data[np.hypot(*(one.positions - (x, y)).T) > 1.5, first : first + 60])
    if scene_of is not ready.wall_along_lines:
        assert window.max() > 2 * np.median(far.max(axis=1))
