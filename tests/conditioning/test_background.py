"""Background: what all traces share goes, a wall along the lines stays."""

from __future__ import annotations

import numpy as np
import pytest

from planum import schema
from planum.conditioning.background import background, between_blocks, running_mean
from planum.conditioning.steps import BACKGROUND, BANDPASS, DEWOW, GAIN
from planum.errors import RecipeError
from planum.records import FLAG_NONE, CubeGeometry, SetFacts, Velocity

STEP, N_TIME, N_ALONG = 0.2, 240, 120
TIME = STEP * np.arange(N_TIME) - 2.0


def ricker(t, f=0.4):
    a = (np.pi * f * t) ** 2
    return (1 - 2 * a) * np.exp(-a)


def ringing():
    """Direct wave and antenna ringing, the same in every trace."""
    return 20.0 * ricker(TIME - 1.0) + 3.0 * np.exp(-TIME / 15.0) * np.cos(2 * np.pi * 0.35 * TIME)


def site(n_lines, *, seed=0, ground=0.2):
    """A quiet survey: ringing that drifts a little from line to line, weak random ground."""
    rng = np.random.default_rng(seed)
    drift = 1.0 + 0.03 * np.sin(np.arange(n_lines) / n_lines * 3.0) + 0.005 * rng.normal(size=n_lines)
    noise = rng.normal(size=(n_lines, N_ALONG, N_TIME)).astype(np.float32)
    return (ground * noise + drift[:, None, None] * ringing()).astype(np.float32)


def make_cube(data, spacing=0.25):
    return schema.cube(data, line=spacing * np.arange(data.shape[0]), along=0.17 * np.arange(data.shape[1]), time=TIME)


def typical_of(cube):
    """One robust typical trace per line, as a census would keep: the mean of the middle half of the traces."""
    ordered = np.sort(cube.values, axis=1)
    n = ordered.shape[1]
    middle = ordered[:, n // 4 : n - n // 4].mean(axis=1, keepdims=True).astype(np.float32)
    return schema.cube(middle, line=cube.line.values, along=np.array([0.0]), time=TIME)


def facts_of(cube, **more):
    n = cube.sizes["line"]
    geometry = CubeGeometry(
        direction="x", line0_m=0.0, line_step_m=0.25, n_lines=n, along0_m=0.0, along_step_m=0.17, n_along=N_ALONG,
        time0_ns=-2.0, time_step_ns=STEP, n_time=N_TIME,
    )  # fmt: skip
    f = np.arange(121) * 0.02
    base = {
        "geometry": geometry, "centre_frequency_ghz": 0.4, "separation_m": 0.16,
        "velocity": Velocity.constant(0.1, 0.01, origin="given"), "typical": typical_of(cube),
        "envelope": 50.0 * np.exp(-np.maximum(TIME, 0) / 12.0) + 0.05, "noise": 0.05,
        "spectrum": f**2 * np.exp(-((f / 0.4) ** 2)), "spectrum_step_ghz": 0.02,
    }  # fmt: skip
    return SetFacts(**{**base, **more})


def condition(cube, *, with_background=True):
    """The recipe's conditioning with learned settings; background from typical traces as they arrive at it."""
    facts = facts_of(cube)
    done, typical = cube, facts.typical
    for step in (DEWOW, GAIN, BANDPASS):
        settings = step.learn(facts, step.Params()).model_dump()
        done, typical = step(done, **settings), step(typical, **settings)
    if not with_background:
        return done
    settings = BACKGROUND.learn(facts_of(cube, typical=typical), BACKGROUND.Params()).model_dump(mode="json")
    return BACKGROUND(done, **settings)


@pytest.fixture(scope="module")
def quiet():
    """A survey without the wall, and what conditioning makes of it."""
    data = site(64)
    return data, condition(make_cube(data)).values


@pytest.mark.parametrize("length_m", [3, 10, 20])
@pytest.mark.parametrize("walls", [1, 3])
def test_a_wall_along_the_lines_keeps_95_percent(quiet, walls, length_m):
    """1 to 3 of 64 lines run along a wall of 3, 10 or 20 m; a mean along the line would delete the longest one."""
    data, conditioned = quiet
    wall = np.zeros_like(data)
    first = 30
    along = int(length_m / 0.17)
    wall[first : first + walls, 1 : 1 + along] = 2.0 * ricker(TIME - 14.0)
    kept = condition(make_cube(data + wall)).values - conditioned
    true = condition(make_cube(wall), with_background=False).values  # the linear steps, on the wall alone
    # The settings are learned from curves that are the same here, so the linear steps agree.
    at = true[first : first + walls, 1 : 1 + along]
    got = kept[first : first + walls, 1 : 1 + along]
    share = (got * at).sum(axis=(1, 2)) / (at * at).sum(axis=(1, 2))
    assert share.min() >= 0.95
    # ... and nothing of it is printed on other lines.
    others = np.delete(kept, np.arange(first, first + walls), axis=0)
    assert np.abs(others).max() <= 0.05 * np.abs(at).max()


@pytest.mark.parametrize("n_lines", [1, 2, 3, 5, 14, 17, 64])
def test_on_however_few_lines_a_wall_along_one_keeps_95_percent(n_lines):
    """A wall half a metre wide, under three lines 0.25 m apart, as long as they are; below the direct wave's zone
    (7.9 ns here, the wall at 14).
    """
    data = site(n_lines)
    wall = np.zeros_like(data)
    over = slice(max(n_lines // 2 - 1, 0), n_lines // 2 + 2)
    wall[over] = 2.0 * ricker(TIME - 14.0)
    kept = condition(make_cube(data + wall)).values - condition(make_cube(data)).values
    true = condition(make_cube(wall), with_background=False).values
    below = TIME > 8.0
    got, at = kept[over][:, :, below], true[over][:, :, below]
    share = (got * at).sum(axis=(1, 2)) / (at * at).sum(axis=(1, 2))
    # found 1.000 up to 14 lines and 0.996 beyond; one median over 1, 2, 3 or 5 lines leaves nothing
    assert share.min() >= 0.95


@pytest.mark.parametrize("n_lines", [1, 3, 14])
def test_on_few_lines_the_direct_wave_goes_all_the_same(n_lines):
    cube = make_cube(site(n_lines, ground=0.0)).isel(along=slice(0, 4))
    early = (TIME > -1.0) & (TIME < 4.0)
    raw = np.abs(condition(cube, with_background=False).values[:, :, early])
    # What is left is the drift of 3 % from line to line, which one median cannot follow.
    assert np.abs(condition(cube).values[:, :, early]).max() < 0.05 * raw.max()


def test_the_mean_along_the_line_deletes_such_a_wall():
    """Why scope "line" is only made on request: the 20 m wall keeps nothing of itself."""
    wall = np.zeros((8, N_ALONG, N_TIME), np.float32)
    wall[4] = 2.0 * ricker(TIME - 14.0)
    done = background(make_cube(wall), scope="line", window_m=30.0)
    assert np.abs(done.values).max() < 1e-6


def test_what_all_traces_share_is_removed_and_drift_followed():
    cube = make_cube(site(64, ground=0.0)).isel(along=slice(0, 4))
    raw = condition(cube, with_background=False).values
    left = condition(cube).values
    # Jitter of 0.5 % from line to line stays (64 draws: 2.5 sigma), what drifts slowly by 3 % goes.
    assert np.abs(left).max() < 0.02 * np.abs(raw).max()


def test_one_trace_of_fifty_leaves_a_fiftieth_on_the_others():
    """Closed form of a mean over N = 50 traces: a change of 1 in one leaves -1/50 in all others."""
    data = np.zeros((1, 50, 3), np.float32)
    data[0, 7] = 1.0
    got = running_mean(data, np.zeros((1, 50), bool), window=199)
    assert got[0, 7] == pytest.approx(np.full(3, 0.98))
    assert np.delete(got[0], 7, axis=0) == pytest.approx(np.full((49, 3), -0.02))


def test_empty_places_neither_count_nor_change():
    data = np.full((2, 20, 4), 5.0, np.float32)
    flag = np.zeros((2, 20), np.uint8)
    data[:, 12:] = 0.0
    flag[:, 12:] = FLAG_NONE
    cube = schema.cube(data, line=np.array([0.0, 1.0]), along=np.arange(20.0), time=np.arange(4.0), flag=flag)
    assert not background(cube, scope="line", window_m=9.0).values.any()
    done = background(cube, scope="set", traces=[[1.0, 2.0, 3.0, 4.0]], at_m=[0.5])
    assert not done.values[:, 12:].any()
    assert done.values[0, 0] == pytest.approx([4.0, 3.0, 2.0, 1.0])


def test_between_blocks_is_linear_and_held_outside():
    got = between_blocks(np.array([[0.0, 10.0], [4.0, 30.0]]), np.array([1.0, 3.0]), np.array([0.0, 1.5, 2.0, 9.0]))
    assert got == pytest.approx(np.array([[0, 10], [1, 15], [2, 20], [4, 30]]))


@pytest.mark.parametrize(
    ("settings", "match"),
    [
        ({"scope": "set"}, "background without typical traces"),
        ({"scope": "set", "traces": [[1.0, 2.0]], "at_m": [0.0]}, "one trace of 240 samples"),
        ({"scope": "set", "traces": [[0.0] * N_TIME] * 2, "at_m": [1.0, 1.0]}, "at 2 ascending places"),
        ({"scope": "line"}, "window_m is None; a positive length"),
        ({"scope": "line", "window_m": -1.0}, "window_m is -1.0"),
        ({"scope": "grid"}, 'scope is \'grid\'; "set" or "line"'),
    ],
)
def test_settings_that_do_not_fit_are_refused(settings, match):
    with pytest.raises(RecipeError, match=match):
        background(make_cube(site(2)), **settings)


def test_coords_and_attrs_stay():
    cube = make_cube(site(3))
    for done in (
        background(cube, scope="set", traces=[list(ringing())], at_m=[0.0]),
        background(cube, scope="line", window_m=5.0),
    ):
        assert done.dims == cube.dims
        assert done.dtype == np.float32
        assert done.attrs == cube.attrs
        assert done.coords.to_dataset().identical(cube.coords.to_dataset())
