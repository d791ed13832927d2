"""Names of grids, radars and visits as people type them in tables, looked up and filled in."""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Iterable, Mapping

from planum.errors import nearest
from planum.survey.config import Grid, SurveyConfig
from planum.survey.table import Row

__all__ = ["Names"]


class Names:
    """The names a survey knows; in any case, with blanks filled where there is only one.

    ``config`` None stands for a ``survey.toml`` that is itself wrong: then nothing is known and nothing complained of.
    ``grids`` limits the grids, to those of one register.
    """

    def __init__(self, config: SurveyConfig | None, grids: Iterable[Grid] | None = None) -> None:
        self.blind = config is None
        known = () if config is None else config.grid if grids is None else tuple(grids)
        self._grids = {g.name.casefold(): g for g in known}
        self._radars = {r.name.casefold(): r.name for r in (config.radar if config else ())}
        self._visit_names = [v.name for v in (config.visit if config else ())]
        self._visits: dict[str, str] = {}
        for visit in config.visit if config else ():
            self._visits.setdefault(visit.date.isoformat(), visit.name)
        self._visits |= {name.casefold(): name for name in self._visit_names}

    def grid(self, row: Row) -> Grid | None:
        """Return the row's grid; None after a complaint."""
        word = row.text("grid")
        if not word and len(self._grids) == 1:
            return next(iter(self._grids.values()))
        if self.blind or not row.needed("grid"):
            return None
        if (found := self._grids.get(word.casefold())) is None:
            allowed = _near(word, [g.name for g in self._grids.values()])
            row.sheet.complain(
                row,
                "grid",
                f"no [[grid]] with this table is called {word!r}",
                allowed,
                "add a [[grid]] to survey.toml or mend the name",
            )
        return found

    def radar(self, row: Row, grid: Grid | None) -> str:
        """Return the name of the row's radar, or of its grid's, or of the only one; "" after a complaint."""
        word = row.text("radar") or (grid.radar if grid else "")
        return self._one(row, "radar", word, self._radars, list(self._radars.values()))

    def visit(self, row: Row, grid: Grid | None) -> str:
        """Return the name of the row's visit as for :meth:`radar`; also "" when the survey lists none."""
        word = _iso(row.text("visit")) or (grid.visit if grid else "")
        if not word and not self._visit_names:
            return ""
        return self._one(row, "visit", word, self._visits, self._visit_names)

    def _one(self, row: Row, kind: str, word: str, known: Mapping[str, str], names: list[str]) -> str:
        if self.blind:
            return ""
        if not word and len(names) == 1:
            return names[0]
        if word.casefold() in known:
            return known[word.casefold()]
        came = f"no [[{kind}]] is called {word!r}" if word else f"the survey has several {kind}s, and none is named"
        row.sheet.complain(row, kind, came, _near(word, names), "name it in this row or in the [[grid]]")
        return ""


def _near(word: str, names: list[str]) -> str:
    # the search for near words takes time with the square of their length
    return nearest(word[:40], names[:100]) if names else "survey.toml lists none"


def _iso(word: str) -> str:
    """Return ``18.4.2026``, which spreadsheet programs make of a date, as 2026-04-18; anything else unchanged."""
    if parts := re.fullmatch(r"([0-9]{1,2})\.([0-9]{1,2})\.([0-9]{4})", word):
        try:
            return dt.date(int(parts[3]), int(parts[2]), int(parts[1])).isoformat()
        except ValueError:
            return word
    return word
