"""The conditioning steps of a recipe, in their one order: dewow, gain, band-pass, background.

A setting left out (None) is automatic: ``learn`` resolves it from a set's measured facts into plain numbers, which the
plan then holds, so that the second pass estimates nothing.
"""

from __future__ import annotations

import math
from typing import Any, Literal

import numpy as np
import xarray as xr
from pydantic import Field

from planum.conditioning import learning
from planum.conditioning.background import background
from planum.conditioning.bandpass import bandpass
from planum.conditioning.dewow import dewow, odd_window
from planum.conditioning.gain import gain
from planum.errors import Problem
from planum.records import Quantity, Record, SetFacts

__all__ = ["BACKGROUND", "BANDPASS", "DEWOW", "GAIN", "Background", "Bandpass", "Dewow", "Gain"]

Reach = Literal["trace", "line", "set"]

_PULSE_PERIODS = 1.5
"""Length of a radar pulse in periods of its centre frequency (common practice; a Ricker wavelet has 1.5 visible)."""

_DEWOW_PERIODS = 2.0


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
    stop_ns: float | None = Field(None, gt=0, description="automatic: where the envelope meets twice the noise")


class Gain:
    """The step ``gain``: one curve for the set, from spreading and measured absorption, stopped at the noise."""

    name = "gain"
    version = 1
    reach: Reach = "trace"
    takes: Quantity = "voltage"
    gives: Quantity = "voltage"
    Params = GainParams

    def learn(self, facts: SetFacts, params: GainParams) -> GainParams:
        """Start after the direct ground wave and its pulse, stop at twice the noise, absorption in between."""
        g = facts.geometry
        period = 1.0 / facts.centre_frequency_ghz
        time = g.times()
        start = params.start_ns
        if start is None:
            start = facts.separation_m / facts.velocity.value + _PULSE_PERIODS * period
            start = max(min(start, float(time[-1])), g.time_step_ns)
        envelope = np.asarray(facts.envelope, float)
        stop = params.stop_ns
        if stop is None:
            stop = learning.gain_span(envelope, facts.noise, time, start_ns=start, period_ns=period)
        stop = max(stop, start)
        loss = params.absorption_db_per_ns
        if loss is None:
            loss = learning.absorption(
                envelope, facts.noise, time, power=params.power, span_ns=(start, stop), period_ns=period
            )
        found = {"start_ns": round(start, 6), "stop_ns": round(stop, 6), "absorption_db_per_ns": round(loss, 9)}
        return params.model_copy(update=found)

    def __call__(self, cube: xr.DataArray, **params: Any) -> xr.DataArray:
        """See :func:`planum.conditioning.gain.gain`."""
        return gain(cube, **params)


class BandpassParams(Record):
    """Settings of ``bandpass``: four ascending corner frequencies, GHz; automatic from the ground's spectrum."""

    low_stop_ghz: float | None = Field(None, ge=0)
    low_pass_ghz: float | None = Field(None, gt=0)
    high_pass_ghz: float | None = Field(None, gt=0)
    high_stop_ghz: float | None = Field(None, gt=0)


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
        return params.model_copy(update={**found, **given})

    def notes(self, facts: SetFacts, params: BandpassParams) -> tuple[Problem, ...]:
        """Return a note when the nominal band had to stand in for the measured one."""
        corners = self._corners(facts)
        if not corners.note or all(v is not None for v in params.model_dump().values()):
            return ()
        return (Problem(corners.note, do="band-pass from the nominal frequency", key="bandpass", severity="note"),)

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


class Background:
    """The step ``background``: what the whole set has in common is taken off, walls along the lines stay."""

    name = "background"
    version = 1
    reach: Reach = "line"
    takes: Quantity = "voltage"
    gives: Quantity = "voltage"
    Params = BackgroundParams

    def learn(self, facts: SetFacts, params: BackgroundParams) -> BackgroundParams:
        """Median typical trace of sliding blocks of lines, as they arrive at this step."""
        if params.scope == "line" or params.traces is not None:
            return params
        typical = facts.typical.isel(along=0).transpose("line", "time")
        rows = np.asarray(typical.values, float)
        use = np.isfinite(rows).all(axis=1) & rows.any(axis=1)  # a row of nothing but zeros was not recorded
        if not use.any():
            none = tuple(0.0 for _ in range(rows.shape[1]))
            return params.model_copy(update={"traces": (none,), "at_m": (0.0,)})
        blocks, at = learning.typical_blocks(rows[use], typical["line"].values[use])
        digits = 7 - math.ceil(math.log10(max(float(np.abs(blocks).max()), 1e-30)))
        traces = tuple(tuple(round(float(v), digits) for v in b) for b in blocks)  # float32 holds no more digits
        return params.model_copy(update={"traces": traces, "at_m": tuple(round(float(a), 6) for a in at)})

    def __call__(self, cube: xr.DataArray, **params: Any) -> xr.DataArray:
        """See :func:`planum.conditioning.background.background`."""
        return background(cube, **params)


DEWOW = Dewow()
GAIN = Gain()
BANDPASS = Bandpass()
BACKGROUND = Background()
