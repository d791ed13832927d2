"""The sample interval: who says it, in which unit, and whether the window it gives can be believed."""

from __future__ import annotations

import math
from collections.abc import Iterator

from planum.constants import SAMPLES_PER_PERIOD_GOOD, SAMPLES_PER_PERIOD_LEAST, WINDOW_NS
from planum.errors import LineError, Problem
from planum.lines.recording import IntervalUnit, ReadOptions, Recording

__all__ = ["NO_INTERVAL", "NS_PER", "check_interval", "likely_units", "resolve_interval"]

NS_PER: dict[str, float] = {"ps": 1e-3, "ns": 1.0, "us": 1e3}
"""Nanoseconds per unit of the interval field."""

NO_INTERVAL = "the file gives no sample interval"
"""What is said of a file whose interval nobody knows."""

_WINDOW = f"a window lies between {WINDOW_NS[0]:g} and {WINDOW_NS[1]:g} ns"


def likely_units(field: float, n_samples: int) -> tuple[str, ...]:
    """Return the units of an interval ``field`` that give a believable window over ``n_samples``."""
    return tuple(unit for unit, ns in NS_PER.items() if WINDOW_NS[0] <= field * ns * n_samples <= WINDOW_NS[1])


def resolve_interval(
    options: ReadOptions, *, field: float, exact_us: float = 0.0, n_samples: int, file: str, byte: int | None = None
) -> tuple[float, str, tuple[Problem, ...]]:
    """Return the interval in ns, its origin for people, and warnings.

    Who gave an interval or a unit, a survey or a person, only the caller knows: the origin says "given".

    The survey's interval comes first, then the survey's unit for the file's field, then a revision 2 field
    ``exact_us`` (µs). Nothing is inferred: without any of the three the error names the likely unit.

    Raises
    ------
    LineError
        When the interval's unit is not known, or there is no interval at all.
    """
    if options.interval_ns is not None:
        warnings = tuple(_disagreement(options.interval_ns, field, n_samples, file, byte))
        return float(options.interval_ns), "given", warnings
    unit = options.interval_unit
    if unit is not None:
        return _by_unit(unit, field, exact_us, file, byte)
    if exact_us:
        return exact_us * 1e3, "revision 2 field, µs", ()
    if field <= 0:
        raise LineError(
            Problem(
                came=NO_INTERVAL,
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
                came=f"interval {interval:g} ns by interval_unit, {exact_us * 1e3:g} ns by the revision 2 field",
                do="leave interval_unit out if the revision 2 field is right",
                file=file,
                key="interval_unit",
                byte=3272,
                severity="warning",
            ),
        )
    return interval, f"file, unit given: {unit}", warnings


def _disagreement(interval_ns: float, field: float, n_samples: int, file: str, byte: int | None) -> Iterator[Problem]:
    likely = likely_units(field, n_samples) if field > 0 else ()
    # the field is a whole number: a step that rounds to it agrees
    if likely and not any(abs(interval_ns / NS_PER[u] - field) <= max(0.51, 0.01 * field) for u in NS_PER):
        as_read = " or ".join(f"{field * NS_PER[u]:g} ns ({u})" for u in likely)
        yield Problem(
            came=f"{interval_ns:g} ns per sample is given, the file's field {field:g} would be {as_read}",
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
    if not WINDOW_NS[0] <= window <= WINDOW_NS[1]:  # also true for NaN
        raise LineError(
            Problem(
                came=f"the window is {window:g} ns: {n} samples of {interval:g} ns ({recording.interval_origin})",
                allowed=_WINDOW + _probable(recording, options),
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


def _probable(recording: Recording, options: ReadOptions) -> str:
    """Return a phrase naming the unit in which the number that was used gives a believable window."""
    number = options.interval_ns
    if number is None:
        # a field without value is 0, and the revision 2 field counts only where the plain one is empty or not asked for
        exact, plain = (recording.header.get(k) or 0.0 for k in ("interval_revision_2_us", "interval_field"))
        number = float(exact if options.interval_unit is None or not plain else plain) or recording.interval_ns
    likely = likely_units(number, recording.data.shape[1])
    return f"; likely unit of {number:g}: {' or '.join(likely)}" if likely else ""
