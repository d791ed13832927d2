"""From the text of ``survey.toml`` to a :class:`~planum.survey.config.SurveyConfig`, or to all its mistakes at once.

What the contract knows but this version cannot do yet is refused by name, never ignored.
"""

from __future__ import annotations

import datetime as dt
import math
import typing
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from pydantic import BaseModel, ValidationError

from planum.errors import Problem, SurveyError, nearest, printable
from planum.survey import toml_text
from planum.survey.config import SurveyConfig, Table

__all__ = ["load_config"]

Loc = tuple[str | int, ...]

NOT_YET: dict[Loc, tuple[str, str]] = {
    ("elevation",): ("the ground surface (elevation)", "leave it out: depths then count from the local surface"),
    ("obstacles",): ("obstacles", "leave them out: cells without data are left empty"),
    ("array",): ("an antenna array", "give one line file and one register row per channel"),
    ("frame",): ("further local frames", "give control points per grid in control.csv"),
    ("grid", "channels"): ("an antenna array (channels)", "give one line file and one register row per channel"),
    ("ground", "soil"): ("a ground type (soil)", "give velocity_m_per_ns, or leave it out so that it is estimated"),
    ("ground", "layers"): ("velocity in layers", "give one velocity_m_per_ns, or leave it out so that it is estimated"),
}
"""Known to the contract, not supported yet: what it is called, what to do meanwhile."""

_TYPES = {
    "string_type": "text in quotes",
    "float_type": "a number",
    "int_type": "a whole number",
    "bool_type": "true or false",
    "date_type": "a date such as 2026-04-18",
    "tuple_type": "a list",
    "list_type": "a list",
    "model_type": "a table",
    "dict_type": "a table",
    "finite_number": "a finite number",
}


def load_config(text: str, *, file: str = "survey.toml") -> SurveyConfig:
    """Return the checked contents of a ``survey.toml``.

    Parameters
    ----------
    text
        The text of the file.
    file
        Its name, for messages.

    Raises
    ------
    SurveyError
        With every mistake found: file, line, key, what came and what is allowed.
    """
    data, places = toml_text.parse(text, file=file)
    mistakes = [*_not_yet(data), *_contradictions(data)]
    config = None
    try:
        config = SurveyConfig.model_validate(data)
    except ValidationError as error:
        for entry in error.errors(include_url=False):
            hollow = entry["type"] == "too_short" and data.get(str(entry["loc"][0]))  # only its bad items were dropped
            if entry["type"] != "contradiction" and not hollow:
                mistakes.append(_translated(data, entry))
    if config is None or mistakes:
        raise SurveyError(_placed(data, places, mistakes, file))
    return config


def _placed(
    data: Mapping[str, Any], places: toml_text.Places, mistakes: Sequence[tuple[Loc, tuple[str, str, str]]], file: str
) -> list[Problem]:
    problems = [
        Problem(came, allowed, do, file=file, line=places.line(loc), key=_spelled(data, loc))
        for loc, (came, allowed, do) in mistakes
    ]
    return sorted(dict.fromkeys(problems), key=lambda p: int(p.line or 0))


def _tables(data: Mapping[str, Any]) -> Iterator[tuple[Loc, type[Table], Mapping[str, Any]]]:
    """Yield every known table of the data, whatever else is wrong with it."""
    for name, model in _models().items():
        value = data.get(name)
        for i, table in enumerate(value if isinstance(value, list) else [value]):
            if isinstance(table, Mapping):
                yield (name, i) if isinstance(value, list) else (name,), model, table


def _models() -> dict[str, type[Table]]:
    found = {name: _model_of(field.annotation) for name, field in SurveyConfig.model_fields.items()}
    return {name: model for name, model in found.items() if model is not None}


def _model_of(annotation: Any) -> type[Table] | None:
    if isinstance(annotation, type) and issubclass(annotation, Table):
        return annotation
    for part in typing.get_args(annotation):
        if (found := _model_of(part)) is not None:
            return found
    return None


def _contradictions(data: Mapping[str, Any]) -> Iterator[tuple[Loc, tuple[str, str, str]]]:
    for loc, model, table in _tables(data):
        for mistake in model.contradictions(table):
            yield (*loc, *mistake.key), (mistake.came, mistake.allowed, mistake.do)
    yield from _names(data)


def _names(data: Mapping[str, Any]) -> Iterator[tuple[Loc, tuple[str, str, str]]]:
    """Names told apart inside the file: several radars, visits and grids each need their own, and are looked up."""
    known: dict[str, list[str]] = {"radar": [], "visit": [], "grid": []}
    fallback = {"radar": "centre_frequency_mhz", "visit": "date"}
    several = {kind: isinstance(data.get(kind), list) and len(data[kind]) > 1 for kind in known}
    for loc, _, table in _tables(data):
        kind = str(loc[0])
        if kind not in known:
            continue
        name = table.get("name")
        if kind == "radar" and several[kind] and not name:
            yield (*loc, "name"), ("name is missing", "each of several radars has a name", "give each its own")
        if not name and kind in fallback:
            other = table.get(fallback[kind])
            name = f"{other:g}" if isinstance(other, int | float) and abs(other) < 1e9 else _plain(other)
        if not isinstance(name, str) or not name:
            continue
        if name.casefold() in (n.casefold() for n in known[kind]):
            do = "give each visit of one day its own name" if kind == "visit" else "give each its own name"
            yield (*loc, "name"), (f"two tables [[{kind}]] are called {name!r}", "each name stands once", do)
        known[kind].append(name)
        if kind == "visit" and table.get("date") is not None:
            known[kind].append(_plain(table["date"]))
    for loc, _, table in _tables(data):
        if loc[0] != "grid":
            continue
        for kind in ("radar", "visit"):
            word = table.get(kind)
            word = _plain(word) if isinstance(word, dt.date) else word
            if isinstance(word, str) and word and word not in known[kind]:
                yield (
                    (*loc, kind),
                    (
                        f"no [[{kind}]] is called {word!r}",
                        _choices(word, known[kind]),
                        f"add a [[{kind}]] or mend the name",
                    ),
                )


def _choices(word: str, known: Sequence[str]) -> str:
    return nearest(word, set(known)) if known else "none is listed"


def _not_yet(data: Mapping[str, Any]) -> Iterator[tuple[Loc, tuple[str, str, str]]]:
    for path, (what, do) in NOT_YET.items():
        if len(path) == 1 and path[0] in data:
            yield path, (f"not supported yet: {what}", "", do)
    for loc, _, table in _tables(data):
        for key in table:
            if (loc[0], key) in NOT_YET:
                what, do = NOT_YET[loc[0], key]
                yield (*loc, key), (f"not supported yet: {what}", "", do)
        gain = table.get("recorded_gain") if loc[0] == "radar" else None
        if isinstance(gain, str) and gain.lower().endswith(".csv"):
            came = f"not supported yet: a recorded gain from a file ({gain})"
            yield (*loc, "recorded_gain"), (came, 'allowed are "none" and "unknown"', 'write "unknown" meanwhile')


def _translated(data: Mapping[str, Any], entry: Any) -> tuple[Loc, tuple[str, str, str]]:
    """Return one pydantic error as key path and what came, what is allowed, what to do."""
    loc = _as_written(data, entry["loc"])
    ctx, value, key = entry.get("ctx", {}), entry["input"], str(loc[-1]) if loc else ""
    came, do = f"{key} is {_shown(value)}", ""
    match entry["type"]:
        case "planum":
            came, allowed, do = ctx["came"], ctx["allowed"], ctx["do"]
        case "extra_forbidden":
            came, allowed = f"unknown key {key!r}", _nearest_key(loc)
        case "missing":
            came = f"the table [{key}] is missing" if len(loc) == 1 else f"{key} is missing"
            allowed = f"needed: {_field_help(loc)}"
        case "too_short":
            came, allowed = f"{key} is empty", f"needed: {_field_help(loc)}"
        case "literal_error":
            allowed = "allowed: " + str(ctx["expected"]).replace("'", '"').replace(" or ", ", ")
        case kind if kind in _TYPES:
            allowed = f"{_TYPES[kind]} is allowed"
            if isinstance(value, str) and kind in ("float_type", "int_type"):
                do = "write it without quotes, with a decimal point and no unit"
        case _:
            allowed = str(entry["msg"]).replace("Input should be", "it should be")
    return loc, (came, allowed, do)


def _as_written(data: Mapping[str, Any], loc: Loc) -> Loc:
    """Return the path in the file of a path in the model: ``[radar]`` stands for the only ``[[radar]]``."""
    if len(loc) > 1 and isinstance(data.get(str(loc[0])), Mapping) and loc[1] == 0:
        return (loc[0], *loc[2:])
    return tuple(loc)


def _model_at(loc: Loc) -> type[BaseModel]:
    model: type[BaseModel] = SurveyConfig
    for part in loc[:-1]:
        if isinstance(part, str):
            by_key = {f.alias or name: f for name, f in model.model_fields.items()}
            model = (part in by_key and _model_of(by_key[part].annotation)) or model
    return model


def _nearest_key(loc: Loc) -> str:
    """Name the nearest key of this table, or the table the key belongs to."""
    word = str(loc[-1])
    if len(loc) > 1:
        for name, model in _models().items():
            if word in {f.alias or n for n, f in model.model_fields.items()}:
                return f"{word!r} belongs to the table {name!r}"
    elif (home := next((n for n, m in _models().items() if word in m.model_fields), None)) is not None:
        return f"{word!r} belongs to the table {home!r}"
    return nearest(word, {f.alias or name for name, f in _model_at(loc).model_fields.items()})


def _field_help(loc: Loc) -> str:
    fields = {f.alias or name: f for name, f in _model_at(loc).model_fields.items()}
    return (fields[str(loc[-1])].description if str(loc[-1]) in fields else "") or str(loc[-1])


def _plain(value: Any) -> str:
    if isinstance(value, dt.date):
        return value.isoformat()
    return value if isinstance(value, str) else ""


def _shown(value: Any) -> str:
    """Return a short picture of a value; whole numbers of thousands of digits cannot be printed."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int) and abs(value) >= 10**18:
        return "an enormous whole number"
    if isinstance(value, int | float):
        return f"{value}" if math.isfinite(value) else "not finite"
    if isinstance(value, str):
        return f'"{printable(value, longest=60)}"'
    if isinstance(value, Mapping):
        return "a table"
    return "a list" if isinstance(value, list | tuple) else printable(value, longest=60)


def _spelled(data: Mapping[str, Any], loc: Loc) -> str:
    """Return a key path for people: ``radar.name``, ``grid[A].cell_m``, ``grid[2].cell_m`` (counted from 1)."""
    words = ""
    at: Any = data
    for part in loc:
        if isinstance(part, int):
            at = at[part] if isinstance(at, list) and part < len(at) else None
            name = at.get("name") if isinstance(at, Mapping) else None
            words += f"[{name if isinstance(name, str) and name else part + 1}]"
        else:
            at = at.get(part) if isinstance(at, Mapping) else None
            words += f".{part}" if words else part
    return words
