"""Read back what any file of a run says of itself."""

from __future__ import annotations

import json
import math
import sqlite3
import warnings
from collections.abc import Callable, Mapping
from contextlib import closing
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import rasterio
from PIL import Image

from planum.errors import PlanumError, Problem, printable
from planum.outputs.geopackage import STATEMENT_TABLE
from planum.outputs.netcdf import STATEMENT_PREFIX
from planum.outputs.writing import PNG_KEY, joined

__all__ = ["READABLE", "statement_in"]

_LARGEST = 200_000_000
"""Bytes of JSON or HTML read at most."""
_ROWS = 10_000
"""Slices read at most from a GeoPackage."""


def statement_in(path: Path) -> dict[str, str]:
    """Return the statement a file carries: lower-case names and their texts.

    Parameters
    ----------
    path
        A GeoTIFF, NetCDF, GeoPackage, PNG, ``run.json`` or ``report.html`` written by planum. Files that hold many
        slices return what is the same for all, and the rest joined by ``" | "``.

    Raises
    ------
    PlanumError
        When the file is missing, is of another kind, or carries no statement.
    """
    path = Path(path)
    if not path.is_file():
        raise PlanumError(Problem("there is no such file", do="give the path of a file of a run", file=str(path)))
    read = READABLE.get(path.suffix.lower())
    if read is None:
        raise PlanumError(Problem(f"files ending in {path.suffix!r} carry no statement", _allowed(), file=str(path)))
    try:
        found = read(path)
    except PlanumError:
        raise
    except Exception as error:  # readers of five libraries: whatever they raise, the file is not one of ours
        raise PlanumError(Problem(f"cannot be read: {error}", _allowed(), file=str(path))) from error
    if not found:
        raise PlanumError(Problem("carries no statement of planum", _allowed(), file=str(path)))
    return {printable(k): printable(v, longest=4000) for k, v in _rounded(found).items() if v}


_ERRORS = {
    "velocity_m_per_ns": "velocity_error_m_per_ns",
    "velocity_error_m_per_ns": "velocity_error_m_per_ns",
    "depth_error_m": "depth_error_m",
    "zero_error_ns": "zero_error_ns",
}
"""Numbers, and the error that says how many of their digits mean something."""


def _rounded(found: Mapping[str, str]) -> dict[str, str]:
    """Round numbers to the second significant digit of their errors (common practice)."""
    result = dict(found)
    for name, error in _ERRORS.items():
        if name in found and error in found:
            values, errors = found[name].split(" | "), found[error].split(" | ")
            errors = errors * len(values) if len(errors) == 1 else errors
            texts = [_to(v, e) for v, e in zip(values, errors, strict=False)]
            result[name] = texts[0] if len(set(texts)) == 1 else " | ".join(texts)
    return result


def _to(value: str, error: str) -> str:
    try:
        number, sigma = float(value), float(error)
    except ValueError:
        return value
    if not 0.0 < sigma < math.inf:
        return value
    return f"{number:.{max(0, 1 - math.floor(math.log10(sigma)))}f}"


def _allowed() -> str:
    return f"files written by planum ending in {', '.join(sorted(READABLE))} carry one"


def _tiff(path: Path) -> dict[str, str]:
    with warnings.catch_warnings():  # a local frame has no georeference
        warnings.simplefilter("ignore", rasterio.errors.NotGeoreferencedWarning)
        with rasterio.open(path, driver="GTiff") as raster:
            tags = [raster.tags(), *(raster.tags(band) for band in range(1, raster.count + 1))]
    return joined([_untagged(t) for t in tags])


def _untagged(tags: dict[str, Any]) -> dict[str, str]:
    return {k.removeprefix("PLANUM_").lower(): str(v) for k, v in tags.items() if k.startswith("PLANUM_")}


def _netcdf(path: Path) -> dict[str, str]:
    with h5py.File(path, "r") as file:  # the root's attributes only: links to other files are not followed
        attrs = dict(file.attrs)
    return {k.removeprefix(STATEMENT_PREFIX): _plain(v) for k, v in attrs.items() if k.startswith(STATEMENT_PREFIX)}


def _plain(value: Any) -> str:
    return " | ".join(_plain(v) for v in value) if isinstance(value, np.ndarray | list | tuple) else _number(value)


def _number(value: Any) -> str:
    return f"{value:.6g}" if isinstance(value, float) else str(value)


def _geopackage(path: Path) -> dict[str, str]:
    with closing(sqlite3.connect(f"{path.resolve().as_uri()}?mode=ro", uri=True)) as base:
        base.row_factory = sqlite3.Row
        if not base.execute("SELECT 1 FROM sqlite_master WHERE name = ?", (STATEMENT_TABLE,)).fetchone():
            return {}
        rows = base.execute(f"SELECT * FROM {STATEMENT_TABLE} ORDER BY rowid").fetchmany(_ROWS)  # noqa: S608  # a constant
    return joined([{k: _number(row[k]) for k in row.keys() if k not in {"fid", "sentence"}} for row in rows])  # noqa: SIM118


def _png(path: Path) -> dict[str, str]:
    with Image.open(path, formats=["PNG"]) as picture:
        text = picture.info.get(PNG_KEY, "")
    return _from_json(json.loads(text)) if text else {}


class _Meta(HTMLParser):
    found = ""

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        values = dict(attrs)
        if tag == "meta" and values.get("name") == PNG_KEY:
            self.found = values.get("content") or ""


def _html(path: Path) -> dict[str, str]:
    parser = _Meta()
    parser.feed(_text(path))
    return _from_json(json.loads(parser.found)) if parser.found else {}


def _json(path: Path) -> dict[str, str]:
    return _from_json(json.loads(_text(path)))


def _text(path: Path) -> str:
    size = path.stat().st_size
    if size > _LARGEST:
        raise PlanumError(Problem(f"{size} bytes", f"at most {_LARGEST} bytes are read", file=str(path)))
    return path.read_text(encoding="utf-8")


def _from_json(content: Any) -> dict[str, str]:
    """One statement, or ``statements`` of a run: tags or plain records."""
    if not isinstance(content, dict):
        return {}
    for name in ("statements", "statement"):
        if name in content:
            inner = content[name]
            return joined([_record(row) for row in (inner if isinstance(inner, list) else [inner])])
    return _untagged(content)


def _record(row: dict[str, Any]) -> dict[str, str]:
    if any(k.startswith("PLANUM_") for k in row):
        return _untagged(row)
    return {k: " ".join(v) if k == "cautions" and isinstance(v, list) else _plain(v) for k, v in row.items()}


READABLE: dict[str, Callable[[Path], dict[str, str]]] = {
    ".tif": _tiff,
    ".tiff": _tiff,
    ".nc": _netcdf,
    ".gpkg": _geopackage,
    ".png": _png,
    ".json": _json,
    ".html": _html,
}
"""Suffix and reader of every kind of file that carries a statement."""
