"""Numbers learned from all lines of a set: who shares a time zero, who is too loud, what stands in for a velocity."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr

from planum import schema
from planum.constants import SPEED_OF_LIGHT
from planum.cube.assemble import assemble_row
from planum.lines.recording import ReadOptions
from planum.pipeline.census import Source
from planum.pipeline.estimate import (
    Line,
    balance,
    given_velocity,
    scanned_velocity,
    set_facts,
    time_zero,
    typical_traces,
)
from planum.records import CubeGeometry, Facts, LineEntry, Velocity
from planum.survey.config import Radar
from planum.survey.register import RegisterRow
from planum.synthetic.modelling import ricker

RADAR = Radar(name="400", centre_frequency_mhz=400.0, antenna_separation_m=0.16)
AIR_NS = 0.16 / SPEED_OF_LIGHT
STEP_NS, N_SAMPLES = 0.3, 160


def facts(**changed: Any) -> Facts:
    """Facts of a clean line; a test says what is different."""
    plain: dict[str, Any] = {
        "file_id": "0" * 64,
        "n_traces": 121,
        "n_samples": N_SAMPLES,
        "interval_ns": STEP_NS,
        "interval_origin": "test",
        "dtype": "int16",
        "full_scale": 32767.0,
        "largest": 20000.0,
        "zero_pick_ns": 6.0 + AIR_NS,
        "zero_spread_ns": 0.01,
        "zero_clipped": False,
        "typical": (0.0,) * N_SAMPLES,
        "envelope": (10.0,) * N_SAMPLES,
        "spectrum": (1.0,) * 129,
        "spectrum_step_ghz": 0.0125,
        "noise": 10.0,
        "direct": 20000.0,
    }
    return Facts(**(plain | changed))


def line(number: int, **changed: Any) -> Line:
    row = RegisterRow("A", str(number), f"lines/{number}.sgy", (0.0, 0.25 * number), (6.0, 0.25 * number))
    return Line(row, Source(Path(row.file), row.file, ReadOptions()), facts(**changed))


def picked(*picks: float, **changed: Any) -> list[Line]:
    """Lines whose direct wave is picked so many ns later than 6 ns plus the way through air."""
    return [line(i, zero_pick_ns=6.0 + AIR_NS + p, **changed) for i, p in enumerate(picks)]


# --- time zero ---


def test_time_zero_is_the_direct_wave_less_its_way_through_air() -> None:
    """Emission, not arrival: separation / c earlier than the envelope maximum; the median of the set."""
    found = time_zero(picked(-0.02, 0.01, 0.0, 0.03, -0.01), RADAR)
    zero = found.estimate
    assert zero.value == pytest.approx(6.0, abs=1e-4)  # rounded to four digits
    assert zero.origin == "measured"
    assert zero.n == 5
    assert zero.evidence == ""
    # A quarter of the distance between air and ground wave at 0.1 m/ns, and the mean's scatter (0.017 / sqrt 5).
    scatter = float(np.std([-0.02, 0.01, 0.0, 0.03, -0.01])) / math.sqrt(5)
    assert zero.error == pytest.approx(math.hypot(0.25 * (0.16 / 0.1 - AIR_NS), scatter), abs=1e-4)
    assert found.zeros == (zero.value,) * 5
    assert found.problems == ()


def test_clean_lines_share_one_zero_and_a_shifted_one_has_its_own() -> None:
    """Half a nanosecond is a restart of the instrument; a few hundredths are its noise."""
    found = time_zero(picked(0.0, 0.04, 0.5, -0.05, 0.02, -0.03, 0.01), RADAR)
    own, zero = found.zeros, found.estimate
    assert own[2] == pytest.approx(6.5, abs=1e-4)
    assert own[:2] + own[3:] == (zero.value,) * 6
    assert zero.value == pytest.approx(6.01, abs=1e-4)


def test_another_wave_is_no_drift() -> None:
    """A line whose first strong wave is more than half a period (1.25 ns) off keeps the set's zero, and is told."""
    found = time_zero(picked(0.0, 0.0, -6.0, 0.0, 0.01), RADAR)
    assert found.zeros == (found.estimate.value,) * 5
    (problem,) = found.problems
    assert problem.came == "the first strong wave comes at 0.00 ns, on the other lines at 6.00 ns"
    assert problem.line == "2"


@pytest.mark.parametrize("fault", [{"zero_pick_ns": 0.4}, {"direct": 3.0, "noise": 1.0}])
def test_no_direct_wave_is_no_certainty(fault: dict[str, float]) -> None:
    """A pick at the start of the record, or hardly above noise: half a period (1.25 ns) more error, and a warning."""
    lines = [line(i, **{"zero_pick_ns": 6.0 + AIR_NS, **fault}) for i in range(4)]
    found = time_zero(lines, RADAR)
    assert found.estimate.error == pytest.approx(math.hypot(0.25 * (0.16 / 0.1 - AIR_NS), 1.25), abs=1e-4)
    assert "no direct wave can be told" in found.problems[0].came
    assert found.problems[0].key == f"radar[{RADAR.name}].time_zero_ns"


def test_noisy_pick_does_not_move_a_line() -> None:
    """A pick that scatters by 1.5 ns along 121 traces is known to 1.5 / sqrt(6) = 0.6 ns: 0.5 ns off means nothing."""
    lines = [*picked(0.0, 0.01, 0.0, 0.0), line(9, zero_pick_ns=6.5 + AIR_NS, zero_spread_ns=1.5)]
    found = time_zero(lines, RADAR)
    assert found.zeros == (found.estimate.value,) * 5


def test_clipped_direct_waves_raise_the_error() -> None:
    """From half of the lines on, by a quarter period (0.625 ns at 400 MHz), as squares; fewer change nothing."""
    clean = time_zero(picked(0.0, 0.0, 0.0, 0.0), RADAR).estimate
    half = time_zero(picked(0.0, 0.0) + picked(0.0, 0.0, zero_clipped=True), RADAR).estimate
    one = time_zero(picked(0.0, 0.0, 0.0) + picked(0.0, zero_clipped=True), RADAR).estimate
    assert half.error == pytest.approx(math.hypot(clean.error, 0.625), abs=1e-4)
    assert half.evidence == "direct wave clipped on 2 of 4 lines"
    assert one.error == clean.error
    assert "1 of 4" in one.evidence


def test_typed_time_zero_wins() -> None:
    """Whatever the picks say, all lines get what the survey says."""
    typed = RADAR.model_copy(update={"time_zero_ns": 7.25})
    found = time_zero(picked(0.0, 0.5, -1.0), typed)
    assert found.zeros == (7.25,) * 3
    assert (found.estimate.value, found.estimate.origin) == (7.25, "given")


# --- balance ---


def db(value: float) -> float:
    return float(10 ** (value / 20.0))


def test_balance_brings_direct_waves_to_the_median() -> None:
    """2 dB too quiet is raised by 2 dB; more than 3 dB by 3; less than 0.1 dB is left alone."""
    levels = [0.0, 0.0, 0.0, -2.0, +1.5, -6.0, +9.0, -0.05, +0.09]
    gains = balance([line(i, direct=20000.0 * db(v)) for i, v in enumerate(levels)])
    got = [20 * math.log10(g) for g in gains]
    assert got == pytest.approx([0, 0, 0, 2.0, -1.5, 3.0, -3.0, 0, 0], abs=1e-4)  # gains are kept to six digits


def test_clipped_lines_are_balanced_by_noise() -> None:
    """A clipped wave has one height whatever the gain; late noise follows the gain."""
    gains = balance(
        [line(i, direct=32767.0, zero_clipped=i < 2, noise=10.0 * db(v)) for i, v in enumerate([0, 0, 0, 2])]
    )
    assert [20 * math.log10(g) for g in gains] == pytest.approx([0, 0, 0, -2.0], abs=1e-4)


def test_two_lines_or_silent_ones_are_not_balanced() -> None:
    """A median of two decides nothing, and silence has no level."""
    assert balance([line(0), line(1, direct=100.0)]) == [1.0, 1.0]
    silent = [line(i, direct=0.0) for i in range(4)]
    assert balance(silent) == [1.0] * 4
    assert balance([*silent[:1], *(line(i) for i in range(3))]) == [1.0] * 4


# --- typical traces ---

GEOMETRY = CubeGeometry(
    direction="x",
    line0_m=0.0,
    line_step_m=0.25,
    n_lines=4,
    along0_m=0.0,
    along_step_m=0.05,
    n_along=41,
    time0_ns=-3.0,
    time_step_ns=STEP_NS,
    n_time=140,
)


def entry(row: int, *, zero_ns: float, gain: float = 1.0, **changed: Any) -> LineEntry:
    plain: dict[str, Any] = {
        "key": f"A/x/{row}/0",
        "set": "A/x",
        "grid": "A",
        "line": str(row + 1),
        "row": row,
        "file": f"{row}.sgy",
        "first_trace": 0,
        "last_trace": 40,
        "start": (0.0, 0.25 * row),
        "end": (2.0, 0.25 * row),
        "zero_ns": ((0, zero_ns),),
        "gain": gain,
    }
    return LineEntry(**(plain | changed))


@pytest.mark.parametrize("step_ns", [STEP_NS, 0.25])
def test_typical_traces_are_shifted_as_traces_are(step_ns: float) -> None:
    """Lines made of nothing but their typical trace: taking it off leaves less than a thousandth, at any time zero.

    Also where the cube's time step is not the recording's, on a line walked backwards and on one with a gain.
    """
    geometry = GEOMETRY.model_copy(update={"time_step_ns": step_ns})
    time_ns = STEP_NS * np.arange(N_SAMPLES)
    entries, kept, cubes = [], [], []
    for row, zero in enumerate((6.0, 6.137, 5.71, 6.5)):
        trace = (20000 * ricker(time_ns - zero - AIR_NS, 0.4) + 900 * ricker(time_ns - 15.0 - row, 0.3)).astype(
            np.float32
        )
        ends = {"start": (2.0, 0.25 * row), "end": (0.0, 0.25 * row)} if row == 1 else {}
        entries.append(entry(row, zero_ns=zero, gain=1.0 + 0.2 * row, **ends))
        kept.append(facts(typical=tuple(map(float, trace))))
        cubes.append(assemble_row([(np.tile(trace, (41, 1)), STEP_NS, entries[-1])], geometry, row=row).amplitude)
    typical = typical_traces(entries, kept, geometry)
    schema.check_cube(typical.assign_coords(along=[0.0]))
    assert typical.shape == (4, 1, geometry.n_time)
    np.testing.assert_allclose(typical["line"], GEOMETRY.lines(), atol=1e-5)
    for row in range(4):
        left = cubes[row] - typical.values[row]
        assert np.abs(left).max() < 1e-3 * np.abs(cubes[row]).max()


def test_typical_traces_are_sorted_across() -> None:
    """The steps that learn want ascending lines, whatever order the register has, and two pieces of one row apart."""
    entries = [entry(2, zero_ns=6.0), entry(0, zero_ns=6.0), entry(2, zero_ns=6.0, key="second"), entry(1, zero_ns=6.0)]
    wave = ricker(STEP_NS * np.arange(N_SAMPLES) - 20.0, 0.4)
    kept = [facts(typical=tuple(map(float, (i + 1) * wave))) for i in range(4)]
    typical = typical_traces(entries, kept, GEOMETRY)
    assert (np.diff(typical["line"].values) > 0).all()
    np.testing.assert_allclose(typical["line"], [0.0, 0.25, 0.5, 0.5], atol=1e-4)
    heights = typical.values[:, 0].max(axis=1)
    np.testing.assert_allclose(heights / heights[2], [2.0, 4.0, 1.0, 3.0], rtol=1e-5)  # float32


def test_curves_of_a_set_stand_on_its_time_axis_with_its_gains() -> None:
    """An envelope that equals its own time comes back as time from zero; noise and curves carry the line's gain."""
    ramp = tuple(float(v) for v in STEP_NS * np.arange(N_SAMPLES))
    entries = [entry(i, zero_ns=z, gain=g) for i, (z, g) in enumerate([(6.0, 1.0), (6.0, 1.1), (6.0, 0.9)])]
    known = set_facts(
        entries, [facts(envelope=ramp)] * 3, GEOMETRY, RADAR, Velocity.constant(0.1, 0.01, origin="given")
    )
    np.testing.assert_allclose(known.envelope, GEOMETRY.times() + 6.0, rtol=1e-12)
    assert known.noise == 10.0
    assert known.centre_frequency_ghz == 0.4
    assert known.separation_m == 0.16


# --- velocity ---


def test_typed_velocity_has_five_per_cent_unless_it_says_more() -> None:
    """A typed velocity without an error is not exact, and the report can tell which of both it was."""
    plain, stated = given_velocity(0.1, None), given_velocity(0.1, 0.002)
    assert plain.value == stated.value == 0.1
    assert plain.error == pytest.approx(0.005)
    assert stated.error == pytest.approx(0.002)
    assert "5 % error assumed" in plain.method
    assert "assumed" not in stated.method
    assert plain.origin == stated.origin == "given"


def cube(values: np.ndarray) -> xr.DataArray:
    n_along, n_time = values.shape
    return schema.cube(
        values[None].astype(np.float32),
        line=np.zeros(1),
        along=0.05 * np.arange(n_along),
        time=STEP_NS * np.arange(n_time),
    )


@pytest.mark.parametrize("what", ["silence", "noise", "flat layers"])
def test_nothing_to_see_falls_back_to_a_book_value_and_says_so(what: str) -> None:
    """Neither silence nor noise nor level bands tell a velocity: 0.10 ± 0.03 m/ns with a warning, never a number."""
    rng = np.random.default_rng(3)
    values = {
        "silence": np.zeros((80, 140)),
        "noise": rng.standard_normal((80, 140)),
        "flat layers": np.tile(ricker(STEP_NS * np.arange(140) - 20.0, 0.4), (80, 1)),
    }[what]
    velocity, curve, problem = scanned_velocity([cube(values)] * 3, zero_error_ns=0.3)
    assert (velocity.value, velocity.error, velocity.origin) == (0.10, pytest.approx(0.03), "book")
    assert curve == {}
    assert problem is not None
    assert problem.severity == "warning"
    assert problem.key == "ground.velocity_m_per_ns"
    assert "is a guess" in problem.came


def test_sharp_diffractions_tell_the_velocity() -> None:
    """Hyperbolas t² = t0² + (2x/v)² of points (closed form) at 0.09 m/ns: found within three of its own errors."""
    x, t = 0.05 * np.arange(121), STEP_NS * np.arange(160)
    sections = []
    for shift in (0.0, 0.4, 0.8):
        section = np.zeros((121, 160))
        for at, depth in ((1.0 + shift, 0.5), (2.6 + shift, 0.8), (4.2 + shift, 1.1)):
            path = 2.0 * np.hypot(x - at, depth) / 0.09
            section += ricker(t[None] - path[:, None], 0.4) * (2.0 * depth / 0.09 / path)[:, None]
        sections.append(cube(100.0 * section))
    velocity, curve, problem = scanned_velocity(sections, zero_error_ns=0.1)
    assert problem is None
    assert velocity.origin == "measured"
    assert abs(velocity.value - 0.09) < 3 * velocity.error
    assert velocity.error < 0.05 * velocity.value
    assert curve
    assert all(isinstance(v, float) for values in curve.values() for v in values)
