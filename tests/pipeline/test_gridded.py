"""Strips to north-up cells: a known plan function comes back at its place, once, whatever the grid's rotation."""

from __future__ import annotations

import math
import shutil
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from planum import schema
from planum.pipeline import gridded
from planum.pipeline.gridded import grid_stack, gridded_key, open_stack
from planum.pipeline.store import Store
from planum.records import FLAG_NONE, CubeGeometry, Estimate, Plan, SetPlan, Similarity, Velocity

CELL = 0.05
BUMP_M = 0.45  # standard deviation: nine cells, almost two line spacings, so that 0.25 m between lines resolves it


def turned(degrees: float, east: float = 0.0, north: float = 0.0) -> Similarity:
    """Return a frame turned counter-clockwise with its origin at (east, north)."""
    turn = math.radians(degrees)
    return Similarity(a=math.cos(turn), b=math.sin(turn), e0=east, n0=north, origin="test")


def one_set(name: str = "A/x", *, frame: Similarity | None = None, direction: str = "x", **axes: float) -> SetPlan:
    """Return a set of 17 lines of 6 m, 0.25 m apart."""
    plain = {"line0_m": 0.0, "line_step_m": 0.25, "n_lines": 17, "along0_m": 0.0, "along_step_m": 0.05, "n_along": 121}
    geometry = CubeGeometry(
        direction=direction,
        time0_ns=0.0,
        time_step_ns=0.3,
        n_time=100,
        **(plain | axes),  # type: ignore[arg-type]
    )
    return SetPlan(
        name=name,
        grid=name[0],
        radar="400",
        visit="",
        geometry=geometry,
        centre_frequency_ghz=0.4,
        separation_m=0.16,
        zero=Estimate(value=6.0, error=0.2, unit="ns", origin="measured", method="test"),
        velocity=Velocity.constant(0.1, 0.005, origin="given"),
        chain=(),
        windows_ns=((5.0, 7.0), (7.0, 9.0)),
        entries=(),
        frame=frame or Similarity(),
    )


def one_plan(*sets: SetPlan, bounds: tuple[float, float, float, float], cell_m: float = CELL) -> Plan:
    return Plan(
        version="test",
        title="Test",
        code="T",
        crs=None,
        cell_m=cell_m,
        bounds=bounds,
        intervals_m=((0.2, 0.3), (0.3, 0.4)),
        sets=sets,
    )


def bump(east: np.ndarray, north: np.ndarray, at: tuple[float, float]) -> np.ndarray:
    """A Gaussian hill of 100 on a level of 10."""
    return 10.0 + 100.0 * np.exp(-((east - at[0]) ** 2 + (north - at[1]) ** 2) / (2 * BUMP_M**2))


def places(s: SetPlan) -> tuple[np.ndarray, np.ndarray]:
    """Map coordinates (line, along) of a set's strip places."""
    along, line = np.meshgrid(s.geometry.along(), s.geometry.lines())
    return s.frame.forward(along, line) if s.geometry.direction == "x" else s.frame.forward(line, along)


def keep(store: Store, s: SetPlan, values: np.ndarray, *, missing: tuple[int, ...] = ()) -> list[str | None]:
    """Put strips (slice, line, along) into the store as the line pass does; return the rows' keys."""
    names: list[str | None] = []
    for row in range(s.geometry.n_lines):
        if row in missing:
            names.append(None)
            continue
        name = f"{s.name.replace('/', '-')}-{row}"
        store.save_array("rows", name, np.asarray(values[:, row], np.float32))
        store.save_array("flags", name, np.zeros(s.geometry.n_along, np.uint8))
        names.append(name)
    return names


def peak_of(values: np.ndarray, x: np.ndarray, y: np.ndarray) -> tuple[float, float]:
    """Place of the highest value, refined by a parabola each way."""
    i, j = np.unravel_index(np.nanargmax(values), values.shape)

    def vertex(a: float, b: float, c: float) -> float:
        return 0.5 * (a - c) / (a - 2 * b + c)

    return (
        float(x[j] + vertex(*values[i, j - 1 : j + 2]) * (x[1] - x[0])),
        float(y[i] + vertex(*values[i - 1 : i + 2, j]) * (y[1] - y[0])),
    )


@pytest.mark.parametrize("direction", ["x", "y"])
@pytest.mark.parametrize("degrees", [0.0, 30.0, -117.0])
def test_smooth_function_comes_back_at_its_place(tmp_path: Path, degrees: float, direction: str) -> None:
    """A hill in a grid turned about a far origin: its crest on a line in one slice, between two lines in the other.

    On the line its peak is within a fifth of a cell. Between lines the limits to the neighbours' range flatten the
    crest by rule, so there it is the middle of the upper half that must be. Variance within 5 %, nothing below zero.
    """
    store = Store(tmp_path / "work")
    s = one_set(frame=turned(degrees, 5000.0, 7000.0), direction=direction)
    east, north = places(s)
    tops = []
    strips = np.empty((2, *east.shape))
    for k, (u, v) in enumerate([(2.83, 2.0), (3.37, 2.18)]):
        top = s.frame.forward(u, v) if direction == "x" else s.frame.forward(v, u)
        tops.append((float(top[0]), float(top[1])))
        strips[k] = bump(east, north, tops[-1])
    low = np.floor(np.array([east.min() - 0.2, north.min() - 0.2]) / CELL) * CELL
    high = np.ceil(np.array([east.max() + 0.2, north.max() + 0.2]) / CELL) * CELL
    plan = one_plan(s, bounds=(*low, *high))
    stack = open_stack(grid_stack(plan, {s.name: keep(store, s, strips)}, store), plan).load()
    schema.check_slices(stack)
    xx, yy = np.meshgrid(stack.x, stack.y)
    for k in range(2):
        got = stack.amplitude.values[k].astype(float)
        want = bump(xx, yy, tops[k])
        known = np.isfinite(got)
        upper = np.where(known & (want > 60.0), got - 10.0, 0.0)
        middle = float(np.sum(upper * xx) / upper.sum()), float(np.sum(upper * yy) / upper.sum())
        found = middle if k else peak_of(got, stack.x.values, stack.y.values)
        assert math.dist(found, tops[k]) < 0.2 * CELL, (k, found)
        assert np.var(got[known]) == pytest.approx(np.var(want[known]), rel=0.05)
        assert got[known].min() >= 0.0
        np.testing.assert_array_equal(known, stack.coverage.values > 0)
        # 6 m x 4 m and half a spacing beside the outer lines are shown, nothing else (cells on the rim: 2 %).
        assert known.sum() * CELL**2 == pytest.approx(6.0 * 4.25, rel=0.03)
    # A line left out is predicted within the range of its neighbours: a crest on the line is missed by what they lie
    # lower, a spacing away. A cell's centre lies up to half a cell, a tenth of the spacing, beside the line.
    left = stack.left_out_error.values
    lower = 100.0 * (1.0 - math.exp(-(0.25**2) / (2 * BUMP_M**2)))
    assert np.nanmin(left) >= 0.0
    assert 0.89 * lower < np.nanmax(left[0]) < 1.001 * lower
    assert np.isnan(left[:, stack.coverage.values == 0]).all()


def test_left_out_error_has_no_sign(tmp_path: Path) -> None:
    """The rougher the strips the more the kernel between places swings; an error is still never below zero."""
    store = Store(tmp_path / "work")
    s = one_set(frame=turned(30.0))
    rows = keep(store, s, 100.0 * np.random.default_rng(1).random((2, 17, 121)))
    plan = one_plan(s, bounds=(0.0, 1.0, 3.0, 4.0))
    left = open_stack(grid_stack(plan, {s.name: rows}, store), plan).left_out_error.values
    assert np.nanmin(left) >= 0.0
    assert np.nanmax(left) > 10.0


def test_mirrored_frame(tmp_path: Path) -> None:
    """A grid whose y runs to the other hand: the hill is where the control points say."""
    store = Store(tmp_path / "work")
    s = one_set(frame=Similarity(a=0.8, b=0.6, e0=10.0, n0=20.0, mirrored=True, origin="test"))
    east, north = places(s)
    top = tuple(float(v) for v in s.frame.forward(2.0, 1.5))
    plan = one_plan(s, bounds=(9.0, 16.0, 20.0, 25.0))
    strips = np.stack([bump(east, north, top)] * 2)  # type: ignore[arg-type]
    stack = open_stack(grid_stack(plan, {s.name: keep(store, s, strips)}, store), plan)
    peak = peak_of(stack.amplitude.values[0].astype(float), stack.x.values, stack.y.values)
    assert math.dist(peak, top) < 0.2 * CELL


def test_axes_bounds_and_errors_of_the_stack(tmp_path: Path) -> None:
    """North-up rows, cell centres, bounds and the larger depth error of two sets; lazily opened."""
    store = Store(tmp_path / "work")
    a = one_set()
    b = one_set("B/x").model_copy(update={"velocity": Velocity.constant(0.1, 0.02, origin="given")})
    plan = one_plan(a, b, bounds=(0.0, 0.0, 6.0, 4.0))
    rows = {s.name: keep(store, s, np.ones((2, 17, 121))) for s in (a, b)}
    stack = open_stack(grid_stack(plan, rows, store), plan)
    assert stack.amplitude.chunks is not None
    np.testing.assert_allclose(stack.x, CELL * (np.arange(120) + 0.5), atol=1e-12)
    np.testing.assert_allclose(stack.y, 4.0 - CELL * (np.arange(80) + 0.5), atol=1e-12)
    np.testing.assert_array_equal(stack.depth_bounds, [[0.2, 0.3], [0.3, 0.4]])
    np.testing.assert_allclose(stack.depth, [0.25, 0.35])
    # First order by hand for b at 0.25 m, d = hypot(z, s/2): dz/z... = d²/z * dv/v; v/2 * d/z * dt; thickness/sqrt 12.
    d, z = math.hypot(0.25, 0.08), 0.25
    by_hand = math.sqrt((d * d / z * 0.2) ** 2 + (d / z * 0.05) ** 2 * (0.2**2 + 0.3**2 / 12.0) + 0.1**2 / 12.0)
    assert float(stack.depth_error[0]) == pytest.approx(by_hand, rel=1e-6)
    assert stack.attrs["crs"] == ""
    assert stack.attrs["cell_m"] == CELL


def test_measured_cell_beats_a_filled_one(tmp_path: Path) -> None:
    """Two crossing sets of 1 and 2: where only one has a line the value is its own; where both or none, the first's."""
    store = Store(tmp_path / "work")
    a = one_set("A/x")
    b = one_set("A/y", direction="y", n_lines=25, n_along=81)
    rows = {
        a.name: keep(store, a, np.full((2, 17, 121), 1.0)),
        b.name: keep(store, b, np.full((2, 25, 81), 2.0)),
    }
    plan = one_plan(a, b, bounds=(0.0, 0.0, 6.0, 4.0))
    stack = open_stack(grid_stack(plan, rows, store), plan).load()
    x, y = np.meshgrid(stack.x, stack.y)
    # Cell centres lie at odd multiples of 2.5 cm, lines at multiples of 25 cm: within half a cell is 2.5 cm, a tie
    # for the two cells beside each line, which both count.
    on_a = np.abs(y - 0.25 * np.round(y / 0.25)) < 0.026
    on_b = np.abs(x - 0.25 * np.round(x / 0.25)) < 0.026
    got = stack.amplitude.values[0]
    want = np.where(on_a, 1.0, np.where(on_b, 2.0, 1.0))
    np.testing.assert_allclose(got, want, rtol=1e-6)
    np.testing.assert_array_equal(stack.coverage.values, np.where(on_a | on_b, 1, 2))


def test_set_beside_another_fills_its_own_ground(tmp_path: Path) -> None:
    """Grids side by side: each cell once, from the grid it lies in."""
    store = Store(tmp_path / "work")
    a, b = one_set("A/x"), one_set("B/x", frame=turned(0.0, 6.05, 0.0))
    rows = {a.name: keep(store, a, np.full((2, 17, 121), 1.0)), b.name: keep(store, b, np.full((2, 17, 121), 2.0))}
    plan = one_plan(a, b, bounds=(0.0, 0.0, 12.05, 4.0))
    got = open_stack(grid_stack(plan, rows, store), plan).amplitude.values[0]
    assert np.isfinite(got).all()
    np.testing.assert_allclose(got[:, :120], 1.0, rtol=1e-6)
    np.testing.assert_allclose(got[:, 121:], 2.0, rtol=1e-6)


def test_missing_row_leaves_its_stripe_empty(tmp_path: Path) -> None:
    """Beyond 0.6 of a spacing from the neighbours nothing is shown; a damaged row in the store counts as missing."""
    store = Store(tmp_path / "work")
    s = one_set()
    rows = keep(store, s, np.full((2, 17, 121), 3.0), missing=(8,))
    path = store.path("rows", str(rows[4]), ".npy")
    path.write_bytes(path.read_bytes()[:40])
    plan = one_plan(s, bounds=(0.0, 0.0, 6.0, 4.0))
    stack = open_stack(grid_stack(plan, {s.name: rows}, store), plan).load()
    for row in (4, 8):
        empty = np.abs(stack.y.values - 0.25 * row) < 0.4 * 0.25 - 0.026  # 0.6 spacings from either neighbour
        assert empty.any()
        assert np.isnan(stack.amplitude.values[:, empty]).all()
        assert (stack.coverage.values[empty] == 0).all()
    assert np.isfinite(stack.amplitude.sel(y=1.5, method="nearest")).all()


def values_of(folder: Path, plan: Plan) -> dict[str, bytes]:
    stack: xr.Dataset = open_stack(folder, plan).load()
    return {name: stack[name].values.tobytes() for name in ("amplitude", "left_out_error", "coverage")}


def test_stack_is_made_once(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The second call makes no weights and writes nothing; another raster is another stack."""
    store = Store(tmp_path / "work")
    s = one_set()
    rows = {s.name: keep(store, s, np.random.default_rng(1).random((2, 17, 121)))}
    plan = one_plan(s, bounds=(0.0, 0.0, 6.0, 4.0))
    seen = []
    folder = grid_stack(plan, rows, store, progress=lambda *a: seen.append(a))
    assert seen[-1][1] == seen[-1][2] == len(seen)
    with monkeypatch.context() as patched:
        patched.setattr(gridded, "LineGridder", lambda *_, **__: pytest.fail("gridded again"))
        assert grid_stack(plan, rows, store) == folder
    other = plan.model_copy(update={"cell_m": 0.1})
    assert grid_stack(other, rows, store) != folder
    moved = plan.model_copy(update={"sets": (s.model_copy(update={"frame": turned(10.0)}),)})
    assert gridded_key(moved, rows) != gridded_key(plan, rows)
    titled = plan.model_copy(update={"title": "Another"})
    assert gridded_key(titled, rows) == gridded_key(plan, rows)


def test_half_made_stack_is_ignored(tmp_path: Path) -> None:
    """What a killed run left aside, strips or stack, is thrown away: the result is as if nothing had been there."""
    store = Store(tmp_path / "work")
    s = one_set()
    rows = {s.name: keep(store, s, np.random.default_rng(1).random((2, 17, 121)))}
    plan = one_plan(s, bounds=(0.0, 0.0, 6.0, 4.0))
    whole = grid_stack(plan, rows, store)
    want = values_of(whole, plan)
    strips = next((store.folder / "strips").iterdir())
    for folder in (whole, strips):
        part = folder.with_name(f".{folder.name}.part")
        shutil.copytree(folder, part)
        for path in [p for p in part.rglob("*") if p.is_file()][::2]:
            path.write_bytes(b"\xff" * 7)
        (part / "rest").write_text("of a killed run", encoding="utf-8")
        shutil.rmtree(folder)
    again = grid_stack(plan, rows, store)
    assert again == whole
    assert values_of(again, plan) == want
    assert not list(store.folder.rglob("*.part"))
    assert not (again / "rest").exists()


def test_blocks_do_not_show(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Gridding ten rows at a time gives the bytes of gridding all at once: memory is no matter of values."""
    s = one_set(frame=turned(12.0))
    plan = one_plan(s, bounds=(-1.0, 0.0, 6.0, 5.5))
    got = []
    for at_once in (10**9, 1500):
        monkeypatch.setattr(gridded, "CELLS_AT_ONCE", at_once)
        store = Store(tmp_path / f"work-{at_once}")
        rows = {s.name: keep(store, s, np.random.default_rng(1).random((2, 17, 121)))}
        got.append(values_of(grid_stack(plan, rows, store), plan))
    assert got[0] == got[1]


def test_strips_with_places_not_recorded(tmp_path: Path) -> None:
    """A line that ends early, flagged and NaN there: nothing is shown beside its missing half, no NaN leaks."""
    store = Store(tmp_path / "work")
    s = one_set()
    rows = keep(store, s, np.full((2, 17, 121), 3.0))
    half = np.full((2, 121), 3.0, np.float32)
    half[:, 61:] = np.nan
    flag = np.zeros(121, np.uint8)
    flag[61:] = FLAG_NONE
    store.save_array("rows", str(rows[8]), half)
    store.save_array("flags", str(rows[8]), flag)
    plan = one_plan(s, bounds=(0.0, 0.0, 6.0, 4.0))
    stack = open_stack(grid_stack(plan, {s.name: rows}, store), plan).load()
    got, covered = stack.amplitude.values[0], stack.coverage.values
    np.testing.assert_array_equal(np.isfinite(got), covered > 0)
    np.testing.assert_allclose(got[covered > 0], 3.0, rtol=1e-5)
    line = int(np.argmin(np.abs(stack.y.values - 1.975)))  # the cell beside line 8, at y = 2.0
    assert (covered[line, :60] == 1).all()
    assert (covered[line, 62:] == 0).all()
