"""The sample interval: who says it, in which unit, and whether the window it gives can be believed."""

from __future__ import annotations

import math
from collections.abc import Iterator

from planum.constants import SAMPLES_PER_PERIOD_GOOD, SAMPLES_PER_PERIOD_LEAST, WINDOW_NS
from planum.errors import LineError, Problem
from planum.lines.recording import IntervalUnit, ReadOptions, Recording

__all__ = ["NS_PER", "check_interval", "likely_units", "resolve_interval"]

NS_PER: dict[str, float] = {"ps": 1e-3, "ns": 1.0, "us": 1e3}
"""Nanoseconds per unit of the interval field."""

_WINDOW = f"a window lies between {WINDOW_NS[0]:g} and {WINDOW_NS[1]:g} ns"


def likely_units(field: float, n_samples: int) -> tuple[str, ...]:
    """Return the units of an interval ``field`` that give a believable window over ``n_samples``."""
    return tuple(unit for unit, ns in NS_PER.items() if WINDOW_NS[0] <= field * ns * n_samples <= WINDOW_NS[1])


def resolve_interval(
    options: ReadOptions, *, field: float, exact_us: float = 0.0, n_samples: int, file: str, byte: int | None = None
) -> tuple[float, str, tuple[Problem, ...]]:
    """Return the interval in ns, its origin for people, and warnings.

    The survey's interval comes first, then the survey's unit for the file's field, then a revision 2 field
    ``exact_us`` (µs). Nothing is inferred: without any of the three the error names the likely unit.

    Raises
    ------
    LineError
        When the interval's unit is not known, or there is no interval at all.
    """
    if options.interval_ns is not None:
        warnings = tuple(_disagreement(options.interval_ns, field, n_samples, file, byte))
        return float(options.interval_ns), "survey", warnings
    unit = options.interval_unit
    if unit is not None:
        return _by_unit(unit, field, exact_us, file, byte)
    if exact_us:
        return exact_us * 1e3, "revision 2 field, µs", ()
    if field <= 0:
        raise LineError(
            Problem(
                came="the file gives no sample interval",
                do="set sample_interval_ns for this radar",
                file=file,
                key="sample_interval_ns",
                byte=byte,
            )
        )
    likely = likely_units(field, n_samples)
    say = " or ".join(
        f'"{u}" ({field * NS_PER[u]:g} ns per sample, window {field * NS_PER[u] * n_samples:g} ns)' for u in likely
    )
    raise LineError(
        Problem(
            came=f"the file's interval field holds {field:g} and its unit is not known",
            allowed=f"likely unit: {say}" if say else f"no unit gives a believable window; {_WINDOW}",
            do="set sample_interval_ns or interval_unit for this radar",
            file=file,
            key="interval_unit",
            byte=byte,
        )
    )


def _by_unit(
    unit: IntervalUnit, field: float, exact_us: float, file: str, byte: int | None
) -> tuple[float, str, tuple[Problem, ...]]:
    value = field if field > 0 else exact_us
    if value <= 0:
        raise LineError(
            Problem(
                came=f"interval_unit is {unit!r}, but the file's interval field is empty",
                do="set sample_interval_ns for this radar",
                file=file,
                key="interval_unit",
                byte=byte,
            )
        )
    interval = value * NS_PER[unit]
    warnings: tuple[Problem, ...] = ()
    if field > 0 and exact_us and not math.isclose(interval, exact_us * 1e3, rel_tol=0.01):
        warnings = (
            Problem(
                came=f"the interval is {interval:g} ns by interval_unit and {exact_us * 1e3:g} ns by the revision 2 field",
                do="leave interval_unit out if the revision 2 field is right",
                file=file,
                key="interval_unit",
                byte=3272,
                severity="warning",
            ),
        )
    return interval, f"file, unit stated by the survey: {unit}", warnings


def _disagreement(interval_ns: float, field: float, n_samples: int, file: str, byte: int | None) -> Iterator[Problem]:
    likely = likely_units(field, n_samples) if field > 0 else ()
    # the field is a whole number: a step that rounds to it agrees
    if likely and not any(abs(interval_ns / NS_PER[u] - field) <= max(0.51, 0.01 * field) for u in NS_PER):
        as_read = " or ".join(f"{field * NS_PER[u]:g} ns ({u})" for u in likely)
        yield Problem(
            came=f"the survey says {interval_ns:g} ns per sample, the file's field {field:g} would be {as_read}",
            do="check sample_interval_ns",
            file=file,
            key="sample_interval_ns",
            byte=byte,
            severity="warning",
        )


def check_interval(recording: Recording, options: ReadOptions, file: str) -> tuple[Problem, ...]:
    """Return warnings about the window and the samples per period of the centre frequency.

    Raises
    ------
    LineError
        When the window is outside 5 ns to 5 µs, or a period has fewer than 4 samples (common practice).
    """
    interval, n = recording.interval_ns, recording.data.shape[1]
    window = interval * n
    if not (math.isfinite(window) and interval > 0 and WINDOW_NS[0] <= window <= WINDOW_NS[1]):
        factors = {"1000 times smaller": 1e-3, "1000 times larger": 1e3, "a million times smaller": 1e-6}
        likely = [text for text, f in factors.items() if WINDOW_NS[0] <= window * f <= WINDOW_NS[1]]
        raise LineError(
            Problem(
                came=f"the window is {window:g} ns ({n} samples of {interval:g} ns, interval from: {recording.interval_origin})",
                allowed=_WINDOW
                + (f"; the interval is probably {likely[0]}" + _named(recording, likely[0]) if likely else ""),
                do="set sample_interval_ns or interval_unit for this radar",
                file=file,
                key="sample_interval_ns",
            )
        )
    frequency = options.centre_frequency_ghz
    if not frequency:
        return ()
    per_period = 1.0 / (frequency * interval)
    problem = Problem(
        came=f"{per_period:.3g} samples per period of the centre frequency ({frequency * 1e3:g} MHz, {interval:g} ns)",
        allowed=f"at least {SAMPLES_PER_PERIOD_LEAST:g}, better {SAMPLES_PER_PERIOD_GOOD:g}",
        do="check sample_interval_ns and centre_frequency_mhz",
        file=file,
        key="sample_interval_ns",
        severity="error" if per_period < SAMPLES_PER_PERIOD_LEAST else "warning",
    )
    if per_period < SAMPLES_PER_PERIOD_LEAST:
        raise LineError(problem)
    return (problem,) if per_period < SAMPLES_PER_PERIOD_GOOD else ()


def _named(recording: Recording, factor: str) -> str:
    """Name the unit the field most likely holds, when the file has a field."""
    field = recording.header.get("interval_field")
    likely = likely_units(float(field), recording.data.shape[1]) if field else ()
    return f" (the file's field {field} fits {' or '.join(likely)})" if likely else f" ({factor.split()[-1]} unit)"
