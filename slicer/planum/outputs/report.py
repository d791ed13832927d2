"""``report.html``: one page that opens anywhere, on a phone too, without network, scripts or other files."""

from __future__ import annotations

import base64
import io
import itertools
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path, PurePosixPath
from typing import Any
from urllib.parse import quote

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup, escape
from PIL import Image

from planum.constants import CAUTIONS
from planum.errors import Problem, printable
from planum.outputs.raster import slice_label
from planum.outputs.writing import PNG_KEY, aside, joined, statement_text
from planum.records import Statement

__all__ = ["Picture", "ReportContext", "ReportTable", "write_report"]

_LONGEST_TEXT = 2000
_WIDEST_PX = 1600


@dataclass(frozen=True)
class Picture:
    """One picture the page carries inside: ``alt`` says what it shows to those who cannot see it."""

    path: Path
    alt: str
    caption: str = ""


@dataclass(frozen=True)
class ReportTable:
    """A table of plain texts."""

    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    note: str = ""
    title: str = ""


@dataclass(frozen=True)
class ReportContext:
    """Everything the report says, as plain values; nothing in it is trusted to be free of mark-up.

    ``statements`` one per slice, shallow to deep. ``surveyed`` name and value of facts ("Lines", "65 in 2 grids").
    ``frame`` one sentence on the frame of the coordinates and its error. ``velocity`` sentences on its evidence.
    ``contact``, ``leading`` (overview, isosurface), ``best`` (slices in large), ``focus`` (velocity evidence) are
    carried inside; ``sections`` are (label, path relative to the report) links, ``files`` (relative path, what it is).
    ``problems`` went on, ``set_aside`` did not, ``missing`` names lines without a recording. ``recipe`` is (step,
    settings) as run, ``hashes`` (file, sha256).
    """

    title: str
    code: str
    statements: tuple[Statement, ...]
    surveyed: tuple[tuple[str, str], ...] = ()
    frame: str = ""
    velocity: str = ""
    contact: Picture | None = None
    leading: tuple[Picture, ...] = ()
    best: tuple[Picture, ...] = ()
    focus: Picture | None = None
    problems: tuple[Problem, ...] = ()
    set_aside: tuple[Problem, ...] = ()
    missing: tuple[str, ...] = ()
    control: ReportTable | None = None
    tables: tuple[ReportTable, ...] = ()
    sections: tuple[tuple[str, str], ...] = ()
    files: tuple[tuple[str, str], ...] = ()
    recipe: tuple[tuple[str, str], ...] = ()
    versions: tuple[tuple[str, str], ...] = ()
    hashes: tuple[tuple[str, str], ...] = ()
    cautions: tuple[str, ...] = CAUTIONS


def write_report(path: Path, context: ReportContext) -> None:
    """Write the report.

    Raises
    ------
    ValueError
        When there is no statement, or a link leaves the run's folder.
    MachineError
        When the file cannot be written.
    """
    if not context.statements:
        raise ValueError("a report needs at least one slice's statement")
    environment = Environment(
        loader=PackageLoader("planum.outputs", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        finalize=_plain,
    )
    page = environment.get_template("report.html.j2").render(_values(context, path.parent))
    with aside(path) as part:
        part.write_text(page, encoding="utf-8", newline="\n")


def _plain(value: Any) -> Any:
    """Every value the template prints, without control characters; what is already escaped stays."""
    return value if isinstance(value, Markup) else printable(value, longest=_LONGEST_TEXT)


def _values(context: ReportContext, folder: Path) -> dict[str, Any]:
    statements = context.statements
    first = statements[0]
    errors = [s.depth_error_m for s in statements]
    return {
        "c": context,
        "meta_name": PNG_KEY,
        "meta": escape(statement_text(joined([s.tags() for s in statements]))),
        "first": first,
        "last": statements[-1],
        "dates": ", ".join(sorted({s.date for s in statements})),
        "velocity": f"{first.velocity_m_per_ns:.4f} ± {first.velocity_error_m_per_ns:.4f} m/ns",
        "least": min(errors),
        "most": max(errors),
        "grows": _grows(errors),
        "losses": _losses(context),
        "evidence": _evidence(context),
        "resolution": f"{first.resolution[:1].upper()}{first.resolution[1:]}.",
        "contact": _embedded(context.contact, folder),
        "leading": [_embedded(p, folder) for p in context.leading],
        "best": [_embedded(p, folder) for p in context.best],
        "focus": _embedded(context.focus, folder),
        "depth_rows": [(slice_label(s.top_m, s.bottom_m), f"± {s.depth_error_m:.3f} m") for s in statements],
        **_problem_table("problem", "What came", context.problems),
        **_problem_table("aside", "Why", context.set_aside),
        "sections": [(label, _link(href)) for label, href in context.sections],
        "files": [  # a pattern such as slices/<code>_*.tif is shown, not linked
            (_link(name) if "*" not in name and "<" not in name else "", name, what) for name, what in context.files
        ],
    }


def _problem_table(name: str, came: str, problems: Sequence[Problem]) -> dict[str, Any]:
    """Return columns and rows of a table of problems, without a column that none of them fills."""
    columns = ("Where", came, "What is allowed", "What to do")
    rows = [(p.where(), p.came, p.allowed, p.do) for p in problems]
    kept = [i for i in range(len(columns)) if i < 2 or any(row[i] for row in rows)]
    return {
        f"{name}_columns": [columns[i] for i in kept],
        f"{name}_rows": [[row[i] for i in kept] for row in rows],
    }


def _grows(errors: Sequence[float]) -> bool:
    """Tell whether depth errors never fall downwards and end larger, as printed in hundredths."""
    printed = [round(e, 2) for e in errors]
    return printed[-1] > printed[0] and all(b >= a for a, b in itertools.pairwise(printed))


def _losses(context: ReportContext) -> str:
    """Return how many lines were set aside and are missing; no zeros."""
    aside, missing = len(context.set_aside), len(context.missing)
    parts = []
    if aside:
        parts.append(f"{aside} {'line was' if aside == 1 else 'lines were'} set aside")
    if missing:
        lines = "" if parts else "line " if missing == 1 else "lines "
        parts.append(f"{missing} {lines}{'is' if missing == 1 else 'are'} missing")
    return " and ".join(parts)


def _evidence(context: ReportContext) -> str:
    """Return what is known of the velocity, unless its origin has said the same already."""
    said = context.statements[0].velocity_origin.casefold()
    return "" if context.velocity.rstrip(".").casefold() in said else context.velocity


def _link(relative: str) -> str:
    """Return a percent-encoded relative link.

    Encoding the colon leaves no scheme, so a name from a file cannot become a script or another host.
    """
    path = PurePosixPath(relative)
    if path.is_absolute() or ".." in path.parts:
        raise ValueError(f"the link {relative!r} leaves the run's folder")
    return quote(path.as_posix(), safe="/")


def _embedded(picture: Picture | None, folder: Path) -> dict[str, Any] | None:
    """Return a picture as a data URI with its size; wider ones than a screen needs are reduced.

    One that lies in the run's folder has a link to itself, to be seen large.
    """
    if picture is None:
        return None
    with Image.open(picture.path, formats=["PNG"]) as source:
        source.load()
        width, height = source.size
        if width > _WIDEST_PX:
            height = max(1, round(height * _WIDEST_PX / width))
            width = _WIDEST_PX
            source = source.convert("L" if source.mode in {"L", "1", "LA"} else "RGB").resize((width, height))  # noqa: PLW2901
        packed = io.BytesIO()
        source.save(packed, format="PNG", compress_level=6)  # without text chunks: the page has its own statement
    uri = "data:image/png;base64," + base64.b64encode(packed.getvalue()).decode("ascii")
    inside = picture.path.resolve().is_relative_to(folder.resolve())
    return {
        "uri": Markup(uri),  # noqa: S704
        "href": _link(picture.path.resolve().relative_to(folder.resolve()).as_posix()) if inside else "",
        "width": width,
        "height": height,
        "alt": picture.alt,
        "caption": picture.caption,
    }
