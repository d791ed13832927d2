"""What the conditioning steps learn, on curves with known answers."""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest
from pydantic import ValidationError

from planum import schema
from planum.conditioning import learning
from planum.conditioning.steps import BACKGROUND, BANDPASS, DEWOW, GAIN
from planum.errors import RecipeError
from planum.records import CubeGeometry, SetFacts, Step, Velocity, canon

STEP, N_TIME = 0.15, 512
TIME = STEP * np.arange(N_TIME) - 3.0


def facts(n_lines=12, **more):
    geometry = CubeGeometry(
        direction="x", line0_m=0.0, line_step_m=0.25, n_lines=n_lines, along0_m=0.0, along_step_m=0.02, n_along=50,
        time0_ns=-3.0, time_step_ns=STEP, n_time=N_TIME,
    )  # fmt: skip
    f = np.arange(200) * 0.01
    typical = np.random.default_rng(0).normal(size=(n_lines, 1, N_TIME)).astype(np.float32)
    base = {
        "geometry": geometry, "centre_frequency_ghz": 0.4, "separation_m": 0.16,
        "velocity": Velocity.constant(0.1, 0.01, origin="given"),
        "typical": schema.cube(typical, line=0.25 * np.arange(n_lines), along=np.array([0.0]), time=TIME),
        "envelope": decay(0.3, 0.01), "noise": 0.01,
        # Ricker spectrum, closed form: f^2 exp(-f^2/f0^2), peak at f0.
        "spectrum": f**2 * np.exp(-((f / 0.4) ** 2)), "spectrum_step_ghz": 0.01,
    }  # fmt: skip
    return SetFacts(**{**base, **more})


def decay(db_per_ns, noise, *, power=1.0, height=400.0):
    """Median envelope of a ground that absorbs ``db_per_ns``, spreads as t^-power and has Rayleigh-like noise."""
    t = np.maximum(TIME, STEP)
    return np.hypot(height * t**-power * 10 ** (-db_per_ns * t / 20.0), noise)


@pytest.mark.parametrize("loss", [0.1, 0.3, 0.6])
@pytest.mark.parametrize("power", [0.0, 1.0])
def test_absorption_is_measured_on_the_decay(loss, power):
    found = GAIN.learn(facts(envelope=decay(loss, 0.01, power=power)), GAIN.Params(power=power))
    # Running medians of a convex decay bend it a little: 2 %.
    assert found.absorption_db_per_ns == pytest.approx(loss, rel=0.02)


def test_absorption_survives_a_strong_layer():
    """A reflector ten times the ground over a tenth of the record moves a least squares fit; a median slope hardly."""
    envelope = decay(0.3, 0.01)
    envelope[(TIME > 14) & (TIME < 18)] *= 10
    found = GAIN.learn(facts(envelope=envelope), GAIN.Params())
    assert found.absorption_db_per_ns == pytest.approx(0.3, rel=0.15)


def test_the_gain_stops_where_the_envelope_meets_twice_the_noise():
    f = facts(envelope=decay(0.3, 2.0), noise=2.0)
    found = GAIN.learn(f, GAIN.Params())
    meets = TIME[np.flatnonzero(f.envelope > 4.0)[-1]]
    assert meets < 0.6 * TIME[-1]
    assert found.stop_ns == pytest.approx(meets, abs=2 * STEP)
    assert GAIN.limit_ns(f, GAIN.Params()) == found.stop_ns
    # ... which is measured, whatever stop was typed
    assert GAIN.limit_ns(f, GAIN.Params(stop_ns=60.0)) == found.stop_ns
    assert GAIN.notes(f, GAIN.Params()) == ()


@pytest.mark.parametrize("loss", [0.0, 0.1, 0.3, 0.6])
@pytest.mark.parametrize("n", [160, 240, N_TIME])
def test_a_record_that_still_falls_at_its_end_has_no_noise(loss, n):
    """Its last tenth is ground, whatever its level: no stop inside the record, no limit of depth, and it is said."""
    envelope = decay(loss, 0.0)[:n]
    f = facts(envelope=envelope, noise=float(np.median(envelope[-n // 10 :])))
    f = replace(f, geometry=f.geometry.model_copy(update={"n_time": n}))
    found = GAIN.learn(f, GAIN.Params())
    assert found.stop_ns == pytest.approx(TIME[n - 1])
    assert found.absorption_db_per_ns == pytest.approx(loss, rel=0.02, abs=0.01)
    assert GAIN.limit_ns(f, GAIN.Params()) is None
    (problem,) = GAIN.notes(f, GAIN.Params())
    assert problem.severity == "note"
    assert f"the record ends at {TIME[n - 1]:.1f} ns before its level has become even" in problem.came


@pytest.mark.parametrize("power", [0.0, 1.0, 2.0])
@pytest.mark.parametrize("level", [2.0, 5.0, 20.0])
def test_noise_is_known_by_its_flatness(level, power):
    """With the scatter that the median of a few hundred Rayleigh envelopes has, 3 %.

    The ground sinks below the noise at 44 ns at the latest, the last eighth begins at 65.
    """
    envelope = decay(0.3, level) * (1.0 + 0.03 * np.random.default_rng(1).normal(size=N_TIME))
    f = facts(envelope=envelope, noise=level)
    meets = TIME[np.flatnonzero(decay(0.3, level) > 2.0 * level)[-1]]
    # Where the curve is nearly level, 3 % scatter moves the crossing by some samples.
    assert GAIN.limit_ns(f, GAIN.Params(power=power)) == pytest.approx(max(meets, 5.35), abs=2.0)


def test_noise_is_not_claimed_before_the_ground_has_sunk_into_it():
    """Records cut ever shorter: the limit is that of the whole record, or none; never an earlier one.

    The whole record, 74 ns, meets twice its noise (4) at 34 ns; what ends soon after that is too short to tell.
    """
    whole = facts(envelope=decay(0.3, 2.0), noise=2.0)
    limit = GAIN.limit_ns(whole, GAIN.Params())
    told = []
    for n in range(120, N_TIME, 20):
        envelope = decay(0.3, 2.0)[:n]
        f = facts(envelope=envelope, noise=float(np.median(envelope[-n // 10 :])))
        f = replace(f, geometry=f.geometry.model_copy(update={"n_time": n}))
        told.append(GAIN.limit_ns(f, GAIN.Params()))
    known = [t for t in told if t is not None]
    assert len(known) >= 3
    # The late level is then at most 12 % above the noise, 1 dB, which the ground falls in 2.5 ns (0.4 dB/ns there).
    assert min(known) > limit - 2.5
    assert told[: -len(known)] == [None] * (len(told) - len(known))


def test_a_typed_stop_is_kept_however_early():
    found = GAIN.learn(facts(), GAIN.Params(stop_ns=3.0))
    assert (found.start_ns, found.stop_ns) == (3.0, 3.0)


def test_a_single_quiet_spell_does_not_stop_the_gain():
    envelope = decay(0.3, 0.01)
    envelope[(TIME > 20) & (TIME < 21)] = 0.0
    assert GAIN.learn(facts(envelope=envelope), GAIN.Params()).stop_ns > 30


def test_the_gain_starts_after_the_direct_ground_wave():
    """0.16 m at 0.1 m/ns is 1.6 ns; one and a half periods of 0.4 GHz are 3.75 ns."""
    assert GAIN.learn(facts(), GAIN.Params()).start_ns == pytest.approx(5.35)


def test_a_record_of_noise_gets_no_gain():
    found = GAIN.learn(facts(envelope=np.full(N_TIME, 0.01)), GAIN.Params())
    assert found.absorption_db_per_ns == 0.0
    assert found.stop_ns == pytest.approx(found.start_ns, abs=STEP)


def test_a_record_that_grows_gets_no_absorption_and_a_steep_one_is_bounded():
    grows = GAIN.learn(facts(envelope=np.exp(TIME / 20)), GAIN.Params())
    assert (grows.absorption_db_per_ns, grows.stop_ns) == (0.0, pytest.approx(TIME[-1]))
    steep = GAIN.learn(facts(envelope=decay(3.0, 1e-12), noise=1e-12), GAIN.Params())
    assert steep.absorption_db_per_ns == learning.ABSORPTION_MOST
    clamped = facts(envelope=decay(3.0, 1e-12), noise=1e-12)
    said = [p for p in GAIN.notes(clamped, GAIN.Params()) if p.severity == "warning"]
    assert [p.key for p in said] == ["recipe.gain.absorption_db_per_ns"]
    assert "falls by 3.00 dB/ns besides spreading, the gain makes up for 1" in said[0].came
    assert not [p for p in GAIN.notes(clamped, GAIN.Params(absorption_db_per_ns=0.5)) if p.severity == "warning"]


def test_the_band_follows_the_spectrum():
    """Closed form: the Ricker spectrum s = (f/f0)^2 exp(1 - (f/f0)^2) falls to 1/4 and 1/10 at known frequencies."""
    corners = BANDPASS.learn(facts(), BANDPASS.Params())
    x = np.linspace(0.01, 4, 40_000)
    s = x**2 * np.exp(1 - x**2)
    low_pass, high_pass = (0.4 * x[s >= 0.25][k] for k in (0, -1))
    high_stop = 0.4 * x[s >= 0.1][-1]
    assert corners.low_pass_ghz == pytest.approx(low_pass, abs=0.003)
    assert corners.high_pass_ghz == pytest.approx(high_pass, abs=0.003)
    assert corners.high_stop_ghz == pytest.approx(max(high_stop, 1.2 * high_pass), abs=0.005)
    assert corners.low_stop_ghz >= 0.1  # a quarter of the nominal frequency
    assert BANDPASS.notes(facts(), BANDPASS.Params()) == ()


def test_an_antenna_loaded_by_the_ground_is_followed_away_from_its_nominal_frequency():
    f = np.arange(200) * 0.01
    found = BANDPASS.learn(facts(spectrum=f**2 * np.exp(-((f / 0.28) ** 2))), BANDPASS.Params())
    assert 0.4 * found.high_pass_ghz < 0.28 < found.high_pass_ghz < 0.6


@pytest.mark.parametrize(
    ("spectrum", "note"),
    [
        (np.zeros(200), "no peak between 0.1 and 1 GHz"),
        (np.ones(3), "too few frequencies"),
        (1.0 / (1.0 + np.arange(200)), "no peak"),
        (np.exp(-((np.arange(200) * 0.01 - 1.4) ** 2) / 0.01), "no peak"),
    ],
)
def test_without_a_peak_near_nominal_the_nominal_band_stands_in_with_a_note(spectrum, note):
    f = facts(spectrum=spectrum)
    found = BANDPASS.learn(f, BANDPASS.Params())
    assert (found.low_stop_ghz, found.high_stop_ghz) == (0.1, 1.0)
    (problem,) = BANDPASS.notes(f, BANDPASS.Params())
    assert problem.severity == "note"
    assert note in problem.came


def test_the_band_stays_below_nyquist():
    f = facts()
    slow = SetFacts(**{**vars(f), "geometry": f.geometry.model_copy(update={"time_step_ns": 0.625})})
    found = BANDPASS.learn(slow, BANDPASS.Params())
    assert found.high_stop_ghz <= 0.8
    assert found.low_stop_ghz < found.low_pass_ghz < found.high_pass_ghz < found.high_stop_ghz


def test_the_dewow_window_is_two_periods_and_odd():
    found = DEWOW.learn(facts(), DEWOW.Params()).window_ns
    assert abs(found - 5.0) <= STEP
    assert round(found / STEP) % 2 == 1


@pytest.mark.parametrize(("n", "blocks"), [(1, 1), (29, 1), (30, 2), (64, 5), (400, 39)])
def test_blocks_slide_over_many_lines_and_few_lines_are_one(n, blocks):
    traces, at = learning.typical_blocks(np.arange(n, dtype=float)[:, None], 0.25 * np.arange(n))
    assert len(at) == blocks
    # The median of a block of evenly growing lines is its middle line.
    assert traces[:, 0] * 0.25 == pytest.approx(at)
    assert np.all(np.diff(at) > 0)


def test_the_typical_trace_ignores_rows_without_a_recording():
    f = facts(16)
    f.typical[1] = 0.0
    found = BACKGROUND.learn(f, BACKGROUND.Params())
    expected = np.median(f.typical.values[[0, *range(2, 16)], 0], axis=0)
    assert found.traces[0] == pytest.approx(expected, abs=1e-6)
    assert found.at_m == (pytest.approx(0.25 * (15 * 16 / 2 - 1) / 15, abs=1e-6),)
    assert BACKGROUND.notes(f, BACKGROUND.Params()) == ()


def test_few_lines_share_the_direct_wave_only_and_say_so():
    """Whole to 1.6 + 1.5 periods = 5.35 ns, half at two periods, nothing from 2.5 periods on: 7.85 ns."""
    f = facts(16)
    f.typical[:2] = 0.0  # 14 lines were recorded
    (trace,) = BACKGROUND.learn(f, BACKGROUND.Params()).traces
    median = np.median(f.typical.values[2:, 0], axis=0)
    share = np.array(trace) / median
    assert share[TIME <= 5.35] == pytest.approx(1.0, abs=1e-3)  # traces keep seven digits, small ones fewer
    assert share[np.argmin(np.abs(TIME - 6.6))] == pytest.approx(0.5, abs=1e-3)
    assert not np.array(trace)[TIME >= 7.85].any()
    (problem,) = BACKGROUND.notes(f, BACKGROUND.Params())
    assert (problem.severity, problem.key) == ("warning", "recipe.background")
    assert problem.came.startswith("14 lines do not tell ringing from a wall along the lines: below 7.8")
    assert "15 lines or more" in problem.allowed
    assert "ringing of the antennas stays" in problem.do
    assert BACKGROUND.notes(f, BACKGROUND.Params(scope="line", window_m=4.0)) == ()
    assert BACKGROUND.notes(facts(1), BACKGROUND.Params())[0].came.startswith("1 line does not tell")


def test_pieces_of_one_line_are_one_line():
    """Fifteen pieces of one walked line, a millionth of a metre apart as they come, are no fifteen lines."""
    f = facts(15)
    pieces = f.typical.assign_coords(line=0.25 + 1e-6 * np.arange(15))
    (problem,) = BACKGROUND.notes(replace(f, typical=pieces), BACKGROUND.Params())
    assert problem.came.startswith("1 line does not tell")


@pytest.mark.parametrize("step", [DEWOW, GAIN, BANDPASS, BACKGROUND])
def test_learning_is_repeatable_plain_and_leaves_given_settings(step):
    assert isinstance(step, Step)
    f = facts()
    once, twice = (step.learn(f, step.Params()) for _ in range(2))
    assert canon(once) == canon(twice)
    plain = json.loads(canon(once))
    assert step.learn(f, step.Params(**plain)) == once
    done = step(f.typical.copy(), **once.model_dump(mode="json"))
    assert done.dtype == np.float32


def test_given_settings_are_not_overruled():
    assert DEWOW.learn(facts(), DEWOW.Params(window_ns=9.0)).window_ns == 9.0
    gain = GAIN.learn(facts(), GAIN.Params(absorption_db_per_ns=0.2, start_ns=4.0, stop_ns=30.0))
    assert (gain.absorption_db_per_ns, gain.start_ns, gain.stop_ns) == (0.2, 4.0, 30.0)
    assert BANDPASS.learn(facts(), BANDPASS.Params(low_stop_ghz=0.05)).low_stop_ghz == 0.05
    assert BACKGROUND.learn(facts(), BACKGROUND.Params(scope="line", window_m=4.0)).traces is None


@pytest.mark.parametrize(
    ("step", "typed", "match"),
    [
        (GAIN, {"start_ns": 20.0, "stop_ns": 10.0}, "start_ns is 20 and stop_ns 10; a stop not before the start"),
        (BANDPASS, {"low_pass_ghz": 0.6, "high_pass_ghz": 0.5}, "low_pass_ghz = 0.6, high_pass_ghz = 0.5"),
        (BANDPASS, {"low_stop_ghz": 0.2, "high_stop_ghz": 0.2}, "low_stop_ghz < low_pass_ghz"),
        (BANDPASS, {"low_stop_ghz": -0.1}, "greater than or equal to 0"),
        (BACKGROUND, {"scope": "line"}, 'scope is "line" without window_m; a length in m'),
        (BACKGROUND, {"traces": ((1.0, 2.0),)}, "1 traces at 0 places"),
    ],
)
def test_settings_that_cannot_be_right_are_refused_as_they_are_typed(step, typed, match):
    with pytest.raises(ValidationError, match=match):
        step.Params(**typed)


def test_typed_corners_must_fit_the_found_ones():
    with pytest.raises(RecipeError, match=r"high_pass_ghz = .* of which low_pass_ghz typed") as caught:
        BANDPASS.learn(facts(), BANDPASS.Params(low_pass_ghz=0.9))
    assert caught.value.problems[0].key == "recipe.bandpass.low_pass_ghz"


@pytest.mark.parametrize("reach", [25.0, 32.0, 40.0])
@pytest.mark.parametrize("loss", [0.3, 0.6])
def test_decay_is_fitted_with_its_noise_wherever_the_record_ends(loss, reach):
    """Spreading 1/t, a loss in dB/ns and a noise floor: both come back though the record ends on the slope into noise.

    The search steps are 4 % of the last level, which is up to a third noise-free here: 12 % for the loss, and a floor
    within a third.
    """
    time = np.arange(-3.0, reach, 0.3)
    signal = 1000.0 * 10 ** (-loss * np.maximum(time, 1.0) / 20.0) / np.maximum(time, 1.0)
    floor = 1000.0 * 10 ** (-loss * 24.0 / 20.0) / 24.0  # signal and noise meet at 24 ns
    envelope = np.hypot(signal, floor)
    late = float(np.median(envelope[-8:]))
    found, noise = learning.decay(envelope, late, time, power=1.0, start_ns=5.5, period_ns=2.5)
    assert found == pytest.approx(loss, rel=0.12)
    assert noise == pytest.approx(floor, rel=0.34)


def test_decay_without_noise_finds_none():
    """A pure decay: its loss to a per cent, and no floor above two search steps."""
    time = np.arange(-3.0, 40.0, 0.3)
    envelope = 1000.0 * 10 ** (-0.5 * np.maximum(time, 1.0) / 20.0) / np.maximum(time, 1.0)
    late = float(np.median(envelope[-8:]))
    found, noise = learning.decay(envelope, late, time, power=1.0, start_ns=5.5, period_ns=2.5)
    assert found == pytest.approx(0.5, rel=0.01)
    assert noise <= 0.081 * late
