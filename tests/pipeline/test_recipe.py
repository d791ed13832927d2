"""The recipe: everything wrong with it at once, every number filled in, and a text that can be pasted back."""

from __future__ import annotations

import re
import tomllib
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from planum import schema
from planum.engine.steps import get_step
from planum.errors import RecipeError
from planum.pipeline.recipe import chain_notes, limit_ns, resolve_chain, settings, settings_text, toml
from planum.records import CubeGeometry, SetFacts, StepSpec, Velocity
from planum.survey.config import DEFAULT_STEPS, Recipe
from planum.synthetic.modelling import ricker_spectrum

GEOMETRY = CubeGeometry(
    direction="x",
    line0_m=0.0,
    line_step_m=0.25,
    n_lines=12,
    along0_m=0.0,
    along_step_m=0.05,
    n_along=20,
    time0_ns=-3.0,
    time_step_ns=0.3,
    n_time=200,
)


def facts(*, loss_db_per_ns: float = 0.3, velocity: float = 0.0912345) -> SetFacts:
    """Facts of a set whose envelope falls as 1/t and by a known loss until it meets its noise."""
    time = GEOMETRY.times()
    late = np.maximum(time, 1.0)
    envelope = np.hypot(1e4 / late * 10 ** (-loss_db_per_ns * late / 20.0), 5.0)
    rng = np.random.default_rng(3)
    typical = rng.standard_normal((GEOMETRY.n_lines, 1, GEOMETRY.n_time)).astype(np.float32)
    frequency = 0.0125 * np.arange(120)
    return SetFacts(
        geometry=GEOMETRY,
        centre_frequency_ghz=0.4,
        separation_m=0.16,
        velocity=Velocity.constant(velocity, 0.002, origin="measured"),
        typical=schema.cube(typical, line=GEOMETRY.lines(), along=np.zeros(1), time=time),
        envelope=envelope,
        noise=5.0,
        spectrum=ricker_spectrum(frequency, 0.4) + 1e-3,
        spectrum_step_ghz=0.0125,
    )


def test_nothing_typed_is_the_default_recipe() -> None:
    """An empty recipe is all default steps in their order."""
    assert tuple(settings({})) == DEFAULT_STEPS
    assert tuple(settings({"steps": None})) == DEFAULT_STEPS


def test_all_mistakes_are_told_at_once() -> None:
    """Order, unknown step, settings without a step, an unknown setting, a wrong type, a value out of bounds."""
    recipe = {
        "steps": ["dewow", "gain", "envelope", "migrate", "dewow", "bandpas", "envelope"],
        "background": {"scope": "set"},
        "dewow": {"window": 3.0},
        "gain": {"power": 9.0, "start_ns": "early"},
        "migrate": {"max_dip_deg": "steep"},
    }
    with pytest.raises(RecipeError, match="'migrate' cannot follow 'envelope'") as caught:
        settings(recipe, file="site/survey.toml")
    told = {(p.key, p.came) for p in caught.value.problems}
    keys = [p.key for p in caught.value.problems]
    assert ("recipe.steps", "there is no step 'bandpas'") in told
    assert ("recipe.steps", "'dewow' comes twice") in told
    assert ("recipe.background", "settings for 'background', which is not among the steps") in told
    assert ("recipe.dewow.window", "unknown setting 'window'") in told
    for key in ("recipe.gain.power", "recipe.gain.start_ns", "recipe.migrate.max_dip_deg"):
        assert keys.count(key) == 1, key
    assert all(p.do for p in caught.value.problems)
    own = [p for p in caught.value.problems if p.key != "recipe.steps"]
    assert {p.file for p in own} == {"site/survey.toml"}
    unknown = next(p for p in caught.value.problems if p.key == "recipe.dewow.window")
    assert unknown.allowed == "did you mean 'window_ns'?"


@pytest.mark.parametrize(
    ("step", "typed", "key", "came"),
    [
        ("gain", {"start_ns": 20.0, "stop_ns": 10.0}, "start_ns", "start_ns is 20 and stop_ns 10"),
        ("bandpass", {"low_pass_ghz": 0.6, "high_pass_ghz": 0.5}, "low_pass_ghz", "corner frequencies low_pass"),
        ("background", {"scope": "line"}, "window_m", 'scope is "line" without window_m'),
        ("migrate", {"velocity_m_per_ns": 0.5}, "velocity_m_per_ns", "velocity_m_per_ns = 0.5"),
        ("migrate", {"max_dip_deg": 95.0, "dip_taper_deg": 0.0}, "max_dip_deg", "max_dip_deg = 95.0"),
        ("migrate", {"highest_ghz": 0.15}, "highest_ghz", "highest_ghz is 0.15 for an antenna of 0.4 GHz"),
    ],
)  # fmt: skip
def test_what_a_step_refuses_comes_with_file_and_key(step: str, typed: dict[str, Any], key: str, came: str) -> None:
    """Before anything is read: what came, what is allowed, what to do."""
    with pytest.raises(RecipeError, match=re.escape(came)) as caught:
        settings({step: typed}, file="site/survey.toml", centre_ghz=[0.4, 0.2])
    first = caught.value.problems[0]
    assert (first.file, first.key) == ("site/survey.toml", f"recipe.{step}.{key}")
    assert first.came.startswith(came)
    assert first.allowed
    assert first.do
    if came.startswith("highest"):
        assert len(caught.value.problems) == 1  # for the antenna of 0.2 GHz it is allowed


def test_notes_are_told_in_the_order_of_the_steps() -> None:
    """Twelve lines, a record that ends above its noise and no spectrum: each step says its own."""
    known = replace(facts(loss_db_per_ns=0.1), spectrum=np.zeros(120))
    chosen = settings({})
    told = chain_notes(chosen, known)
    assert [p.key for p in told] == ["recipe.gain.stop_ns", "recipe.bandpass", "recipe.background"]
    assert [p.severity for p in told] == ["note", "note", "warning"]
    assert [p.key for p in chain_notes(chosen, known, until="background")] == [p.key for p in told[:2]]
    assert chain_notes(settings({"steps": ["dewow", "envelope"]}), known) == ()


def test_limit_is_measured_or_not_known() -> None:
    """Twice the noise of 5 is met where 1e4 / t falls to 8.7 (the root of 10² - 5²), whatever stop was typed."""
    time = GEOMETRY.times()
    known = facts(loss_db_per_ns=1.2)
    meets = time[np.flatnonzero(known.envelope > 10.0)[-1]]
    for recipe in ({}, {"gain": {"stop_ns": 55.0}}):
        assert limit_ns(settings(recipe), known) == pytest.approx(meets, abs=2 * GEOMETRY.time_step_ns)
    assert limit_ns(settings({}), facts(loss_db_per_ns=0.1)) is None
    assert limit_ns(settings({"steps": ["dewow", "envelope"]}), known) is None


def test_every_automatic_number_is_filled_in() -> None:
    """After resolving nothing is left to decide, and what was typed stays as typed."""
    known = facts()
    chain = resolve_chain(settings({"gain": {"stop_ns": 31.0}, "bandpass": {"low_pass_ghz": 0.16}}), known)
    by_name = {s.name: s for s in chain}
    assert tuple(by_name) == DEFAULT_STEPS
    for spec in chain:
        left = {k for k, v in spec.params.items() if v is None}
        assert left <= {"window_m"}, (spec.name, left)  # belongs to the background along a line, not to this one
        assert spec.version == get_step(spec.name).version
    assert by_name["gain"].params["stop_ns"] == 31.0
    assert by_name["bandpass"].params["low_pass_ghz"] == 0.16
    assert by_name["migrate"].params["velocity_m_per_ns"] == 0.0912345
    # The envelope was made to fall by 0.3 dB/ns besides 1/t: the fit to a noise-free curve finds it to a few per cent
    # (the curve still bends towards its noise floor, 5 of some 100).
    assert by_name["gain"].params["absorption_db_per_ns"] == pytest.approx(0.3, rel=0.05)


def test_later_steps_learn_from_what_arrives_at_them() -> None:
    """The background to take off is the typical trace after dewow, gain and band-pass, not the recorded one."""
    known = facts()
    chosen = settings({})
    chain = resolve_chain(chosen, known)
    treated = known.typical
    for spec in chain[:3]:
        treated = get_step(spec.name)(treated, **spec.params)
    learn = get_step("background").learn  # type: ignore[attr-defined]
    want = learn(replace(known, typical=treated), chosen["background"]).model_dump(mode="json")
    plain = learn(known, chosen["background"]).model_dump(mode="json")
    assert chain[3].params == want
    assert chain[3].params != plain


def test_chain_stops_before_a_step() -> None:
    """The velocity scan wants everything before migration."""
    chain = resolve_chain(settings({}), facts(), until="migrate")
    assert [s.name for s in chain] == ["dewow", "gain", "bandpass", "background"]


def scalars(params: dict[str, Any]) -> dict[str, Any]:
    """Settings that are one number, word or truth value."""
    return {k: v for k, v in params.items() if v is not None and not isinstance(v, (list, tuple))}


def assert_same(read: dict[str, Any], want: dict[str, Any]) -> None:
    """The same names; words and truth values equal, numbers to the six significant figures of the text."""
    assert read.keys() == want.keys()
    for name, value in want.items():
        # Half a unit in the sixth figure is at most 5e-6 of the number.
        exact = isinstance(value, (str, bool))
        assert read[name] == (value if exact else pytest.approx(value, rel=5e-6)), name


@pytest.mark.parametrize(
    "recipe", [{}, {"steps": ["dewow", "background", "envelope"], "background": {"scope": "line", "window_m": 4.0}}]
)
def test_text_is_toml_and_lists_every_number(recipe: dict[str, Any]) -> None:
    """What a TOML reader finds is the chain, every scalar to the six figures written."""
    chain = resolve_chain(settings(recipe), facts())
    text = toml(chain)
    read = tomllib.loads(text)["recipe"]
    assert read["steps"] == [s.name for s in chain]
    for spec in chain:
        assert_same(read.get(spec.name, {}), scalars(spec.params))
        for name, value in spec.params.items():
            assert name in text
            if isinstance(value, (list, tuple)):
                assert f"# {name}: {len(value)}" in text


def test_text_can_be_pasted_back() -> None:
    """As a survey's recipe it is accepted, and resolves to the same chain whatever the facts are then."""
    chain = resolve_chain(settings({}), facts())
    table = Recipe.model_validate(tomllib.loads(toml(chain))["recipe"])
    other = facts(loss_db_per_ns=0.1, velocity=0.11)
    again = resolve_chain(settings({"steps": table.names(), **table.settings()}), other)
    for a, b in zip(chain, again, strict=True):
        assert_same(scalars(b.params), scalars(a.params))


def test_strange_words_survive_the_text() -> None:
    """A plug-in's setting may hold quotes, backslashes and exponents: still TOML, still the same value."""
    params = {"word": 'a "b" \\ c', "small": 1.25e-9, "large": 3e20, "on": True, "off": False, "n": -3, "none": None}
    chain = [StepSpec(name='od"d', version=1, params=params)]
    try:
        read = tomllib.loads(toml(chain))["recipe"]
    except tomllib.TOMLDecodeError as fault:
        pytest.fail(f"no TOML: {fault}\n{toml(chain)}")
    assert read['od"d'] == {k: v for k, v in params.items() if v is not None}


def test_settings_in_one_line() -> None:
    """For people: no comment marks, nothing that is not set; a step without settings says so."""
    assert settings_text({}) == "no settings"
    assert settings_text({"window_m": None}) == "no settings"
    text = settings_text({"scope": "set", "traces": ((1.0, 2.0, 3.0), (4.0, 5.0, 6.0)), "at_m": (0.5, 1.5), "n": 3})
    assert text == (
        'scope = "set", traces: 2×3 learned values, kept in run.json, at_m: 2 learned values, kept in run.json, n = 3'
    )
