"""Read a run folder back for the window: slices, lines, and what each slice says of itself."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pyogrio
import xarray as xr
from pydantic import ValidationError

from planum.errors import Problem, SurveyError
from planum.outputs.netcdf import STATEMENT_PREFIX
from planum.records import Statement
from planum.scene.build import Lines
from planum.schema import check_slices

__all__ = ["load_run", "statements_of"]


def load_run(out: Path) -> tuple[xr.Dataset, Lines]:
    """Return the slices (lazy, one block per depth) and the recorded lines of a run folder.

    Parameters
    ----------
    out
        The folder a run wrote.

    Returns
    -------
    Dataset and sequence of (name, (n, 2) array)
        Slices as in ``slices.nc``; names and map x, y (m) from the layer ``lines`` of ``site.gpkg``, empty without it.
        The caller closes the dataset.

    Raises
    ------
    SurveyError
        When there is no run, or its files cannot be read.
    """
    path = out / "slices.nc"
    again = "planum map SITE makes it"
    if not path.is_file():
        raise SurveyError(Problem(came="there is no run here", file=str(path), do=again))
    try:
        slices = xr.open_dataset(path, engine="h5netcdf", chunks={"depth": 1})
    except (OSError, ValueError) as error:
        raise SurveyError(Problem(came=f"cannot be read ({error})", file=str(path), do=again)) from error
    try:
        check_slices(slices)
        return slices, _lines(out / "site.gpkg", again)
    except ValueError as error:
        slices.close()
        if isinstance(error, SurveyError):
            raise
        raise SurveyError(Problem(came=f"is no slice stack ({error})", file=str(path), do=again)) from error


def statements_of(slices: xr.Dataset) -> tuple[Statement, ...]:
    """Return the statements a slice file carries, one per depth; empty when it carries none that are whole."""
    count = slices.sizes["depth"]
    columns: dict[str, list[object]] = {}
    for name, field in Statement.model_fields.items():
        value = slices.attrs.get(STATEMENT_PREFIX + name)
        if name == "cautions":  # stored as prose; the record's own are the same for every slice
            continue
        if value is None and not field.is_required():  # an older run did not state it
            continue
        if value is None:
            return ()
        if isinstance(value, str):
            parts = value.split(" | ")
            columns[name] = list(parts) if len(parts) == count else [value] * count
        else:
            columns[name] = np.broadcast_to(np.asarray(value), (count,)).tolist()
    rows = [dict(zip(columns, row, strict=True)) for row in zip(*columns.values(), strict=True)]
    try:
        return tuple(Statement.model_validate(row) for row in rows)
    except ValidationError:
        return ()


def _lines(path: Path, again: str) -> Lines:
    if not path.is_file():
        return ()
    try:
        layers = {str(name) for name, _ in pyogrio.list_layers(path)}
        if "lines" not in layers:
            return ()
        table = pyogrio.read_dataframe(path, layer="lines")
    except (pyogrio.errors.DataSourceError, pyogrio.errors.DataLayerError) as error:
        raise SurveyError(Problem(came=f"cannot be read ({error})", file=str(path), do=again)) from error
    names = table.get("name", table.index)
    found = []
    for name, shape in zip(names, table.geometry, strict=True):
        for part in getattr(shape, "geoms", [shape] if shape is not None else []):
            places = np.asarray(part.coords, float)[:, :2]
            if len(places) > 1:
                found.append((str(name), places))
    return tuple(found)
