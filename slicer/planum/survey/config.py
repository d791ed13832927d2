"""The contract of ``survey.toml``: frozen models, an unknown key is an error, every number within believable bounds.

Units stand in the keys: m, ns, MHz, m/ns. :mod:`planum.survey.checking` turns a TOML text into a
:class:`SurveyConfig` or into all its mistakes with their line numbers.
"""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Annotated, Any, ClassVar, Literal

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, field_validator, model_validator
from pydantic_core import PydanticCustomError

from planum.constants import VELOCITY_RANGE
from planum.errors import nearest, printable
from planum.survey.frames import check_crs
from planum.survey.safety import is_device, posix

__all__ = [
    "DEFAULT_STEPS",
    "Grid",
    "Ground",
    "Mistake",
    "Radar",
    "RawTable",
    "Recipe",
    "SliceTable",
    "SurveyConfig",
    "SurveyTable",
    "Visit",
    "name_or_complaint",
    "wrong",
]

DEFAULT_STEPS = ("dewow", "gain", "bandpass", "background", "migrate", "envelope")
MOST_LINES = 100_000
MOST_SLICES = 2_000


@dataclass(frozen=True)
class Mistake:
    """One contradiction inside a table: the path of the key from that table, what came, what is allowed, what to do."""

    key: tuple[str | int, ...]
    came: str
    allowed: str = ""
    do: str = ""


def wrong(came: str, allowed: str = "", do: str = "") -> PydanticCustomError:
    """Return the error a validator raises; its three parts survive on the way to a Problem."""
    return PydanticCustomError("planum", "{came}; {allowed}; {do}", {"came": came, "allowed": allowed, "do": do})


def name_or_complaint(name: str, *, longest: int = 32) -> str:
    """Return what is wrong with a name that ends up in file names, or ""."""
    if not re.fullmatch(r"\w[\w .+-]*", name) or name != name.strip() or name.endswith("."):
        return "allowed are letters, digits, blank, _ - + . (a letter or digit first)"
    if len(name) > longest:
        return f"allowed are at most {longest} characters"
    return "the name belongs to a device" if is_device(name) else ""


def _name(value: str) -> str:
    if complaint := name_or_complaint(value):
        raise wrong(f"the name {value!r} cannot be used in file names", complaint)
    return value


def _code(value: str) -> str:
    if not re.fullmatch(r"[A-Za-z0-9][A-Za-z0-9_-]{0,15}", value):
        raise wrong(
            f"the code {value!r} cannot be used in file names",
            "allowed are 1 to 16 letters a-z A-Z, digits, _ and -, a letter or digit first",
        )
    if is_device(value):
        raise wrong(f"the code {value!r} is the name of a device", "any other code is allowed")
    return value


def _date(value: object) -> object:
    if isinstance(value, str):
        try:
            return dt.date.fromisoformat(value)
        except ValueError:
            raise wrong(f"the date {value!r} is not understood", "a date is written 2026-04-18") from None
    return value


def _visit_name(value: object) -> object:
    return value.isoformat() if type(value) is dt.date else value


def _seen(value: str) -> str:
    return printable(value, longest=1000)


Text = Annotated[str, AfterValidator(_seen)]
"""Words for people: control characters are blanks from here on."""
Name = Annotated[str, AfterValidator(_name)]
OptionalName = Annotated[str, AfterValidator(lambda v: _name(v) if v else v)]
VisitName = Annotated[str, BeforeValidator(_visit_name)]
Metres = Annotated[float, Field(gt=0, le=10)]
Velocity = Annotated[float, Field(ge=VELOCITY_RANGE[0], le=VELOCITY_RANGE[1])]


class Table(BaseModel):
    """A table of ``survey.toml``: frozen, strict types, no unknown keys, no infinities."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)

    @classmethod
    def contradictions(cls, values: Mapping[str, Any]) -> Iterator[Mistake]:  # noqa: ARG003
        """Yield what does not go together; must bear values of any type, for it also runs on refused tables."""
        return iter(())

    @model_validator(mode="after")
    def _agree(self) -> Table:
        fields = type(self).model_fields
        for mistake in self.contradictions({f.alias or name: getattr(self, name) for name, f in fields.items()}):
            raise PydanticCustomError(
                "contradiction", "{text}", {"text": f"{mistake.came}; {mistake.allowed}; {mistake.do}"}
            )
        return self


def _given(values: Mapping[str, Any], *keys: str) -> list[str]:
    return [k for k in keys if values.get(k) is not None]


def _number(values: Mapping[str, Any], key: str) -> float | None:
    value = values.get(key)
    return float(value) if isinstance(value, int | float) and abs(value) < 1e9 else None


class SurveyTable(Table):
    """``[survey]``: what the survey is called and where its coordinates live."""

    title: Text = Field(min_length=1, max_length=200, description="what the survey is called in reports")
    code: Annotated[str, AfterValidator(_code)] = Field(description="a short code, used in file names")
    crs: Annotated[str, AfterValidator(check_crs)] | None = Field(
        None, description="the projected coordinate reference system of control.csv, such as EPSG:25832"
    )


class Radar(Table):
    """``[[radar]]``: one antenna and how it was set."""

    name: OptionalName = Field("", description="optional when there is only one radar")
    centre_frequency_mhz: float = Field(ge=10, le=3000, description="the nominal centre frequency, MHz")
    antenna_separation_m: float = Field(ge=0, le=10, description="distance from transmitter to receiver, m")
    sample_interval_ns: float | None = Field(None, gt=0, le=100, description="time between samples, ns")
    interval_unit: Literal["ps", "ns", "us"] | None = Field(None, description="what the file's interval field holds")
    time_zero_ns: float | None = Field(None, ge=0, le=5000, description="time zero, ns from sample 0")
    antenna_axis: Literal["along", "across"] = Field("along", description="direction from transmitter to receiver")
    recorded_gain: str = Field("unknown", description='"none", "unknown" or a csv of time and gain')

    @field_validator("recorded_gain", mode="after")
    @classmethod
    def _gain(cls, value: str) -> str:
        if value in ("none", "unknown") or value.lower().endswith(".csv"):
            return value
        raise wrong(f"recorded_gain is {value!r}", 'allowed are "none", "unknown" or the name of a .csv file')

    @classmethod
    def contradictions(cls, values: Mapping[str, Any]) -> Iterator[Mistake]:
        """Both ways to give the sample interval exclude each other."""
        if len(_given(values, "sample_interval_ns", "interval_unit")) == 2:
            yield Mistake(
                ("interval_unit",),
                "sample_interval_ns and interval_unit are both given",
                "one of the two is allowed: the interval itself, or the unit of the file's interval field",
                "remove one",
            )


class Visit(Table):
    """``[[visit]]``: a day, or part of one, with one ground condition."""

    name: OptionalName = Field("", description="optional: the date is used")
    date: Annotated[dt.date, BeforeValidator(_date)] = Field(description="the day, such as 2026-04-18")
    conditions: Text = Field("", max_length=1000, description="weather before, ground, vegetation")


class RawTable(Table):
    """``[grid.raw]``: the declared layout of a raw binary line file, bytes and types."""

    header_bytes: int = Field(ge=0, le=10**9, description="bytes before the first trace")
    samples: int = Field(ge=2, le=1_000_000, description="samples in one trace")
    bytes_before_trace: int = Field(0, ge=0, le=10**6, description="bytes before the samples of each trace")
    sample_type: Literal["int8", "uint8", "int16", "uint16", "int32", "uint32", "float32", "float64"] = Field(
        description="type of one sample"
    )
    byte_order: Literal["little", "big"] = Field("little", description="which byte of a sample comes first")

    @property
    def byte_order_mark(self) -> Literal["<", ">"]:
        """The byte order as array types spell it."""
        return "<" if self.byte_order == "little" else ">"


class Grid(Table):
    """``[[grid]]``: one rectangle of parallel lines, from a register or from the short form."""

    SHORT: ClassVar[tuple[str, ...]] = (
        "first_line",
        "first_line_m",
        "line_spacing_m",
        "line_length_m",
        "last_line",
        "line_count",
        "along",
        "walk",
        "first_walk",
    )

    name: Name = Field(description="what the grid is called in registers and outputs")
    register_file: str | None = Field(None, alias="register", description="the line register, such as lines.csv")
    files: str | None = Field(None, description='the short form, such as "lines/A_{line}.sgy"')
    first_line: int | None = Field(None, ge=0, le=10**6, description="number of the first line (1)")
    first_line_m: float | None = Field(None, ge=-1e5, le=1e5, description="place of the first line across (0), m")
    line_spacing_m: float | None = Field(None, ge=-100, le=100, description="from line to line, m; may be negative")
    line_length_m: float | None = Field(None, gt=0, le=10_000, description="length of a line, m")
    last_line: int | None = Field(None, ge=0, le=10**6, description="number of the last line")
    line_count: int | None = Field(None, ge=1, le=MOST_LINES, description="how many lines there are")
    along: Literal["x", "y"] | None = Field(None, description='the local axis the lines run along ("x")')
    walk: Literal["zigzag", "one-way"] | None = Field(None, description="how neighbouring lines were walked")
    first_walk: Literal["+", "-"] | None = Field(None, description='the way the first line was walked ("+")')
    radar: str = Field("", description="name of the radar; optional when there is only one")
    visit: VisitName = Field("", description="date or name of the visit; optional when there is only one")
    trace_spacing_m: Metres | None = Field(None, description="from trace to trace, m")
    cell_m: Metres | None = Field(None, description="cell of the plan grid, m")
    positions: Literal["register", "header"] = Field("register", description="where trace positions come from")
    split: Literal["fieldrecord", "trace_number", "point", "ensemble", "inline", "crossline", "counter"] | None = Field(
        None, description="the header field that tells the lines of one file apart"
    )
    channels: str | None = Field(None, description="the channels of an antenna array")
    raw: RawTable | None = Field(None, description="layout of raw binary line files")

    model_config = ConfigDict(populate_by_name=True)

    @property
    def register_name(self) -> str:
        """The register as a plain relative path; ``lines.csv`` when none is named."""
        return posix(self.register_file or "lines.csv")

    @classmethod
    def contradictions(cls, values: Mapping[str, Any]) -> Iterator[Mistake]:
        """Register and short form exclude each other; the short form has its own needs."""
        if values.get("files") is None:
            for key in _given(values, *cls.SHORT):
                yield Mistake(
                    (key,),
                    f"{key} belongs to the short form, and files is not given",
                    "a register gives the place of each line itself",
                    f"remove {key}, or give files in place of the register",
                )
            return
        if values.get("register") is not None:
            yield Mistake(
                ("files",), "register and files are both given", "one of the two is allowed", "remove one of them"
            )
        yield from cls._short_form(values)

    @classmethod
    def _short_form(cls, values: Mapping[str, Any]) -> Iterator[Mistake]:
        files = values["files"]
        if isinstance(files, str) and (
            files.count("{line}") != 1 or "{line}" not in re.split(r"[/\\]", files)[-1] or files.count("{") != 1
        ):
            yield Mistake(
                ("files",),
                f"files is {files!r}",
                'the file name holds {line} once, such as "lines/A_{line}.sgy"; leading zeros are found without help',
            )
        for key in ("line_spacing_m", "line_length_m"):
            if values.get(key) is None:
                yield Mistake((key,), f"{key} is missing", "the short form needs it", f"give {key}")
        if _number(values, "line_spacing_m") == 0:
            yield Mistake(("line_spacing_m",), "line_spacing_m is 0", "it is positive or negative, in m")
        if len(_given(values, "last_line", "line_count")) == 2:
            yield Mistake(
                ("line_count",), "last_line and line_count are both given", "one of the two is allowed", "remove one"
            )
        first, last = _number(values, "first_line"), _number(values, "last_line")
        first = 1.0 if first is None else first
        if last is not None and not 0 <= last - first < MOST_LINES:
            yield Mistake(
                ("last_line",),
                f"last_line is {last:.0f} and first_line {first:.0f}",
                f"last_line is not smaller, and there are at most {MOST_LINES} lines",
            )


class Ground(Table):
    """``[ground]``: what is known of the ground's velocity."""

    velocity_m_per_ns: Velocity | None = Field(None, description="otherwise estimated from the data")
    velocity_error_m_per_ns: float | None = Field(None, gt=0, le=0.2, description="its 1-sigma error, m/ns")
    soil: str | None = Field(None, description="a ground type")
    layers: list[Any] | str | None = Field(None, description="velocity layers")

    @classmethod
    def contradictions(cls, values: Mapping[str, Any]) -> Iterator[Mistake]:
        """Require that an error has a velocity and is smaller than it."""
        error, velocity = _number(values, "velocity_error_m_per_ns"), _number(values, "velocity_m_per_ns")
        if error is not None and values.get("velocity_m_per_ns") is None:
            yield Mistake(
                ("velocity_error_m_per_ns",),
                "an error is given without a velocity",
                "it goes with velocity_m_per_ns",
                "give velocity_m_per_ns, or remove the error so that both are estimated",
            )
        elif error is not None and velocity is not None and error >= velocity:
            yield Mistake(
                ("velocity_error_m_per_ns",),
                f"the error {error:g} is as large as the velocity {velocity:g}",
                "the error is a part of the velocity, in m/ns",
            )


class SliceTable(Table):
    """``[slices]``: which depths are shown, m below the ground surface."""

    top_m: float = Field(0.0, ge=0, le=100, description="top of the first slice, m")
    bottom_m: float = Field(2.0, gt=0, le=100, description="bottom of the last slice, m")
    thickness_m: Metres = Field(0.10, description="thickness of a slice, m")
    step_m: Metres = Field(0.05, description="from slice to slice, m")

    @classmethod
    def contradictions(cls, values: Mapping[str, Any]) -> Iterator[Mistake]:
        """Slices lie between top and bottom and leave no depth out."""
        full = {k: f.default for k, f in cls.model_fields.items()} | {k: v for k, v in values.items() if v is not None}
        top, bottom, thickness, step = (_number(full, k) for k in ("top_m", "bottom_m", "thickness_m", "step_m"))
        if top is not None and bottom is not None and top >= bottom:
            yield Mistake(("bottom_m",), f"bottom_m {bottom:g} is not below top_m {top:g}", "depths count downwards")
        elif None not in (top, bottom, thickness) and thickness > bottom - top + 1e-9:  # type: ignore[operator]
            yield Mistake(
                ("thickness_m",),
                f"thickness_m {thickness:g} does not fit between top_m {top:g} and bottom_m {bottom:g}",
                f"at most {bottom - top:g} m",  # type: ignore[operator]
            )
        if thickness is not None and step is not None and step > thickness + 1e-9:
            yield Mistake(
                ("step_m",),
                f"step_m {step:g} is larger than thickness_m {thickness:g}: depths between the slices would be lost",
                f"at most {thickness:g} m",
            )
        if None not in (top, bottom, step) and step > 0 and (bottom - top) / step > MOST_SLICES:  # type: ignore[operator]
            yield Mistake(("step_m",), f"step_m {step:g} makes too many slices", f"at most {MOST_SLICES} slices")


class Recipe(Table):
    """``[recipe]``: changes to the default steps; the engine checks each step's own table against its parameters."""

    model_config = ConfigDict(extra="allow")

    steps: Annotated[tuple[str, ...], Field(strict=False, max_length=50)] | None = Field(
        None, description="names of the steps in order"
    )

    def names(self) -> tuple[str, ...]:
        """Names of the steps in order, the default ones when none are given."""
        return DEFAULT_STEPS if self.steps is None else self.steps

    def settings(self) -> dict[str, dict[str, Any]]:
        """Return the typed settings of each step that has a table."""
        return {name: dict(table) for name, table in (self.model_extra or {}).items()}

    @model_validator(mode="after")
    def _tables_belong(self) -> Recipe:
        for mistake in self.contradictions({"steps": self.steps, **(self.model_extra or {})}):
            raise PydanticCustomError("contradiction", "{text}", {"text": f"{mistake.came}; {mistake.allowed}"})
        return self

    @classmethod
    def contradictions(cls, values: Mapping[str, Any]) -> Iterator[Mistake]:
        """Every table belongs to a step that runs."""
        steps = values.get("steps")
        names = [s for s in steps if isinstance(s, str)] if isinstance(steps, list | tuple) else list(DEFAULT_STEPS)
        for key, table in values.items():
            if key == "steps":
                continue
            if key not in names:
                yield Mistake((key,), f"{key!r} is not a step of this recipe", nearest(key, [*names, "steps"]))
            elif not isinstance(table, Mapping):
                yield Mistake((key,), f"the settings of {key!r} are not a table", f"write [recipe.{key}]")


def _tuple_of_tables(value: object) -> object:
    return (value,) if isinstance(value, Mapping) else tuple(value) if isinstance(value, list) else value


class SurveyConfig(Table):
    """All of ``survey.toml``."""

    survey: SurveyTable = Field(description="title, code and coordinate reference system")
    radar: Annotated[tuple[Radar, ...], BeforeValidator(_tuple_of_tables)] = Field(
        min_length=1, max_length=100, description="at least one antenna"
    )
    visit: Annotated[tuple[Visit, ...], BeforeValidator(_tuple_of_tables)] = Field((), max_length=1000)
    grid: Annotated[tuple[Grid, ...], BeforeValidator(_tuple_of_tables)] = Field(
        min_length=1, max_length=1000, description="at least one grid of lines"
    )
    ground: Ground = Ground()
    slices: SliceTable = SliceTable()
    recipe: Recipe = Recipe()
    elevation: Any = Field(None, description="the ground surface")
    obstacles: Any = Field(None, description="places that could not be walked")
    array: Any = Field(None, description="an antenna array")
    frame: Any = Field(None, description="further local frames")

    @field_validator("radar", mode="after")
    @classmethod
    def _radar_names(cls, radars: tuple[Radar, ...]) -> tuple[Radar, ...]:
        return tuple(r if r.name else r.model_copy(update={"name": f"{r.centre_frequency_mhz:g}"}) for r in radars)

    @field_validator("visit", mode="after")
    @classmethod
    def _visit_names(cls, visits: tuple[Visit, ...]) -> tuple[Visit, ...]:
        return tuple(v if v.name else v.model_copy(update={"name": v.date.isoformat()}) for v in visits)

    def radar_named(self, name: str) -> Radar:
        """Return the radar of this name; KeyError otherwise."""
        return next(r for r in self.radar if r.name == name)

    def visit_named(self, name: str) -> Visit | None:
        """Return the visit of this name or ISO date; None for the unnamed visit of a survey that lists none."""
        return next((v for v in self.visit if name in (v.name, v.date.isoformat())), None)

    def grid_named(self, name: str) -> Grid:
        """Return the grid of this name, in any case; KeyError otherwise."""
        for grid in self.grid:
            if grid.name.casefold() == name.casefold():
                return grid
        raise KeyError(name)
