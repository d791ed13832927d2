"""What goes wrong, and how it is told.

Every error carries one or more :class:`Problem`: where it is, what came, what is allowed and what to do::

    PlanumError
     ├ SurveyError(ValueError)      the survey folder; ``.problems`` holds all of them
     ├ LineError(OSError)           one line file: set aside, reported, the rest goes on
     ├ RecipeError(ValueError)      impossible steps or settings
     ├ FrameError(ValueError)       control points, CRS, accuracy
     ├ EvidenceError(ValueError)    not enough to estimate; says what would be enough
     └ MachineError(RuntimeError)   disk, rendering library, system: names the package or setting
    PlanumWarning(UserWarning)      the same Problem, went on
"""

from __future__ import annotations

import difflib
import json
from collections.abc import Iterable
from dataclasses import asdict, dataclass
from typing import Any, Literal

__all__ = [
    "EvidenceError",
    "FrameError",
    "LineError",
    "MachineError",
    "PlanumError",
    "PlanumWarning",
    "Problem",
    "RecipeError",
    "SurveyError",
    "printable",
]

Severity = Literal["error", "warning", "note"]


def printable(text: object, *, longest: int = 300) -> str:
    """Text that came from a file, without control characters and cut to a readable length."""
    clean = "".join(c if c.isprintable() else " " for c in str(text))
    return clean if len(clean) <= longest else clean[: longest - 1] + "…"


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong: what came, what is allowed, what to do, and where.

    ``line`` is the 1-based line of a text file or the survey line's number as text; ``byte`` is 0-based.
    """

    came: str
    allowed: str = ""
    do: str = ""
    file: str = ""
    line: str = ""
    key: str = ""
    byte: int | None = None
    severity: Severity = "error"

    def where(self) -> str:
        """Return file, line, key and byte in one phrase, as far as they are known."""
        parts = [printable(self.file)] if self.file else []
        if self.line:
            parts.append(f"line {printable(self.line)}")
        if self.key:
            parts.append(printable(self.key))
        if self.byte is not None:
            parts.append(f"byte {self.byte}")
        return ", ".join(parts)

    def __str__(self) -> str:
        """One sentence for people: where, what came, what is allowed, what to do."""
        where = self.where()
        text = (f"{where}: " if where else "") + printable(self.came)
        for part in (self.allowed, self.do):
            if part:
                text += f"; {printable(part)}"
        return text

    def to_dict(self) -> dict[str, Any]:
        """Return a JSON-ready mapping."""
        return asdict(self)


class PlanumError(Exception):
    """Root of all errors this library raises on purpose."""

    def __init__(self, problems: Problem | Iterable[Problem]) -> None:
        self.problems: tuple[Problem, ...] = (problems,) if isinstance(problems, Problem) else tuple(problems)
        super().__init__("\n".join(str(p) for p in self.problems))

    def __reduce__(self) -> tuple[Any, ...]:
        """Pickle by problems, so an error survives the way home from a worker."""
        return type(self), (self.problems,)


class SurveyError(PlanumError, ValueError):
    """The survey folder is not what the program can work with."""


class LineError(PlanumError, OSError):
    """One line file cannot be used."""

    __str__ = Exception.__str__


class RecipeError(PlanumError, ValueError):
    """Impossible steps or settings."""


class FrameError(PlanumError, ValueError):
    """Control points, coordinate reference systems or their accuracy do not fit."""


class EvidenceError(PlanumError, ValueError):
    """Not enough evidence to estimate a number."""


class MachineError(PlanumError, RuntimeError):
    """The machine cannot do what is asked: disk, rendering library, system call."""


class PlanumWarning(UserWarning):
    """A problem the program could go on from."""

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        super().__init__(str(problem))


def nearest(word: str, allowed: Iterable[str]) -> str:
    """Return a phrase naming the nearest allowed word, or all of them when none is near."""
    allowed = sorted(allowed)
    near = difflib.get_close_matches(word, allowed, n=1, cutoff=0.6)
    return f"did you mean {near[0]!r}?" if near else "allowed: " + json.dumps(allowed)[1:-1].replace('"', "")
