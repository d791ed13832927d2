"""The report: everything said, nothing executed, nothing fetched, readable on a phone."""

from __future__ import annotations

import re
import subprocess
from html.parser import HTMLParser

import pytest
from PIL import Image

from planum.constants import CAUTIONS
from planum.errors import Problem
from planum.outputs.report import Picture, ReportContext, ReportTable, write_report

HOSTILE = '"><script>alert(1)</script><img src=x onerror=alert(2)>\x07'


class Page(HTMLParser):
    """Elements, links and text of a page."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.elements: list[tuple[str, dict]] = []
        self.words = ""
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))

    def handle_data(self, data):
        self.words += data

    def all(self, tag):
        return [attrs for name, attrs in self.elements if name == tag]


@pytest.fixture
def context(tmp_path, statements):
    path = tmp_path / "contact_sheet.png"
    Image.new("L", (2400, 1200), 180).save(path)
    return ReportContext(
        title="Ashwell Meadow, season 2",
        code="ASM2",
        statements=statements,
        surveyed=(("Lines", "64 of 65"), ("Visit", "2026-04-18, short grass")),
        frame="ETRS89 / UTM zone 32N, fitted to 6 control points.",
        velocity="Focus scan; 41 lines agree.",
        contact=Picture(path, "All depth slices", "Shallow to deep."),
        best=(Picture(path, "0.15 to 0.25 m"),),
        problems=(Problem("stagger of 0.12 m", do="moved by half each way", file="lines.csv", line="12"),),
        set_aside=(Problem("a" * 200 + HOSTILE, "at least 50 traces", "ask for a copy", file="lines/A_040.sgy"),),
        missing=("A 17", HOSTILE),
        control=ReportTable(("Point", "Residual"), (("P1", "0.011 m"), (HOSTILE, "0.02 m")), "Similarity."),
        sections=(("A 1", "pictures/section_A_1.png"), (HOSTILE, "pictures/a b#?.png"), ("x", "javascript:alert(3)")),
        files=(("slices.nc", "all slices"), ("slices/<code>_*.tif", "one GeoTIFF per slice")),
        recipe=(("dewow", "window_ns = 12.5"), ("gain", "x" * 400)),
        versions=(("planum", "0.1.0"),),
        hashes=(("lines/A_001.sgy", "0f" * 32),),
    )


@pytest.fixture
def page(tmp_path, context):
    write_report(tmp_path / "report.html", context)
    return (tmp_path / "report.html").read_text(encoding="utf-8")


def test_everything_is_said(page, statements):
    words = re.sub(r"\s+", " ", Page(page).words)
    for expected in (
        *CAUTIONS,
        "0.0853 ± 0.0021 m/ns",
        "measured: focus of 41 hyperbolas",
        "direct wave minus separation / c",
        "Features narrower than 0.25 m between lines are not resolved.",
        "stagger of 0.12 m",
        "moved by half each way",
        "A 17",
        "1 line was set aside and 2 are missing",
        "0.011 m",
        "window_ns = 12.5",
        "0f" * 32,
        statements[0].plan_key,
        *(f"± {s.depth_error_m:.3f} m" for s in statements),
    ):
        assert expected in words, expected


def test_text_from_files_stays_text(page):
    """No script, no handler, no control character, whatever a file name or header holds."""
    parsed = Page(page)
    assert not parsed.all("script")
    assert not [a for _, attrs in parsed.elements for a in attrs if a.startswith("on")]
    assert "alert(1)" in parsed.words
    assert "\x07" not in page


def test_nothing_is_fetched(page):
    """Pictures are inside, links are relative and without a scheme, and the policy forbids the rest (W3C CSP 3)."""
    parsed = Page(page)
    (policy,) = [m["content"] for m in parsed.all("meta") if m.get("http-equiv") == "Content-Security-Policy"]
    assert policy == "default-src 'none'; img-src data:; style-src 'unsafe-inline'"
    assert len(parsed.all("img")) == 2
    assert all(i["src"].startswith("data:image/png;base64,") and i["alt"] for i in parsed.all("img"))
    links = [a["href"] for a in parsed.all("a")]
    assert "pictures/a%20b%23%3F.png" in links
    assert "javascript%3Aalert%283%29" in links
    assert not [link for link in links if ":" in link or link.startswith("/")]
    assert "url(" not in page
    assert "http://" not in page
    assert "https://" not in page


def test_embedded_pictures_open_large_and_sections_fold(tmp_path, statements):
    """A picture inside the run's folder links to itself, one elsewhere does not; every other picture stays as it is."""
    (tmp_path / "run" / "pictures").mkdir(parents=True)
    inside, outside = tmp_path / "run" / "pictures" / "a b.png", tmp_path / "c.png"
    for path in (inside, outside):
        Image.new("L", (20, 10), 180).save(path)
    context = ReportContext(
        title="T",
        code="C",
        statements=statements,
        contact=Picture(outside, "elsewhere"),
        best=(Picture(inside, "A", "0.40 to 0.50 m, ± 0.03 m, visit 2026-04-18."),),
        sections=(("A 1", "pictures/sections/A_line-1.png"), ("A 2", "pictures/sections/A_line-2.png")),
    )
    write_report(tmp_path / "run" / "report.html", context)
    page = (tmp_path / "run" / "report.html").read_text(encoding="utf-8")
    assert re.findall(r'<a href="([^"]*)"><img', page) == ["pictures/a%20b.png"]
    assert "<figcaption>0.40 to 0.50 m, ± 0.03 m, visit 2026-04-18.</figcaption>" in page
    assert re.search(r"<details><summary>2 sections</summary>\s*<ul", page)


def test_growth_with_depth_is_said_only_where_it_is_so(tmp_path, statements):
    def words(errors):
        told = tuple(s.model_copy(update={"depth_error_m": e}) for s, e in zip(statements, errors, strict=True))
        write_report(tmp_path / "r.html", ReportContext(title="T", code="C", statements=told))
        return (tmp_path / "r.html").read_text(encoding="utf-8")

    assert "grows with depth" in words((0.03, 0.03, 0.04, 0.05, 0.06))
    for errors in ((0.04, 0.03, 0.03, 0.05, 0.06), (0.03,) * 5, (0.0301, 0.0302, 0.0303, 0.0304, 0.0305)):
        assert "grows with depth" not in words(errors)


def test_empty_columns_zeros_and_repetitions_are_dropped(tmp_path, statements):
    told = tuple(s.model_copy(update={"velocity_origin": "measured: focus of diffractions"}) for s in statements)
    context = ReportContext(
        title="T",
        code="C",
        statements=told,
        velocity="Focus of diffractions.",
        problems=(Problem("odd", do="look", file="a.sgy"), Problem("odder", file="b.sgy")),
        missing=("A 17",),
    )
    write_report(tmp_path / "r.html", context)
    page = (tmp_path / "r.html").read_text(encoding="utf-8")
    words = re.sub(r"\s+", " ", Page(page).words)
    assert "What is allowed" not in page
    assert "What to do" in page
    assert "1 line is missing: what was found with the lines" in words
    assert "set aside" not in words
    assert words.casefold().count("focus of diffractions. ") == 1


def test_wide_pictures_are_reduced(page):
    """2400 x 1200 becomes 1600 x 800."""
    assert {(i["width"], i["height"]) for i in Page(page).all("img")} == {("1600", "800")}


def test_the_same_context_gives_the_same_page(tmp_path, page, context):
    write_report(tmp_path / "again.html", context)
    assert (tmp_path / "again.html").read_text(encoding="utf-8") == page


def test_a_bare_context_is_a_page_too(tmp_path, statements):
    write_report(tmp_path / "r.html", ReportContext(title="T", code="C", statements=statements[:1]))
    words = Page((tmp_path / "r.html").read_text(encoding="utf-8")).words
    assert "Nothing was found wrong with the lines that were used." in words
    assert "set aside" not in words


def test_links_stay_in_the_run_folder(tmp_path, statements):
    for bad in ("../other/x.png", "/etc/passwd"):
        context = ReportContext(title="T", code="C", statements=statements, sections=(("A", bad),))
        with pytest.raises(ValueError, match="leaves the run's folder"):
            write_report(tmp_path / "r.html", context)
    with pytest.raises(ValueError, match="at least one slice's statement"):
        write_report(tmp_path / "r.html", ReportContext(title="T", code="C", statements=()))
    assert not (tmp_path / "r.html").exists()


PROBE = """<!DOCTYPE html><html><body style="margin:0">
<iframe id="f" src="{name}" style="width:390px;height:800px;border:0"></iframe><p id="out"></p><script>
document.getElementById("f").addEventListener("load", function () {{
  const d = this.contentDocument, box = (e) => e.getBoundingClientRect();
  d.querySelectorAll("details").forEach((e) => {{ e.open = true; }});
  const wide = [...d.body.querySelectorAll("*")].filter((e) => box(e).right > 391 && !e.closest(".scroll > table"));
  const width = d.documentElement.scrollWidth, size = d.defaultView.getComputedStyle(d.body).fontSize;
  document.getElementById("out").textContent = ["width", width, "wide", wide.length, "font", size].join(" ");
}});</script></body></html>"""


def measured(folder, name) -> tuple[int, int, float]:
    """Page width, elements beyond it and text size of a page shown 390 pixels wide, as Chromium lays it out."""
    (folder / "probe.html").write_text(PROBE.format(name=name), encoding="utf-8")
    options = "--headless --no-sandbox --hide-scrollbars --disable-gpu --disable-background-networking --dump-dom"
    command = ["chromium", *options.split(), "--allow-file-access-from-files", "--virtual-time-budget=5000"]
    command += [f"--user-data-dir={folder / 'profile'}", (folder / "probe.html").as_uri()]
    done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=True)
    width, wide, font = re.search(r"width (\d+) wide (\d+) font ([\d.]+)px", done.stdout).groups()
    return int(width), int(wide), float(font)


@pytest.mark.system("chromium")
def test_a_phone_shows_the_page_without_scrolling_sideways(tmp_path, page):
    """390 pixels is a common phone; long names, hashes and settings must break. The probe sees a page that is wide."""
    assert page
    width, wide, font = measured(tmp_path, "report.html")
    assert (width, wide) == (390, 0)
    assert font >= 16
    (tmp_path / "bad.html").write_text("<!DOCTYPE html><body><div style='width:700px'>x</div>", encoding="utf-8")
    assert measured(tmp_path, "bad.html")[0] > 390
