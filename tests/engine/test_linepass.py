"""One row through the chain: the same as the public steps by hand, whatever runs beside it."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest
import xarray as xr

from planum import schema
from planum.conditioning.background import background
from planum.conditioning.bandpass import bandpass
from planum.conditioning.dewow import dewow
from planum.conditioning.gain import gain
from planum.cube.assemble import Piece, assemble_row
from planum.engine.linepass import _picture, condition, row_cube, run_row
from planum.envelope import envelope
from planum.errors import LineError
from planum.migration.stolt import stolt
from planum.records import FLAG_NONE, CubeGeometry, Estimate, LineEntry, SetPlan, Similarity, StepSpec, Velocity

N_ALONG, N_TIME, STEP_NS = 61, 120, 0.3
WINDOWS = ((8.0, 10.0), (10.05, 13.31), (20.0, 20.7))

SETTINGS = {
    "dewow": {"window_ns": 5.1},
    "gain": {"power": 1.0, "absorption_db_per_ns": 0.2, "start_ns": 4.0, "stop_ns": 30.0},
    "bandpass": {"low_stop_ghz": 0.05, "low_pass_ghz": 0.15, "high_pass_ghz": 0.8, "high_stop_ghz": 1.1},
    "background": {"scope": "line", "traces": None, "at_m": None, "window_m": 1.0},
    "migrate": {
        "velocity_m_per_ns": 0.09,
        "max_dip_deg": 60.0,
        "dip_taper_deg": 10.0,
        "edge_taper_m": 0.5,
        "highest_ghz": 1.2,
    },
    "envelope": {},
}


def plan_of(names: tuple[str, ...], *, n_along: int = N_ALONG, last_trace: int | None = None) -> SetPlan:
    """Return the plan of a set of three rows; row 1 may end early, row 2 was never recorded."""
    geometry = CubeGeometry(
        direction="x",
        line0_m=1.0,
        line_step_m=0.25,
        n_lines=3,
        along0_m=0.0,
        along_step_m=0.05,
        n_along=n_along,
        time0_ns=-1.5,
        time_step_ns=STEP_NS,
        n_time=N_TIME,
    )
    entries = []
    for row in range(2):
        last = n_along - 1 if row == 0 or last_trace is None else last_trace
        entries.append(
            LineEntry(
                key=f"A/x/{row}/0",
                set="A/x",
                grid="A",
                line=str(row + 1),
                row=row,
                file=f"lines/{row}.sgy",
                first_trace=0,
                last_trace=last,
                start=(0.0, 1.0 + 0.25 * row),
                end=(0.05 * last, 1.0 + 0.25 * row),
                zero_ns=((0, 4.37),),
                gain=1.0 + 0.1 * row,
            )
        )
    return SetPlan(
        name="A/x",
        grid="A",
        radar="400",
        visit="",
        geometry=geometry,
        centre_frequency_ghz=0.4,
        separation_m=0.16,
        zero=Estimate(value=4.37, error=0.3, unit="ns", origin="measured", method="test"),
        velocity=Velocity.constant(0.09, 0.001, origin="given"),
        chain=tuple(StepSpec(name=n, version=1, params=SETTINGS[n]) for n in names),
        windows_ns=WINDOWS,
        entries=tuple(entries),
        frame=Similarity(),
    )


def pieces_of(plan: SetPlan, row: int) -> list[Piece]:
    """Return int16 traces of noise with a strong early wave, as a recorder gives them."""
    rng = np.random.default_rng([7, row])
    data = 300.0 * rng.standard_normal((plan.geometry.n_along, 150))
    data[:, 12:20] += 9000.0
    whole = np.rint(data).astype(np.int16)
    return [Piece(whole[: e.last_trace + 1], STEP_NS, e) for e in plan.entries if e.row == row]


def mean_between(trace: np.ndarray, times: np.ndarray, low: float, high: float) -> float:
    """Mean of the straight lines between samples, by the trapezium rule over all corners: exact for them."""
    corners = np.concatenate([[low], times[(times > low) & (times < high)], [high]])
    return float(np.trapezoid(np.interp(corners, times, trace), corners) / (high - low))


ALL = ("dewow", "gain", "bandpass", "background", "migrate", "envelope")


def test_row_is_the_public_steps_in_turn() -> None:
    """Placing, every step and the windows called one by one; the mean by the trapezium rule in float64."""
    plan = plan_of(ALL)
    pieces = pieces_of(plan, 1)
    placed = assemble_row(pieces, plan.geometry, row=1)
    g = plan.geometry
    cube = schema.cube(
        placed.amplitude[None], line=g.lines()[1:2], along=g.along(), time=g.times(), flag=placed.flag[None]
    )
    cube = dewow(cube, **SETTINGS["dewow"])
    cube = gain(cube, **SETTINGS["gain"])
    cube = bandpass(cube, **SETTINGS["bandpass"])
    cube = background(cube, scope="line", window_m=1.0)
    cube = envelope(stolt(cube, **SETTINGS["migrate"]))
    want = [[mean_between(t, g.times(), *w) for t in cube.values[0].astype(float)] for w in WINDOWS]
    strip = run_row(pieces, plan, 1)
    assert strip.row == 1
    assert strip.values.dtype == np.float32
    assert strip.values.shape == (len(WINDOWS), N_ALONG)
    assert strip.section is None
    # The strip is rounded to float32 once, after sums in float64: half a unit in the last of 24 bits, doubled.
    np.testing.assert_allclose(strip.values, want, rtol=1.2e-7)


def test_condition_stops_where_the_chain_stops() -> None:
    """The first two steps of a chain give what those two functions give."""
    plan = plan_of(ALL)
    cube = row_cube(pieces_of(plan, 0), plan, 0)
    before = cube.copy(deep=True)
    half = condition(cube, plan.chain[:2])
    xr.testing.assert_equal(half, gain(dewow(cube, **SETTINGS["dewow"]), **SETTINGS["gain"]))
    xr.testing.assert_identical(cube, before)
    assert cube.dims == schema.CUBE_DIMS
    assert float(cube["line"][0]) == 1.0


def test_place_without_recording_holds_nan() -> None:
    """A line that ends at trace 40 of 61 has values up to its reach of 0.75 trace spacings and NaN beyond."""
    plan = plan_of(ALL, last_trace=40)
    strip = run_row(pieces_of(plan, 1), plan, 1)
    assert np.isfinite(strip.values[:, :41]).all()
    assert np.isnan(strip.values[:, 41:]).all()
    np.testing.assert_array_equal((strip.flag & FLAG_NONE) != 0, np.arange(N_ALONG) > 40)


def test_row_without_any_piece_is_all_nan() -> None:
    """Nothing recorded is nothing shown, not zeros."""
    plan = plan_of(ALL)
    strip = run_row([], plan, 2)
    assert np.isnan(strip.values).all()
    assert (strip.flag & FLAG_NONE).all()


def test_piece_shorter_than_its_entry_is_an_error_of_the_line() -> None:
    """A file that lost traces since the census is refused, not stretched."""
    plan = plan_of(ALL)
    short = [p._replace(data=p.data[:50]) for p in pieces_of(plan, 0)]
    with pytest.raises(LineError, match=r"line 1 has \(50, 150\) traces and samples, its row wants traces 0 to 60"):
        run_row(short, plan, 0)


def test_section_pictures_are_grey_values() -> None:
    """Raw, processed and migrated as uint8 (along, time): positive dark, negative light, both ends used."""
    plan = plan_of(ALL)
    pieces = pieces_of(plan, 0)
    with_pictures = run_row(pieces, plan, 0, section=True)
    assert with_pictures.section is not None
    assert list(with_pictures.section) == ["raw", "processed", "migrated"]
    raw = row_cube(pieces, plan, 0)
    migrated = condition(raw, plan.chain[:-1]).values[0]
    for picture in with_pictures.section.values():
        assert picture.dtype == np.uint8
        assert picture.shape == (N_ALONG, N_TIME)
    grey = with_pictures.section["migrated"]
    # 98 % of the values below the direct wave lie inside the stretch, so both ends occur and about 2 % lie beyond it.
    direct_ns = plan.separation_m / plan.velocity.value + 1.5 / plan.centre_frequency_ghz
    below = grey[:, plan.geometry.times() >= direct_ns]
    assert below.min() <= 1
    assert below.max() == 255
    assert 0.005 < np.mean((below <= 1) | (below >= 255)) < 0.03
    strong = np.abs(migrated) > 0.1 * np.abs(migrated).max()
    assert (grey[strong & (migrated > 0)] < 128).all()
    assert (grey[strong & (migrated < 0)] >= 128).all()
    np.testing.assert_array_equal(with_pictures.values, run_row(pieces, plan, 0).values)


def test_ground_is_not_lost_beside_the_direct_wave() -> None:
    """A direct wave 1000 times the ground leaves the ground its own stretch, and gaps do not count."""
    ground = np.random.default_rng(1).normal(size=(60, 200)).astype(np.float32)
    ground[:, :20] *= 1000.0
    ground[:45] = 0.0
    grey = _picture(ground, 20)
    # beyond 2.33 standard deviations, both signs, lie 2 % of normal noise (normal distribution)
    beyond = np.mean((grey[45:, 20:] <= 1) | (grey[45:, 20:] >= 255))
    assert beyond == pytest.approx(0.02, abs=0.008)
    assert grey[45:, 20:].std() > 40
    assert (grey[:45] == 128).all()


def test_section_of_nothing_is_plain_grey() -> None:
    """A row without amplitude is drawn at the value of zero, without a division by zero."""
    plan = plan_of(ALL)
    strip = run_row([], plan, 2, section=True)
    assert strip.section is not None
    assert all((picture == 128).all() for picture in strip.section.values())


def test_unmigrated_row_has_no_migrated_picture() -> None:
    """A recipe without migration must not show a picture under that name."""
    plan = plan_of(("dewow", "bandpass", "envelope"))
    strip = run_row(pieces_of(plan, 0), plan, 0, section=True)
    assert strip.section is not None
    assert list(strip.section) == ["raw", "processed"]


def test_long_row_is_thinned_for_the_picture_only() -> None:
    """3500 traces: at most 1600 picture columns, evenly taken; the strip keeps every place."""
    plan = plan_of(("dewow", "envelope"), n_along=3500)
    strip = run_row(pieces_of(plan, 0), plan, 0, section=True)
    assert strip.values.shape == (len(WINDOWS), 3500)
    assert strip.section is not None
    assert 800 < strip.section["raw"].shape[0] <= 1600


def test_bytes_do_not_depend_on_threads() -> None:
    """Eight rows, twice: one thread and three give the same bytes of strips, flags and pictures."""
    plan = plan_of(ALL, last_trace=50)
    jobs = [(pieces_of(plan, row % 2), row % 2) for row in range(8)]

    def all_bytes(workers: int) -> list[bytes]:
        with ThreadPoolExecutor(workers) as executor:
            strips = list(executor.map(lambda job: run_row(job[0], plan, job[1], section=True), jobs))
        return [
            b"".join([s.values.tobytes(), s.flag.tobytes(), *(p.tobytes() for p in (s.section or {}).values())])
            for s in strips
        ]

    one = all_bytes(1)
    assert one == all_bytes(3)
    assert one[0] != one[1]
