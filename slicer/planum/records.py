"""Small frozen records: what is learned, what is planned, what every product says of itself.

All are pure JSON underneath: a person can read, edit, diff and rerun them. :func:`key` names content by its hash.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal, Protocol, runtime_checkable

import numpy as np
from pydantic import BaseModel, ConfigDict, Field

from planum.constants import CAUTIONS

if TYPE_CHECKING:
    from xarray import DataArray

__all__ = [
    "FLAG_CLIPPED",
    "FLAG_DEAD",
    "FLAG_FILLED",
    "FLAG_NONE",
    "FLAG_POSITION",
    "FLAG_RIM",
    "CubeGeometry",
    "Estimate",
    "Facts",
    "LineEntry",
    "Plan",
    "Record",
    "SetFacts",
    "SetPlan",
    "Similarity",
    "Statement",
    "Step",
    "StepSpec",
    "Strip",
    "Velocity",
    "canon",
    "key",
    "migration_velocity",
]

FLAG_NONE, FLAG_DEAD, FLAG_CLIPPED, FLAG_FILLED, FLAG_POSITION, FLAG_RIM = 1, 2, 4, 8, 16, 32
"""Bits of ``flag``: no recording, dead trace, clipped, short gap filled, position error over a cell, rim of the
migration aperture."""


class Record(BaseModel):
    """A frozen record: unknown fields are errors, infinities and NaN are refused."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


def canon(x: Any) -> str:
    """Return the one JSON text of a record or plain value: sorted, compact, ASCII, no NaN."""
    if isinstance(x, BaseModel):
        x = x.model_dump(mode="json")
    return json.dumps(x, sort_keys=True, separators=(",", ":"), ensure_ascii=True, allow_nan=False, default=_plain)


def _plain(x: Any) -> Any:
    if isinstance(x, BaseModel):
        return x.model_dump(mode="json")
    raise TypeError(f"{type(x).__name__} has no plain form")


def key(x: Any) -> str:
    """Return the first 16 hexadecimal digits of the sha256 of :func:`canon`."""
    return hashlib.sha256(canon(x).encode()).hexdigest()[:16]


class Estimate(Record):
    """A number that was not simply typed: value, 1-sigma error, unit, where it comes from."""

    value: float
    error: float
    unit: str
    origin: Literal["measured", "given", "book"]
    method: str
    n: int = 1
    evidence: str = ""

    def __str__(self) -> str:
        """Value, error, unit and origin for people."""
        return f"{self.value:.4g} ± {self.error:.2g} {self.unit} ({self.origin}: {self.method})"


class Velocity(Record):
    """Velocity of the ground with its error; the only depth conversion and the only depth error budget.

    One knot is a constant velocity; several knots of v(z) are read but not yet supported by the conversion.
    """

    depth_m: tuple[float, ...] = (0.0,)
    v_m_per_ns: tuple[float, ...]
    covariance: tuple[tuple[float, ...], ...]
    origin: Literal["measured", "given", "book"]
    method: str = ""

    @property
    def value(self) -> float:
        """Constant velocity, m/ns."""
        return self.v_m_per_ns[0]

    @property
    def error(self) -> float:
        """1-sigma error of the constant velocity, m/ns."""
        return math.sqrt(self.covariance[0][0])

    @classmethod
    def constant(
        cls, value: float, error: float, *, origin: Literal["measured", "given", "book"], method: str = ""
    ) -> Velocity:
        """Return a velocity that is the same at all depths (m/ns)."""
        return cls(v_m_per_ns=(value,), covariance=((error**2,),), origin=origin, method=method)

    def time(self, depth: Any, *, separation_m: float) -> Any:
        """Two-way time in ns, from emission, for ``depth`` in m below the surface.

        t = 2 sqrt(depth² + (s/2)²) / v with the antenna separation s (plane reflector, straight rays).
        """
        return 2.0 * np.hypot(np.asarray(depth, float), separation_m / 2.0) / self.value

    def depth(self, time: Any, *, separation_m: float) -> Any:
        """Depth in m for two-way ``time`` in ns; 0 before the direct ground wave arrives."""
        half = self.value * np.asarray(time, float) / 2.0
        return np.sqrt(np.maximum(half**2 - (separation_m / 2.0) ** 2, 0.0))

    def depth_error(
        self, depth: Any, *, separation_m: float, zero_error_ns: float, thickness_m: float, sample_ns: float
    ) -> Any:
        """1-sigma depth error in m from velocity, time zero, time sampling and interval thickness.

        First-order propagation through :meth:`depth`; sampling and thickness count as uniform (width/sqrt 12).
        """
        depth = np.asarray(depth, float)
        slant = np.hypot(depth, separation_m / 2.0)
        reach = slant / np.maximum(depth, thickness_m / 2.0 + 1e-9)  # dz/dr of the slant path, bounded at the surface
        from_velocity = slant * reach * self.error / self.value
        from_time = reach * self.value / 2.0 * math.hypot(zero_error_ns, sample_ns / math.sqrt(12.0))
        return np.sqrt(from_velocity**2 + from_time**2 + thickness_m**2 / 12.0)


class Facts(Record):
    """What the census keeps of one recorded line: a few numbers and curves, never traces."""

    file_id: str
    n_traces: int
    n_samples: int
    interval_ns: float
    interval_origin: str
    dtype: str
    full_scale: float = Field(description="largest absolute value the file's type can hold; 0 for floats")
    largest: float
    zero_pick_ns: float = Field(description="envelope maximum of the direct wave, from sample 0")
    zero_spread_ns: float
    zero_clipped: bool = Field(description="the direct wave is clipped: its pick carries more error")
    dead: tuple[int, ...] = ()
    clipped: tuple[int, ...] = ()
    typical: tuple[float, ...] = Field(description="robust typical trace (midmean of live traces), raw samples")
    envelope: tuple[float, ...] = Field(description="median envelope of typical-removed, dewowed traces, per sample")
    spectrum: tuple[float, ...] = Field(description="median amplitude spectrum over the ground window")
    spectrum_step_ghz: float
    noise: float = Field(description="median envelope over the last tenth of the window")
    direct: float = Field(description="envelope of the typical trace's direct wave")
    first_xy: tuple[float, float] | None = Field(None, description="header position of the first trace, m")
    last_xy: tuple[float, float] | None = None
    bend_m: float = Field(0.0, description="largest distance of a header position from the straight line, m")
    header: dict[str, Any] = {}
    problems: tuple[dict[str, Any], ...] = ()


class LineEntry(Record):
    """One register row plus all corrections: what the line pass needs to know of one piece of a line."""

    key: str
    set: str
    grid: str
    line: str
    row: int = Field(description="index on the cube's line axis")
    file: str
    file_id: str = ""
    interval_ns: float | None = Field(
        None, gt=0, description="sample interval of the recording; None: as the file says"
    )
    first_trace: int
    last_trace: int
    start: tuple[float, float]
    end: tuple[float, float]
    channel: int | None = None
    part: int | None = Field(None, description="which recording inside a file that holds several lines")
    header_positions: bool = False
    track: str | None = None
    zero_ns: tuple[tuple[int, float], ...] = ((0, 0.0),)
    along_shift_m: float = 0.0
    along_scale: float = 1.0
    gain: float = 1.0
    reverse: bool = False
    dropped: tuple[tuple[int, int], ...] = ()
    because: tuple[str, ...] = ()

    def zero_at(self, n: int) -> np.ndarray:
        """Time zero of ``n`` traces from ``first_trace`` on, in ns from sample 0."""
        at, ns = zip(*self.zero_ns, strict=True)
        return np.interp(np.arange(n) + self.first_trace, at, ns)


class CubeGeometry(Record):
    """The regular axes of one set: ``line`` (m across), ``along`` (m), ``time`` (ns from time zero)."""

    direction: Literal["x", "y"] = Field(description="the local axis the lines run along")
    line0_m: float
    line_step_m: float
    n_lines: int
    along0_m: float
    along_step_m: float
    n_along: int
    time0_ns: float
    time_step_ns: float
    n_time: int

    def lines(self) -> np.ndarray:
        """Coordinate of the ``line`` axis, m."""
        return self.line0_m + self.line_step_m * np.arange(self.n_lines)

    def along(self) -> np.ndarray:
        """Coordinate of the ``along`` axis, m."""
        return self.along0_m + self.along_step_m * np.arange(self.n_along)

    def times(self) -> np.ndarray:
        """Coordinate of the ``time`` axis, ns; starts a little before time zero."""
        return self.time0_ns + self.time_step_ns * np.arange(self.n_time)


class StepSpec(Record):
    """One resolved step: everything its function is called with."""

    name: str
    version: int
    params: dict[str, Any] = {}


class Similarity(Record):
    """Local to map: east = e0 + a x - b y, north = n0 + b x + a y (scale and rotation in a, b); mirrored flips y."""

    a: float = 1.0
    b: float = 0.0
    e0: float = 0.0
    n0: float = 0.0
    mirrored: bool = False
    residuals_m: tuple[tuple[str, float], ...] = ()
    error_m: float | None = Field(None, description="root mean square residual; None without redundancy")
    origin: str = "local frame"

    @property
    def scale(self) -> float:
        """Map metres per local metre."""
        return math.hypot(self.a, self.b)

    @property
    def rotation_deg(self) -> float:
        """Counter-clockwise angle from map east to local x."""
        return math.degrees(math.atan2(self.b, self.a))

    def forward(self, x: Any, y: Any) -> tuple[Any, Any]:
        """Local x, y (m) to east, north."""
        x, y = np.asarray(x, float), np.asarray(y, float)
        y = -y if self.mirrored else y
        return self.e0 + self.a * x - self.b * y, self.n0 + self.b * x + self.a * y

    def inverse(self, east: Any, north: Any) -> tuple[Any, Any]:
        """East, north to local x, y (m)."""
        e, n = np.asarray(east, float) - self.e0, np.asarray(north, float) - self.n0
        d = self.a**2 + self.b**2
        x, y = (self.a * e + self.b * n) / d, (self.a * n - self.b * e) / d
        return x, (-y if self.mirrored else y)


class SetPlan(Record):
    """Everything one set (one grid, direction, antenna, day) needs in the second pass."""

    name: str
    grid: str
    radar: str
    visit: str
    geometry: CubeGeometry
    centre_frequency_ghz: float
    separation_m: float
    reader: dict[str, Any] = Field({}, description="how the line files are read: split, layout, reader")
    zero: Estimate
    velocity: Velocity
    chain: tuple[StepSpec, ...]
    windows_ns: tuple[tuple[float, float], ...] = Field(description="time window of every slice, from time zero")
    entries: tuple[LineEntry, ...]
    frame: Similarity
    limit_depth_m: float | None = Field(None, description="where the median envelope meets twice the noise")


def migration_velocity(plan: SetPlan) -> float | None:
    """Return the velocity a set's lines are migrated at, m/ns; None when they are not."""
    return next((s.params.get("velocity_m_per_ns") for s in plan.chain if s.name == "migrate"), None)


class Plan(Record):
    """Every number of a run. The second pass is a function of raw bytes and this alone."""

    version: str
    title: str
    code: str
    crs: str | None
    cell_m: float = Field(gt=0)
    bounds: tuple[float, float, float, float] = Field(description="west, south, east, north of the common raster")
    intervals_m: tuple[tuple[float, float], ...]
    statistic: Literal["mean"] = "mean"
    sets: tuple[SetPlan, ...]
    set_aside: tuple[dict[str, Any], ...] = ()
    notes: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Strip:
    """What the line pass returns for one row of a set: slices along one line, a few 100 kB, ready to travel.

    ``values`` (slice, along) float32; ``flag`` (along) uint8; ``section`` holds uint8 pictures when asked for.
    """

    row: int
    values: np.ndarray
    flag: np.ndarray
    section: Mapping[str, np.ndarray] | None = None
    problems: tuple[Any, ...] = ()


Quantity = Literal["voltage", "envelope"]


@runtime_checkable
class Step(Protocol):
    """A processing step, found by name through the entry-point group ``planum.steps``."""

    name: str
    version: int
    reach: Literal["trace", "line", "set"]
    takes: Quantity
    gives: Quantity
    Params: type[BaseModel]

    def __call__(self, cube: DataArray, **params: Any) -> DataArray:
        """Return a new array; the caller's stays as it was."""
        ...


class Statement(Record):
    """What a slice says of itself, in every product the same."""

    quantity: str
    top_m: float
    bottom_m: float
    statistic: str
    velocity_m_per_ns: float
    velocity_error_m_per_ns: float
    velocity_origin: str
    depth_error_m: float
    zero_rule: str
    zero_error_ns: float
    surface: str
    date: str
    migration: str
    fill: str
    line_spacing_m: float
    coverage_rule: str
    resolution: str
    stretch: str
    cautions: tuple[str, ...] = CAUTIONS
    survey: str = ""
    plan_key: str = ""
    version: str = ""
    noise: str = Field("", description="where the slice lies to the depth at which ground sinks into noise")

    @property
    def in_noise(self) -> bool:
        """Whether the slice lies where only strong reflectors show."""
        return self.noise.startswith("below")

    def tags(self) -> dict[str, str]:
        """Return upper-case TIFF tags; what is empty has none, as TIFF readers drop empty ones."""
        return {f"PLANUM_{k.upper()}": v for k, v in self._texts().items() if v}

    def attrs(self) -> dict[str, Any]:
        """Return attributes for NetCDF: numbers stay numbers."""
        return {k: (" ".join(v) if isinstance(v, tuple) else v) for k, v in self.model_dump().items()}

    def sentence(self) -> str:
        """Return the statement as people read it."""
        return (
            f"{self.quantity}, {self.statistic} from {self.top_m:.2f} to {self.bottom_m:.2f} m"
            f" (± {self.depth_error_m:.2f} m) below {self.surface}, visit {self.date};"
            f" velocity {self.velocity_m_per_ns:.4f} ± {self.velocity_error_m_per_ns:.4f} m/ns"
            f" ({self.velocity_origin}); time zero: {self.zero_rule}, ± {self.zero_error_ns:.2f} ns;"
            f" {self.migration}; {self.fill}; {self.coverage_rule}; {self.resolution};"
            f"{f' {self.noise};' if self.noise else ''} {self.stretch}."
        )

    def _texts(self) -> dict[str, str]:
        return {
            k: " ".join(v) if isinstance(v, tuple) else (f"{v:.6g}" if isinstance(v, float) else str(v))
            for k, v in self.model_dump().items()
        }


@dataclass(frozen=True, eq=False)
class SetFacts:
    """What a step may learn from: one set's measured curves, already moved to the cube's time axis.

    ``typical`` is a cube (line: one row per recorded line, along: 1, time) of robust typical traces *as they arrive
    at the step that learns*; ``envelope`` (n_time) the median raw envelope over lines with typical traces removed;
    ``noise`` its late level, which is noise only where it has stopped falling; ``spectrum`` (frequency) the median
    amplitude spectrum, ``spectrum_step_ghz`` its step.
    """

    geometry: CubeGeometry
    centre_frequency_ghz: float
    separation_m: float
    velocity: Velocity
    typical: DataArray
    envelope: np.ndarray
    noise: float
    spectrum: np.ndarray
    spectrum_step_ghz: float
