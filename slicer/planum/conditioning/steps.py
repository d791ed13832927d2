"""The conditioning steps of a recipe, in their one order: dewow, gain, band-pass, background.

A setting left out (None) is automatic: ``learn`` resolves it from a set's measured facts into plain numbers, which the
plan then holds, so that the second pass estimates nothing.
"""

from __future__ import annotations

import math
from typing import Any, Literal, Self

import numpy as np
import xarray as xr
from pydantic import Field, model_validator

from planum.conditioning import learning
from planum.conditioning.background import background
from planum.conditioning.bandpass import bandpass
from planum.conditioning.dewow import dewow, odd_window
from planum.conditioning.gain import gain
from planum.errors import Problem, RecipeError
from planum.records import Quantity, Record, SetFacts

__all__ = ["BACKGROUND", "BANDPASS", "DEWOW", "GAIN", "Background", "Bandpass", "Dewow", "Gain"]

Reach = Literal["trace", "line", "set"]

_PULSE_PERIODS = 1.5
"""Length of a radar pulse in periods of its centre frequency (common practice; a Ricker wavelet has 1.5 visible)."""

_DEWOW_PERIODS = 2.0


def _direct_ns(facts: SetFacts, periods: float) -> float:
    """Return the time ``periods`` of the centre frequency after the direct ground wave, ns."""
    return facts.separation_m / facts.velocity.value + periods / facts.centre_frequency_ghz


class DewowParams(Record):
    """Settings of ``dewow``."""

    window_ns: float | None = Field(None, gt=0, description="running mean, ns; automatic: two periods, odd samples")


class Dewow:
    """The step ``dewow``: the slow drift of every trace is taken off."""

    name = "dewow"
    version = 1
    reach: Reach = "trace"
    takes: Quantity = "voltage"
    gives: Quantity = "voltage"
    Params = DewowParams

    def learn(self, facts: SetFacts, params: DewowParams) -> DewowParams:
        """Two periods of the centre frequency: long enough for the pulse, short enough for the wow."""
        if params.window_ns is not None:
            return params
        step = facts.geometry.time_step_ns
        samples = odd_window(_DEWOW_PERIODS / facts.centre_frequency_ghz, step)
        return params.model_copy(update={"window_ns": round(samples * step, 6)})

    def __call__(self, cube: xr.DataArray, **params: Any) -> xr.DataArray:
        """See :func:`planum.conditioning.dewow.dewow`."""
        return dewow(cube, **params)


class GainParams(Record):
    """Settings of ``gain``."""

    power: float = Field(1.0, ge=0, le=4, description="exponent of the spreading law")
    absorption_db_per_ns: float | None = Field(None, ge=0, description="automatic: measured on the median envelope")
    start_ns: float | None = Field(None, gt=0, description="automatic: end of the direct wave")
    stop_ns: float | None = Field(
        None, gt=0, description="automatic: where the envelope meets twice the noise, or the record's end"
    )

    @model_validator(mode="after")
    def _in_order(self) -> Self:
        if self.start_ns is not None and self.stop_ns is not None and self.start_ns > self.stop_ns:
            raise RecipeError(
                Problem(
                    came=f"start_ns is {self.start_ns:g} and stop_ns {self.stop_ns:g}",
                    allowed="a stop not before the start",
                    do="exchange them, or leave one out: it is then found from the survey",
                    key="start_ns",
                )
            )
        return self


class Gain:
    """The step ``gain``: one curve for the set, from spreading and measured absorption, stopped at the noise."""

    name = "gain"
    version = 2
    reach: Reach = "trace"
    takes: Quantity = "voltage"
    gives: Quantity = "voltage"
    Params = GainParams

    def learn(self, facts: SetFacts, params: GainParams) -> GainParams:
        """Start after the direct ground wave and its pulse, stop at twice the noise, absorption in between.

        Where the record ends before the noise plainly begins, noise is fitted with the absorption.
        """
        start, stop, loss = self._found(facts, params, most=learning.ABSORPTION_MOST)
        found = {"start_ns": round(start, 6), "stop_ns": round(stop, 6), "absorption_db_per_ns": round(loss, 9)}
        return params.model_copy(update=found)

    def limit_ns(self, facts: SetFacts, params: GainParams) -> float | None:
        """Return the time where the envelope meets twice the noise, or None where the noise was not reached."""
        limit = self._meets(facts, params)
        return None if limit is None or limit >= facts.geometry.times()[-1] else round(limit, 6)

    def notes(self, facts: SetFacts, params: GainParams) -> tuple[Problem, ...]:
        """Say when the record ends above the noise, and when the decay is steeper than ground can be."""
        problems = []
        if self.limit_ns(facts, params) is None:
            problems.append(
                Problem(
                    came=f"the record ends at {facts.geometry.times()[-1]:.1f} ns before its level has become even:"
                    " where noise begins is not known",
                    do="no limit of depth is stated; a longer window would show it",
                    key="recipe.gain.stop_ns",
                    severity="note",
                )
            )
        most = learning.ABSORPTION_MOST
        if params.absorption_db_per_ns is None and self._found(facts, params, most=math.inf)[2] > most:
            loss = self._found(facts, params, most=math.inf)[2]
            problems.append(
                Problem(
                    came=f"the signal falls by {loss:.2f} dB/ns besides spreading, the gain makes up for {most:g}",
                    allowed=f"up to {most:g} dB/ns, which wet clay takes",
                    do="late slices are darker than the ground; look for a recording that was cut or muted, a window"
                    " that is too short, or give absorption_db_per_ns",
                    key="recipe.gain.absorption_db_per_ns",
                    severity="warning",
                )
            )
        return tuple(problems)

    def __call__(self, cube: xr.DataArray, **params: Any) -> xr.DataArray:
        """See :func:`planum.conditioning.gain.gain`."""
        return gain(cube, **params)

    @staticmethod
    def _start(facts: SetFacts, params: GainParams) -> float:
        if params.start_ns is not None:
            return params.start_ns
        last = params.stop_ns or float(facts.geometry.times()[-1])
        return max(min(_direct_ns(facts, _PULSE_PERIODS), last), min(facts.geometry.time_step_ns, last))

    def _meets(self, facts: SetFacts, params: GainParams) -> float | None:
        """Return where the envelope meets twice the noise; None when the record's end is no noise."""
        period = 1.0 / facts.centre_frequency_ghz
        time, start = facts.geometry.times(), self._start(facts, params)
        envelope = np.asarray(facts.envelope, float)
        if not learning.noise_is_seen(envelope, time, start_ns=start, period_ns=period):
            return None
        return learning.gain_span(envelope, facts.noise, time, start_ns=start, period_ns=period)

    def _found(self, facts: SetFacts, params: GainParams, *, most: float) -> tuple[float, float, float]:
        """Return start, stop and absorption.

        Where the record's end is plainly noise, that noise is known; else noise and absorption are fitted together, and
        the gain stops at twice the fitted noise, if there is any.
        """
        start, meets = self._start(facts, params), self._meets(facts, params)
        time, period = facts.geometry.times(), 1.0 / facts.centre_frequency_ghz
        envelope = np.asarray(facts.envelope, float)
        known = {"power": params.power, "period_ns": period}
        loss = params.absorption_db_per_ns
        stop = params.stop_ns or meets
        if stop is None:
            fitted = learning.decay(envelope, facts.noise, time, start_ns=start, **known)
            found, floor = fitted or (0.0, 0.0)
            stop = float(time[-1])
            if floor > 0:
                stop = learning.gain_span(envelope, floor, time, start_ns=start, period_ns=period)
            loss = min(found, most) if loss is None else loss
        stop = max(stop, start)
        if loss is None:
            noise = 0.0 if meets is None else facts.noise
            loss = learning.absorption(envelope, noise, time, span_ns=(start, stop), most=most, **known)
        return start, stop, loss or 0.0


class BandpassParams(Record):
    """Settings of ``bandpass``: four ascending corner frequencies, GHz; automatic from the ground's spectrum."""

    low_stop_ghz: float | None = Field(None, ge=0)
    low_pass_ghz: float | None = Field(None, gt=0)
    high_pass_ghz: float | None = Field(None, gt=0)
    high_stop_ghz: float | None = Field(None, gt=0)

    @model_validator(mode="after")
    def _in_order(self) -> Self:
        given = {k: v for k, v in self.model_dump().items() if v is not None}
        if list(given.values()) != sorted(set(given.values())):
            raise _not_ascending(given)
        return self


def _not_ascending(corners: dict[str, float], given: dict[str, float] | None = None) -> RecipeError:
    typed = "" if given is None else f", of which {', '.join(given)} typed"
    return RecipeError(
        Problem(
            came=f"corner frequencies {', '.join(f'{k} = {v:g}' for k, v in corners.items())}{typed}",
            allowed="low_stop_ghz < low_pass_ghz < high_pass_ghz < high_stop_ghz, from 0",
            do="put them in order, or leave some out: they are then found from the survey",
            key="recipe.bandpass." + next(iter(given or corners)),
        )
    )


class Bandpass:
    """The step ``bandpass``: zero phase, from the measured spectrum of the ground."""

    name = "bandpass"
    version = 1
    reach: Reach = "trace"
    takes: Quantity = "voltage"
    gives: Quantity = "voltage"
    Params = BandpassParams

    def learn(self, facts: SetFacts, params: BandpassParams) -> BandpassParams:
        """Corners from the spectrum; a corner that was given stays."""
        found = dict(zip(self._names(), self._corners(facts)[:4], strict=True))
        given = {k: v for k, v in params.model_dump().items() if v is not None}
        corners = {**found, **given}
        if list(corners.values()) != sorted(set(corners.values())):
            raise _not_ascending(corners, given)
        return params.model_copy(update=corners)

    def notes(self, facts: SetFacts, params: BandpassParams) -> tuple[Problem, ...]:
        """Return a note when the nominal band had to stand in for the measured one."""
        corners = self._corners(facts)
        if not corners.note or all(v is not None for v in params.model_dump().values()):
            return ()
        return (
            Problem(corners.note, do="band-pass from the nominal frequency", key="recipe.bandpass", severity="note"),
        )

    def __call__(self, cube: xr.DataArray, **params: Any) -> xr.DataArray:
        """See :func:`planum.conditioning.bandpass.bandpass`."""
        return bandpass(cube, **params)

    @staticmethod
    def _names() -> tuple[str, ...]:
        return ("low_stop_ghz", "low_pass_ghz", "high_pass_ghz", "high_stop_ghz")

    @staticmethod
    def _corners(facts: SetFacts) -> learning.Corners:
        return learning.band_corners(
            np.asarray(facts.spectrum, float),
            facts.spectrum_step_ghz,
            nominal_ghz=facts.centre_frequency_ghz,
            nyquist_ghz=0.5 / facts.geometry.time_step_ns,
        )


class BackgroundParams(Record):
    """Settings of ``background``."""

    scope: Literal["set", "line"] = "set"
    traces: tuple[tuple[float, ...], ...] | None = Field(None, description="automatic: robust typical traces")
    at_m: tuple[float, ...] | None = Field(None, description="positions of the traces across the lines, m")
    window_m: float | None = Field(None, gt=0, description='running mean along the line, m; only for scope "line"')

    @model_validator(mode="after")
    def _whole(self) -> Self:
        if self.scope == "line" and self.window_m is None:
            raise RecipeError(
                Problem(
                    came='scope is "line" without window_m',
                    allowed="a length in m, over which the mean along the line is taken",
                    do='give window_m, longer than any wall that should stay, or scope "set"',
                    key="window_m",
                )
            )
        if len(self.traces or ()) != len(self.at_m or ()):
            raise RecipeError(
                Problem(
                    came=f"{len(self.traces or ())} traces at {len(self.at_m or ())} places",
                    allowed="one place in at_m for every trace",
                    do="leave both out: they are then found from the survey",
                    key="traces",
                )
            )
        return self


class Background:
    """The step ``background``: what the whole set has in common is taken off, walls along the lines stay."""

    name = "background"
    version = 1
    reach: Reach = "line"
    takes: Quantity = "voltage"
    gives: Quantity = "voltage"
    Params = BackgroundParams

    def learn(self, facts: SetFacts, params: BackgroundParams) -> BackgroundParams:
        """Median typical trace of sliding blocks of lines, as they arrive at this step.

        Fewer than 15 lines do not tell ringing from a wall along them: then the direct wave alone is taken off.
        """
        if params.scope == "line" or params.traces is not None:
            return params
        rows, line_m = self._rows(facts)
        use = np.isfinite(rows).all(axis=1) & rows.any(axis=1)  # a row of nothing but zeros was not recorded
        if not use.any():
            none = tuple(0.0 for _ in range(rows.shape[1]))
            return params.model_copy(update={"traces": (none,), "at_m": (0.0,)})
        blocks, at = learning.typical_blocks(rows[use], line_m[use])
        if self._lines(facts) < learning.LINES_TO_TELL:
            blocks = blocks * learning.fade_out(facts.geometry.times(), *self._direct_zone(facts))
        digits = 7 - math.ceil(math.log10(max(float(np.abs(blocks).max()), 1e-30)))
        traces = tuple(tuple(round(float(v), digits) for v in b) for b in blocks)  # float32 holds no more digits
        return params.model_copy(update={"traces": traces, "at_m": tuple(round(float(a), 6) for a in at)})

    def notes(self, facts: SetFacts, params: BackgroundParams) -> tuple[Problem, ...]:
        """Say when there are too few lines to tell ringing from a wall along them."""
        lines = self._lines(facts)
        if params.scope == "line" or params.traces is not None or lines >= learning.LINES_TO_TELL:
            return ()
        end = self._direct_zone(facts)[1]
        count = "1 line does" if lines == 1 else f"{lines} lines do"
        return (
            Problem(
                came=f"{count} not tell ringing from a wall along the lines: below {end:.1f} ns nothing is taken off",
                allowed=f"{learning.LINES_TO_TELL} lines or more in a set",
                do="ringing of the antennas stays and shows as even bands in every section, even brightness in slices;"
                ' record more lines, or take scope = "line" with window_m where nothing runs along the lines',
                key="recipe.background",
                severity="warning",
            ),
        )

    def __call__(self, cube: xr.DataArray, **params: Any) -> xr.DataArray:
        """See :func:`planum.conditioning.background.background`."""
        return background(cube, **params)

    @staticmethod
    def _rows(facts: SetFacts) -> tuple[np.ndarray, np.ndarray]:
        """Typical traces (row, time) and their places across, m; pieces of one line are rows of their own."""
        typical = facts.typical.isel(along=0).transpose("line", "time")
        return np.asarray(typical.values, float), np.asarray(typical["line"].values, float)

    def _lines(self, facts: SetFacts) -> int:
        """Return how many lines were recorded, pieces of one line counted once."""
        rows, line_m = self._rows(facts)
        place = np.round((line_m - facts.geometry.line0_m) / facts.geometry.line_step_m)
        return int(np.unique(place[rows.any(axis=1)]).size)

    @staticmethod
    def _direct_zone(facts: SetFacts) -> tuple[float, float]:
        """Where the direct wave's zone begins and has ended to fade, ns; two periods after its arrival it is half."""
        return _direct_ns(facts, _PULSE_PERIODS), _direct_ns(facts, _PULSE_PERIODS + 1.0)


DEWOW = Dewow()
GAIN = Gain()
BANDPASS = Bandpass()
BACKGROUND = Background()
