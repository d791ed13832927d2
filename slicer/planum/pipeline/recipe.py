"""The recipe: which steps run in which order, with which settings.

What the survey leaves out is filled in from the site's own facts and then written out, so that a resolved recipe holds
every number.
"""

from __future__ import annotations

import json
import re
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from typing import Any

from pydantic import BaseModel, ValidationError

from planum.engine.steps import check_order, find_steps, get_step
from planum.errors import Problem, RecipeError, nearest
from planum.records import SetFacts, Step, StepSpec
from planum.survey.config import DEFAULT_STEPS

__all__ = ["chain_notes", "limit_ns", "resolve_chain", "settings", "settings_text", "toml"]


def settings(
    recipe: Mapping[str, Any], *, file: str = "survey.toml", centre_ghz: Sequence[float] = ()
) -> dict[str, BaseModel]:
    """Return the recipe's steps in order with their settings checked.

    Parameters
    ----------
    recipe : mapping
        ``steps`` and one table per step, as written in the survey.
    file : str
        Named in messages.
    centre_ghz : sequence of float
        Centre frequencies of the survey's antennas, GHz: settings that cannot be right for them are refused too.

    Raises
    ------
    RecipeError
        With all mistakes: unknown steps, settings for a step that is not in the recipe, values out of bounds, an
        impossible order.
    """
    names = list(recipe.get("steps") or DEFAULT_STEPS)
    tables = {k: v for k, v in recipe.items() if k != "steps"}
    problems: list[Problem] = []
    try:
        check_order(names)
    except RecipeError as fault:
        problems += fault.problems
    problems += [
        Problem(
            came=f"settings for {name!r}, which is not among the steps",
            allowed=nearest(name, names),
            do="mend the name or add the step",
            file=file,
            key=f"recipe.{name}",
        )
        for name in tables
        if name not in names
    ]
    out: dict[str, BaseModel] = {}
    installed = find_steps()
    for name in dict.fromkeys(names):
        if name not in installed:
            continue
        model = installed[name].Params
        try:
            out[name] = model.model_validate(tables.get(name, {}))
        except ValidationError as fault:
            problems += [p for e in fault.errors() for p in _problems(e, name, model, file)]
            continue
        refused = getattr(installed[name], "refused", None)
        if refused is not None:
            found = [refused(out[name], centre_ghz=centre) for centre in sorted(set(centre_ghz))]
            problems += [replace(p, file=file) for some in found for p in some]
    if problems:
        raise RecipeError(problems)
    return out


def _problems(error: Any, step: str, model: type[BaseModel], file: str) -> list[Problem]:
    key = ".".join([f"recipe.{step}", *(str(p) for p in error["loc"])])
    own = error.get("ctx", {}).get("error")
    if isinstance(own, RecipeError):  # a step's own check, which says more than a type can
        prefix = f"recipe.{step}."
        return [replace(p, file=file, key=prefix + p.key.removeprefix(prefix)) for p in own.problems]
    if error["type"] == "extra_forbidden":
        allowed = nearest(str(error["loc"][-1]), model.model_fields)
        return [
            Problem(f"unknown setting {error['loc'][-1]!r}", allowed=allowed, do="mend the name", file=file, key=key)
        ]
    return [Problem(came=f"{error['msg']} (got {error['input']!r})", do="mend the value", file=file, key=key)]


def resolve_chain(
    chosen: Mapping[str, BaseModel], facts: SetFacts, *, until: str | None = None
) -> tuple[StepSpec, ...]:
    """Fill in what is automatic from the set's facts, step by step, and return the chain as plain numbers.

    Each step learns from the typical traces as they arrive at it. ``until`` stops before the step of that name.
    """
    return tuple(spec for _, spec, _ in _walk(chosen, facts, until))


def chain_notes(chosen: Mapping[str, BaseModel], facts: SetFacts, *, until: str | None = None) -> tuple[Problem, ...]:
    """Return what the steps have to say about a set: what could not be learned, and what that means.

    Parameters and order as for :func:`resolve_chain`; a step speaks when it has ``notes(facts, params)``, of the typed
    settings and the facts as they arrive at it.
    """
    out: list[Problem] = []
    for step, spec, known in _walk(chosen, facts, until):
        notes = getattr(step, "notes", None)
        if notes is not None:
            out += notes(known, chosen[spec.name])
    return tuple(out)


def limit_ns(chosen: Mapping[str, BaseModel], facts: SetFacts) -> float | None:
    """Return the two-way time from which on a set holds noise, ns; None where it was not reached or no step knows.

    It is measured, whatever stop was typed for the gain.
    """
    for name, wanted in chosen.items():
        limit = getattr(get_step(name), "limit_ns", None)
        if limit is not None:
            found = limit(facts, wanted)
            return None if found is None else float(found)
    return None


def _walk(
    chosen: Mapping[str, BaseModel], facts: SetFacts, until: str | None
) -> Iterator[tuple[Step, StepSpec, SetFacts]]:
    """Yield every step, resolved, with the facts as they arrive at it."""
    for name, wanted in chosen.items():
        if name == until:
            return
        step = get_step(name)
        learn = getattr(step, "learn", None)
        params = wanted if learn is None else learn(facts, wanted)
        spec = StepSpec(name=name, version=step.version, params=params.model_dump(mode="json"))
        yield step, spec, facts
        if step.reach == "trace" and step.gives == "voltage":
            facts = replace(facts, typical=step(facts.typical, **spec.params))


def toml(chain: Sequence[StepSpec]) -> str:
    """Return a resolved chain as the recipe a person can paste into survey.toml; long curves are summarised."""
    rows = ["[recipe]", f"steps = [{', '.join(json.dumps(s.name) for s in chain)}]"]
    for spec in chain:
        if not spec.params:
            continue
        rows += ["", f"[recipe.{_toml_key(spec.name)}]"]
        for name, value in spec.params.items():
            rows.append(_toml_row(name, value))
    return "\n".join(rows) + "\n"


def settings_text(params: Mapping[str, Any]) -> str:
    """Return a step's settings in one line for people."""
    rows = [_toml_row(name, value) for name, value in params.items() if value is not None]
    return ", ".join(row.removeprefix("# ") for row in rows) or "no settings"


def _toml_key(name: str) -> str:
    return name if re.fullmatch(r"[A-Za-z0-9_-]+", name) else json.dumps(name, ensure_ascii=False)


def _toml_row(name: str, value: Any) -> str:
    if value is None:
        return f"# {name}: not set"
    if isinstance(value, (list, tuple)):
        size = "×".join(str(n) for n in _shape(value))
        return f"# {name}: {size} learned values, kept in run.json"
    if isinstance(value, bool):
        return f"{name} = {str(value).lower()}"
    if isinstance(value, (int, float)):
        return f"{name} = {value:.6g}" if isinstance(value, float) else f"{name} = {value}"
    return f"{name} = {json.dumps(str(value), ensure_ascii=False)}"  # a JSON string is a TOML string


def _shape(value: Any) -> list[int]:
    return [len(value), *(_shape(value[0]) if value else [])] if isinstance(value, (list, tuple)) else []
