"""Facts of recordings whose answers are known beforehand, and a queue that keeps order."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from planum.constants import SPEED_OF_LIGHT
from planum.errors import LineError, Problem
from planum.lines.recording import ReadOptions, Recording
from planum.lines.segy_write import write_segy
from planum.pipeline import census as census_module
from planum.pipeline.census import Source, census, facts_of, in_order
from planum.pipeline.store import Store
from planum.records import FLAG_DEAD, Facts
from planum.synthetic.folder import passes, record
from planum.synthetic.modelling import Aerial, Ground, ricker
from planum.synthetic.ready import one_page, quiet_wall
from planum.synthetic.recording import Faults, Noise
from planum.synthetic.scene import Scatterers

STEP_NS = 0.3
NO_ECHO = Scatterers.joined([])


def recording(data: np.ndarray, *, interval_ns: float = STEP_NS, **more: Any) -> Recording:
    """Wrap plain samples (trace, sample) as a reader does."""
    return Recording(data, interval_ns, "test", None, None, np.zeros(len(data), np.uint8), **more)


def facts(data: np.ndarray, **options: Any) -> Facts:
    return facts_of(recording(data, **options), file_id="0" * 64, centre_ghz=0.4)


def modelled(*, zero_ns: float, separation_m: float, phase_deg: float = 0.0, **noise: Any) -> np.ndarray:
    """Return one modelled line (trace, sample) of direct wave and chosen noise, without any echo."""
    _, layout = quiet_wall()
    radar = replace(layout.radar, time_zero_ns=zero_ns, aerial=Aerial(separation_m), phase_deg=phase_deg)
    layout = replace(layout, radar=radar, noise=replace(Noise.none(), **noise))
    return record(layout, next(passes(layout)), Ground(), NO_ECHO, seed=(1, 0))


@pytest.mark.parametrize(
    ("zero_ns", "separation_m", "phase_deg"),
    [(6.0, 0.16, 0.0), (6.13, 0.16, 0.0), (4.87, 0.5, 0.0), (6.05, 0.16, 70.0)],
)
def test_direct_wave_is_picked_at_its_arrival(zero_ns: float, separation_m: float, phase_deg: float) -> None:
    """Emission + separation / c, whatever the wavelet's phase: the modelled envelope peaks there by construction.

    A parabola through three samples 0.3 ns apart is off by less than a fiftieth of a sample on an envelope 2 ns wide;
    the removal of the slow drift shifts nothing, being symmetric about the wave.
    """
    found = facts(modelled(zero_ns=zero_ns, separation_m=separation_m, phase_deg=phase_deg))
    assert found.zero_pick_ns == pytest.approx(zero_ns + separation_m / SPEED_OF_LIGHT, abs=0.006)
    assert found.zero_spread_ns < 0.01
    assert not found.zero_clipped


def test_later_stronger_echo_is_not_the_direct_wave() -> None:
    """The first maximum that reaches half of the largest counts, though a later one is higher."""
    time_ns = STEP_NS * np.arange(200)
    trace = 1000 * ricker(time_ns - 6.0, 0.4) + 1500 * ricker(time_ns - 18.0, 0.4)
    found = facts(np.tile(trace, (40, 1)).astype(np.float32))
    assert found.zero_pick_ns == pytest.approx(6.0, abs=0.015)  # as above
    # The height of the wave's own envelope, less what the removal of slow drift takes, a few per cent.
    assert found.direct == pytest.approx(1000, rel=0.1)


def test_pick_spread_is_the_jitter_of_the_line() -> None:
    """Blocks of 20 traces moved by normal jitter of 0.1 ns: the robust spread is that, within its own error.

    30 blocks: the standard error of a spread from the median of deviations is 1.17 / sqrt(30) x 0.1 = 0.021 ns
    (efficiency 37 %: Rousseeuw and Croux 1993, from memory); three of them are allowed.
    """
    rng = np.random.default_rng(5)
    time_ns = STEP_NS * np.arange(160)
    moved = np.repeat(0.1 * rng.standard_normal(30), 20)
    found = facts((1000 * ricker(time_ns - 6.0 - moved[:, None], 0.4)).astype(np.float32))
    assert found.zero_spread_ns == pytest.approx(0.1, abs=0.063)


def test_dead_and_clipped_traces_are_counted() -> None:
    """Constant traces are dead; two samples at the type's full scale are a clipped trace, one is not."""
    rng = np.random.default_rng(2)
    data = rng.integers(-5000, 5000, (60, 160)).astype(np.int16)
    data[[3, 4, 40]] = 0
    data[[41]] = 77
    data[7, [20, 21]] = 32767
    data[8, [20, 90]] = [32767, -32768]
    data[9, 20] = 32767
    found = facts(data)
    assert found.dead == (3, 4, 40, 41)
    assert found.clipped == (7, 8)
    assert found.full_scale == 32767
    assert found.n_traces == 60
    assert found.n_samples == 160
    assert found.dtype == "int16"


def test_float_data_are_never_clipped_and_nan_traces_are_dead() -> None:
    """Floats have no full scale; a trace that is not a number says nothing and spoils nothing."""
    rng = np.random.default_rng(2)
    data = rng.standard_normal((60, 160)).astype(np.float32)
    clean = facts(np.delete(data, 5, axis=0))
    data[5] = np.nan
    found = facts(data)
    assert found.dead == (5,)
    assert found.full_scale == 0.0
    assert found.clipped == ()
    assert found.typical == clean.typical
    assert found.noise == clean.noise


@pytest.mark.parametrize("value", [1e30, float("inf"), 1e5])
def test_a_broken_sample_changes_no_fact_but_the_count_of_dead(value: float) -> None:
    """One sample of one trace, anywhere from 100 times the rest to infinity: the facts are those without the trace."""
    rng = np.random.default_rng(2)
    data = rng.standard_normal((60, 160)).astype(np.float32)
    clean = facts(np.delete(data, 5, axis=0))
    data[5, 77] = value
    found = facts(data)
    assert found.dead == (5,)
    alike = {"n_traces", "dead", "problems"}
    assert found.model_dump(exclude=alike) == clean.model_dump(exclude=alike)
    if np.isfinite(value):
        assert "1 trace(s) hold samples over a hundred times beyond all others, first in trace 5" in str(found.problems)


def test_a_loud_trace_moves_no_curve() -> None:
    """Fifty times the rest is still called live; medians over the traces hardly see it."""
    rng = np.random.default_rng(2)
    data = (rng.standard_normal((60, 160)) + 30.0 * ricker(STEP_NS * np.arange(160) - 6.0, 0.4)).astype(np.float32)
    clean, loud = facts(data), facts(np.concatenate([data[:-1], 50.0 * data[-1:]]))
    assert loud.dead == ()
    for name in ("spectrum", "envelope"):
        a, b = (np.array(getattr(f, name)) for f in (clean, loud))
        # One trace of 60 moves a median by at most one rank: the rms of such steps is below 5 % of the level; a mean
        # would move by 50 / 60 of it.
        assert np.sqrt(np.mean((a - b) ** 2)) < 0.05 * np.median(a), name


def test_traces_the_recorder_called_dead_are_dead() -> None:
    """The reader's flag counts, though the trace holds numbers."""
    data = np.random.default_rng(2).standard_normal((60, 160)).astype(np.float32)
    flag = np.zeros(60, np.uint8)
    flag[[3, 9]] = FLAG_DEAD
    assert facts_of(replace(recording(data), flag=flag), file_id="f", centre_ghz=0.4).dead == (3, 9)


def test_clipped_direct_wave_is_noticed() -> None:
    """A recorder driven to its full scale by the direct wave says so."""
    _, layout = quiet_wall()
    loud = replace(layout, radar=replace(layout.radar, counts=60000.0))
    data = record(loud, next(passes(loud)), Ground(), NO_ECHO, seed=(1, 0))
    assert facts(data).zero_clipped
    half = replace(layout, faults=Faults(clipped={1: 0.5}))  # cut before the recorder: not at the type's full scale
    assert not facts(record(half, next(passes(half)), Ground(), NO_ECHO, seed=(1, 0))).zero_clipped


def test_typical_trace_is_robust() -> None:
    """A fifth of the traces a hundred times too strong: the mean would be ruined, the typical trace is exact."""
    time_ns = STEP_NS * np.arange(160)
    trace = np.round(1000 * ricker(time_ns - 6.0, 0.4))
    data = np.tile(trace, (100, 1))
    data[::5] += 1e5 * np.random.default_rng(1).random((20, 160))
    found = facts(data.astype(np.float32))
    np.testing.assert_array_equal(found.typical, trace)
    assert np.abs(data.mean(axis=0) - trace).min() > 1000  # what an ordinary mean makes of it


def test_typical_trace_resolves_below_the_rounding() -> None:
    """A level between two counts is found to the standard error of the mean, where a median gives a whole count.

    500 traces with noise of 2 counts: 2 / sqrt(500) x 1.1 (efficiency of the midmean, common practice) = 0.1; five of
    them over 160 samples.
    """
    rng = np.random.default_rng(4)
    data = np.rint(10.37 + 2.0 * rng.standard_normal((500, 160))).astype(np.int16)
    found = facts(data)
    assert np.abs(np.array(found.typical) - 10.37).max() < 0.5
    assert np.mean(found.typical) == pytest.approx(10.37, abs=0.04)  # 0.1 / sqrt(160) = 0.008, five of them


def test_noise_level_of_white_noise() -> None:
    """The median of a Rayleigh-distributed envelope is sigma sqrt(2 ln 2) (Rice 1944, from memory).

    The running mean over 17 samples takes off 1/17 of the variance. 600 traces and 16 samples of the last tenth:
    the standard error of a sample's median is 0.72 / sqrt(600) = 3 %, that of the median of them near 1 %; 4 % allowed.
    """
    sigma = 37.0
    data = (sigma * np.random.default_rng(8).standard_normal((600, 160))).astype(np.float32)
    found = facts(data)
    want = sigma * np.sqrt(1.0 - 1.0 / 17.0) * np.sqrt(2.0 * np.log(2.0))
    assert found.noise == pytest.approx(want, rel=0.04)
    assert np.median(found.envelope) == pytest.approx(want, rel=0.04)


def test_noise_does_not_see_the_direct_wave() -> None:
    """A direct wave the same on all traces, ten thousand times the noise, leaves the late level as it is."""
    noise = np.random.default_rng(8).standard_normal((300, 160))
    wave = 1e4 * ricker(STEP_NS * np.arange(160) - 6.0, 0.4)
    with_wave, without = facts((noise + wave).astype(np.float32)), facts(noise.astype(np.float32))
    assert with_wave.noise == pytest.approx(without.noise, rel=1e-3)  # float32 of 1e4 holds 1e-3


@pytest.mark.parametrize("peak_ghz", [0.25, 0.4, 0.6])
def test_spectrum_is_the_wavelets_without_slow_drift(peak_ghz: float) -> None:
    """One Ricker wavelet per trace anywhere in the ground: f² exp(-f²/f_p²) times the drift filter, both closed forms.

    A trace less its running mean over 17 samples has the response 1 - sin(17 pi f dt) / (17 sin(pi f dt)) (Dirichlet
    kernel), which swings by a fifth about 1 and moves the peak of the product off f_p.
    """
    rng = np.random.default_rng(6)
    time_ns = STEP_NS * np.arange(256)
    at = rng.uniform(25.0, 50.0, (300, 1))
    data = 100 * rng.choice([-1.0, 1.0], (300, 1)) * ricker(time_ns - at, peak_ghz) + 1000 * ricker(time_ns - 6.0, 0.4)
    found = facts(data.astype(np.float32))
    assert found.spectrum_step_ghz == pytest.approx(1.0 / (256 * STEP_NS))
    f = found.spectrum_step_ghz * np.arange(1, len(found.spectrum))
    drift = np.sin(17 * np.pi * f * STEP_NS) / (17 * np.sin(np.pi * f * STEP_NS))
    want = f**2 * np.exp(-((f / peak_ghz) ** 2)) * (1.0 - drift)
    got = np.array(found.spectrum[1:])
    assert abs(int(np.argmax(got)) - int(np.argmax(want))) <= 1  # of the axis's steps, 3 % of 0.4 GHz
    # The taper smears over two steps of the axis and the few waves at its rim are cut: 5 % of the peak.
    np.testing.assert_allclose(got / got.max(), want / want.max(), atol=0.05)
    # The drift filter's swing is at most 22 % (least value of a sinc), so the peak stays within a fifth of f_p.
    assert f[int(np.argmax(got))] == pytest.approx(peak_ghz, rel=0.2)


def test_header_positions_and_plain_facts_are_kept() -> None:
    """First and last place; of the header only what JSON can hold without loss."""
    data = np.random.default_rng(1).standard_normal((30, 160)).astype(np.float32)
    x, y = 5.0 + 0.05 * np.arange(30.0), np.full(30, 7.0)
    header = {"revision": 1, "text": "C 1", "nan": float("nan"), "list": [1], "format": "int16"}
    whole = replace(recording(data, header=header, problems=(Problem("odd"),)), x=x, y=y)
    found = facts_of(whole, file_id="f", centre_ghz=0.4)
    assert found.first_xy == (5.0, 7.0)
    assert found.last_xy == pytest.approx((6.45, 7.0))
    assert found.header == {"revision": 1, "format": "int16"}
    assert found.problems[0]["came"] == "odd"


@pytest.mark.parametrize("shape", [(1, 16), (2, 9), (3, 40), (12, 700)])
def test_small_recordings_have_facts_too(shape: tuple[int, int]) -> None:
    """One trace, or a handful of samples, is little but not an error."""
    found = facts(np.random.default_rng(1).standard_normal(shape).astype(np.float32))
    assert len(found.typical) == len(found.envelope) == shape[1]
    assert 0 <= found.zero_pick_ns <= STEP_NS * shape[1]


def test_line_of_dead_traces_is_refused() -> None:
    """There is nothing to learn from it."""
    with pytest.raises(LineError, match="every trace is constant; record the line again or leave it out"):
        facts(np.full((20, 160), 5, np.int16))


# --- the census of files ---


@pytest.fixture
def files(tmp_path: Path) -> list[Source]:
    """Three small line files, the second of which is garbage."""
    rng = np.random.default_rng(9)
    out = []
    for i in range(3):
        path = tmp_path / f"{i}.sgy"
        write_segy(path, rng.integers(-900, 900, (30, 160)).astype(np.int16), interval_ns=STEP_NS)
        out.append(Source(path, f"lines/{i}.sgy", ReadOptions(interval_unit="ps", centre_frequency_ghz=0.4)))
    out[1].path.write_bytes(b"garbage " * 500)
    return out


def test_census_answers_in_order_and_names_what_is_wrong(files: list[Source], tmp_path: Path) -> None:
    """Facts, a warning that names the file as the survey does, facts; and progress counted one by one."""
    steps = []
    with ThreadPoolExecutor(2) as executor:
        found = census(files, Store(tmp_path / "work"), executor=executor, progress=lambda *a: steps.append(a))
    assert isinstance(found[0], Facts)
    assert isinstance(found[1], Problem)
    assert isinstance(found[2], Facts)
    assert found[1].file == "lines/1.sgy"
    assert found[1].severity == "warning"
    assert found[0].file_id != found[2].file_id
    assert steps == [("reading lines", i, 3) for i in (1, 2, 3)]


def test_missing_file_is_a_problem_of_that_line(files: list[Source], tmp_path: Path) -> None:
    """Gone between register and reading: told, not raised."""
    files[2].path.unlink()
    with ThreadPoolExecutor(2) as executor:
        found = census(files, Store(tmp_path / "work"), executor=executor)
    assert isinstance(found[2], Problem)
    assert "cannot be read" in found[2].came
    assert found[2].file == "lines/2.sgy"


def test_facts_are_kept(files: list[Source], tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The second census reads no line again and gives equal facts; another way of reading, or new bytes, does."""
    read = []
    real = census_module.read_line
    monkeypatch.setattr(census_module, "read_line", lambda path, options: read.append(path.name) or real(path, options))

    def run(sources: list[Source]) -> list[Facts | Problem]:
        read.clear()
        with ThreadPoolExecutor(2) as executor:
            return census(sources, Store(tmp_path / "work"), executor=executor)

    good = [files[0], files[2]]
    first = run(good)
    assert sorted(read) == ["0.sgy", "2.sgy"]
    assert run(good) == first
    assert read == []
    other = Source(good[0].path, good[0].name, replace(good[0].options, interval_unit=None, interval_ns=0.25))
    again = run([other, good[1]])
    assert read == ["0.sgy"]
    assert again[0].interval_ns == 0.25
    raw = bytearray(good[1].path.read_bytes())
    raw[-1] ^= 1
    good[1].path.write_bytes(raw)
    run(good)
    assert read == ["2.sgy"]


def test_damaged_kept_facts_are_made_again(files: list[Source], tmp_path: Path) -> None:
    """JSON that is no record of facts, from whatever program, counts as missing."""
    store = Store(tmp_path / "work")
    with ThreadPoolExecutor(1) as executor:
        first = census(files[:1], store, executor=executor)
        path = store.path("census", files[0].facts_key(first[0].file_id), ".json")
        for text in ('{"file_id": 3}', "[1, 2", "null", ""):
            path.write_text(text, encoding="utf-8")
            assert census(files[:1], store, executor=executor) == first


# --- the queue ---


def test_results_come_in_the_items_order() -> None:
    """However long each takes."""
    with ThreadPoolExecutor(4) as executor:
        got = list(in_order(executor, lambda i: time.sleep(0.002 * (i % 3)) or i * i, range(40)))
    assert got == [i * i for i in range(40)]
    with ThreadPoolExecutor(2) as executor:
        assert list(in_order(executor, lambda i: i, [])) == []


def test_no_more_than_asked_are_under_way() -> None:
    """Neither run at once nor waiting to be taken: items handed out less results taken never exceed the bound."""
    lock = threading.Lock()
    running, most, given = 0, 0, 0

    def items() -> Iterator[int]:
        nonlocal given
        for i in range(60):
            given += 1
            yield i

    def work(i: int) -> int:
        nonlocal running, most
        with lock:
            running += 1
            most = max(most, running)
        time.sleep(0.001)
        with lock:
            running -= 1
        return i

    taken = 0
    with ThreadPoolExecutor(8) as executor:
        for _ in in_order(executor, work, items(), ahead=3):
            taken += 1
            assert given - taken <= 3
    assert taken == 60
    assert 1 <= most <= 3


class Held(Executor):
    """An executor that runs nothing by itself: every future is settled by the test."""

    def __init__(self) -> None:
        self.futures: list[Future[Any]] = []

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        self.futures.append(Future())
        return self.futures[-1]


def test_exception_comes_through_and_the_rest_is_cancelled() -> None:
    """The first failure ends the queue; what has not begun never will, and no further item is asked for."""
    held = Held()
    queue = in_order(held, lambda i: i, range(100), ahead=4)
    held_result = threading.Thread(target=lambda: [time.sleep(0.01), held.futures[0].set_result("first")])
    held_result.start()
    assert next(queue) == "first"
    held_result.join()
    held.futures[1].set_exception(LineError(Problem("broken cable")))
    with pytest.raises(LineError, match="broken cable"):
        next(queue)
    assert len(held.futures) == 5
    assert all(f.cancelled() for f in held.futures[2:])


def test_leaving_early_cancels_the_rest() -> None:
    """A consumer that stops, as an interrupted run does, leaves nothing waiting."""
    held = Held()
    queue = in_order(held, lambda i: i, range(100), ahead=4)
    threading.Timer(0.01, lambda: held.futures[0].set_result(0)).start()
    assert next(queue) == 0
    queue.close()  # type: ignore[attr-defined]
    assert all(f.cancelled() for f in held.futures[1:])


def test_facts_of_a_modelled_survey_line() -> None:
    """The noisy page: its direct wave is the sum of an air and a tenth as strong ground wave, and so a little later."""
    scene, layout = one_page()
    walked = next(passes(layout, seed=1))
    data = record(layout, walked, scene.ground, scene.scatterers(1), seed=(1, 0))
    found = facts(data)
    air = 6.0 + 0.16 / SPEED_OF_LIGHT
    ground = 6.0 + 0.16 / scene.ground.velocity_m_per_ns
    assert air - 0.05 < found.zero_pick_ns < air + 0.2 * (ground - air)
    assert found.dead == ()
