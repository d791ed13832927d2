"""Steps by name: what order is possible, and what a plug-in can and cannot break."""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterator
from importlib.metadata import EntryPoint, entry_points
from types import ModuleType, SimpleNamespace

import numpy as np
import pytest
import xarray as xr

from planum import plugins, schema
from planum.engine import steps
from planum.engine.linepass import condition
from planum.errors import PlanumWarning, RecipeError
from planum.records import Record, Step, StepSpec
from planum.survey.config import DEFAULT_STEPS


class HalveParams(Record):
    """Settings of a plug-in step for tests."""

    times: int = 1


class Halve:
    """A plug-in step: every amplitude divided by two, ``times`` times."""

    name, version, reach, takes, gives, Params = "halve", 1, "trace", "voltage", "voltage", HalveParams

    def __call__(self, cube: xr.DataArray, **params: int) -> xr.DataArray:
        return cube * 0.5 ** params["times"]


@pytest.fixture
def install(monkeypatch: pytest.MonkeyPatch) -> Iterator[Callable[..., None]]:
    """Return a function that adds steps to the installed ones, as entry points of a package of one's own."""
    package = ModuleType("steps_of_a_package")
    monkeypatch.setitem(sys.modules, package.__name__, package)

    def add(name: str, step: object = None, *, value: str = "") -> None:
        setattr(package, f"step_{name}", step)
        found = [*entry_points(group=steps.GROUP), *extra]
        extra.append(EntryPoint(name, value or f"{package.__name__}:step_{name}", steps.GROUP))
        monkeypatch.setattr(plugins.metadata, "entry_points", lambda *, group: [*found, extra[-1]])
        steps.find_steps.cache_clear()

    extra: list[EntryPoint] = []
    yield add
    monkeypatch.undo()
    steps.find_steps.cache_clear()


def test_every_default_step_is_installed_and_is_a_step() -> None:
    """The recipe a survey gets without asking can be run, and each step is known by its own name."""
    found = steps.find_steps()
    for name in DEFAULT_STEPS:
        assert isinstance(found[name], Step)
        assert found[name].name == name


@pytest.mark.parametrize(
    "names",
    [
        DEFAULT_STEPS,
        ("envelope",),
        ("migrate", "envelope"),
        ("background", "bandpass", "dewow", "gain", "envelope"),  # linear steps commute as far as their types go
    ],
)
def test_possible_orders_pass(names: tuple[str, ...]) -> None:
    """Voltage steps in any order, the envelope last."""
    steps.check_order(names)


@pytest.mark.parametrize(
    ("names", "said"),
    [
        (("envelope", "migrate", "envelope"), r"'migrate' cannot follow 'envelope'"),
        (("dewow", "envelope", "gain"), r"'gain' cannot follow 'envelope': it takes voltage, and gets envelope"),
        (("dewow",), r"the recipe ends with voltage"),
        ((), r"the recipe ends with voltage"),
        (("gain", "dewow", "gain", "envelope"), r"'gain' comes twice"),
    ],
)
def test_impossible_orders_are_told(names: tuple[str, ...], said: str) -> None:
    """Each rule has its own sentence, under the key a person has to change."""
    with pytest.raises(RecipeError, match=said) as caught:
        steps.check_order(names)
    assert {p.key for p in caught.value.problems} == {"recipe.steps"}


def test_all_order_mistakes_are_told_at_once() -> None:
    """A step after the envelope, two steps twice, two unknown names, no envelope at the end: all in one error."""
    names = ("dewow", "dewov", "envelope", "gain", "dewow", "gain", "migrated")
    with pytest.raises(RecipeError, match="cannot follow") as caught:
        steps.check_order(names)
    text = str(caught.value)
    for said in ("'gain' cannot follow", "'dewow' comes twice", "'gain' comes twice", "'dewov'", "'migrated'"):
        assert said in text, said


def test_unknown_step_names_its_neighbour() -> None:
    """A slip of the pen is answered with the name that was meant, a strange word with all names."""
    with pytest.raises(RecipeError, match=r"there is no step 'migrat'; did you mean 'migrate'\?; mend the name"):
        steps.get_step("migrat")
    with pytest.raises(RecipeError, match=r"allowed: background, bandpass, dewow, envelope, gain, migrate"):
        steps.get_step("xyzzy")


@pytest.mark.parametrize(
    ("step", "value"),
    [
        (None, "no_such_package_anywhere:STEP"),  # its package was removed
        (None, "steps_of_a_package:no_such_object"),  # its object was renamed
        (SimpleNamespace(name="broken", version=1), ""),  # it is no step: reach, takes, gives, Params are missing
    ],
)
def test_broken_plug_in_warns_and_the_others_work(install: Callable[..., None], step: object, value: str) -> None:
    """One warning names the plug-in and what to do; it is not among the steps, all others are."""
    install("broken", step, value=value)
    with pytest.warns(PlanumWarning, match=r"the step 'broken' .* cannot be loaded.*the others work") as seen:
        found = steps.find_steps()
    assert len(seen) == 1
    assert "broken" not in found
    assert set(DEFAULT_STEPS) <= set(found)
    steps.check_order(DEFAULT_STEPS)
    with pytest.raises(RecipeError, match="there is no step 'broken'"):
        steps.get_step("broken")


def test_plug_in_that_raises_anything_only_warns(install: Callable[..., None]) -> None:
    """An attribute that raises on access, as a half-made object does, costs that step alone."""

    class Nasty:
        def __getattr__(self, name: str) -> object:
            raise RuntimeError(f"no {name} today")

    install("nasty", Nasty())
    with pytest.warns(PlanumWarning, match=r"no \w+ today"):
        assert set(DEFAULT_STEPS) <= set(steps.find_steps())


def test_own_step_runs_in_a_chain(install: Callable[..., None]) -> None:
    """A step from another package is found, ordered and run like the built-in ones, and gets its settings."""
    install("halve", Halve())
    steps.check_order(["dewow", "halve", "envelope"])
    rng = np.random.default_rng(1)
    raw = rng.standard_normal((1, 3, 64)).astype(np.float32)
    cube = schema.cube(raw, line=np.zeros(1), along=0.05 * np.arange(3), time=0.3 * np.arange(64))
    plain = condition(cube, [StepSpec(name="envelope", version=1)])
    halved = condition(
        cube, [StepSpec(name="halve", version=1, params={"times": 3}), StepSpec(name="envelope", version=1)]
    )
    # The envelope is homogeneous, and a power of two costs no digit in floating point: exactly an eighth.
    np.testing.assert_array_equal(halved.values, plain.values / 8.0)
    np.testing.assert_array_equal(cube.values, raw)
    assert halved.attrs["quantity"] == "envelope"
