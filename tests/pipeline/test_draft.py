"""Drafting a survey: what the files say is used, what they do not say is guessed and said to be guessed."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest

from planum.errors import SurveyError
from planum.lines.segy_write import write_segy
from planum.pipeline.draft import Answers, draft, write_draft
from planum.pipeline.found import Found, FoundLine, line_files, look_through
from planum.survey.folder import read_survey

N_SAMPLES = 128
INTERVAL_NS = 0.25


def ricker(t: np.ndarray, ghz: float) -> np.ndarray:
    """Ricker wavelet, whose amplitude spectrum is largest at ``ghz`` (Ricker 1953, closed form)."""
    a = (math.pi * ghz * t) ** 2
    return np.asarray((1 - 2 * a) * np.exp(-a))


def line(n_traces: int, *, ghz: float = 0.36, seed: int = 0) -> np.ndarray:
    """Return a steady direct wave and one echo per trace at a random time (trace, sample) int16."""
    t = np.arange(N_SAMPLES) * INTERVAL_NS
    at = np.random.default_rng(seed).uniform(10.0, 25.0, n_traces)
    return np.round(8000 * ricker(t - 4.0, 0.1) + 3000 * ricker(t - at[:, None], ghz)).astype(np.int16)


def write(path: Path, n_traces: int = 51, **named: object) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    write_segy(path, line(n_traces), interval_ns=INTERVAL_NS, **named)  # type: ignore[arg-type]


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Return a folder of lines 1, 2, 4 and 10; number 3 and 5 to 9 are missing, and 4 is short."""
    for number, n_traces in ((1, 51), (2, 51), (4, 26), (10, 50)):
        write(tmp_path / "stick" / f"L{number}.sgy", n_traces)
    (tmp_path / "stick" / "sheet.txt").write_text("line 3 forgotten")
    (tmp_path / "stick" / ".hidden.sgy").write_text("")
    return tmp_path / "stick"


def test_files_come_in_natural_order_and_other_kinds_are_named(folder: Path) -> None:
    """L10 follows L4; the field sheet is no line."""
    files, notes = line_files(folder)
    assert [f.name for f in files] == ["L1.sgy", "L2.sgy", "L4.sgy", "L10.sgy"]
    assert [n.file for n in notes] == ["sheet.txt"]


@pytest.mark.parametrize(("unit", "interval_ns"), [("ps", 0.25), ("ns", 1.0)])
def test_the_likely_unit_of_the_interval_is_found(tmp_path: Path, unit: str, interval_ns: float) -> None:
    """Of ps, ns and µs one alone gives a window between 5 ns and 5 µs here (128 samples of 250 ps or 1 ns)."""
    write_segy(tmp_path / "a.sgy", line(11), interval_ns=interval_ns, interval_unit=unit)  # type: ignore[arg-type]
    found = look_through(tmp_path)
    assert found.units == (unit,)
    assert found.interval_ns == pytest.approx(interval_ns)
    assert found.window_ns == pytest.approx(interval_ns * N_SAMPLES)


def test_files_that_state_their_interval_need_no_unit(tmp_path: Path) -> None:
    """SEG-Y revision 2 holds the interval in µs as a 64-bit float: nothing is to be guessed."""
    write_segy(tmp_path / "a.sgy", line(11), interval_ns=0.25, revision=2)
    found = look_through(tmp_path)
    assert found.units == ()
    assert found.interval_ns == pytest.approx(0.25)


def test_a_persons_interval_beats_the_files(folder: Path) -> None:
    """Then no unit is written down, but the interval itself."""
    made = draft(look_through(folder, interval_ns=0.2), site=folder.parent / "site")
    assert "\nsample_interval_ns = 0.2 " in made.toml
    assert "\ninterval_unit" not in made.toml


def test_lines_of_different_units_are_refused(tmp_path: Path) -> None:
    """One radar has one unit; 250 would be 250 ps in one file and 1 would be 1 ns in the other."""
    write_segy(tmp_path / "a.sgy", line(11), interval_ns=0.25)
    write_segy(tmp_path / "b.sgy", line(11), interval_ns=1.0, interval_unit="ns")
    with pytest.raises(SurveyError, match="another unit"):
        look_through(tmp_path)


def test_the_strongest_frequency_is_measured_without_the_direct_wave(tmp_path: Path) -> None:
    """The echoes are 360 MHz Ricker wavelets; the direct wave, stronger and at 100 MHz, does not count.

    The tolerance is one bin of the spectrum (31 MHz) for a curve smoothed over five.
    """
    write(tmp_path / "a.sgy", 401)
    found = look_through(tmp_path)
    assert found.strongest_mhz == pytest.approx(360.0, abs=1e3 / (N_SAMPLES * INTERVAL_NS))
    assert found.nominal_mhz == 400.0


def test_a_missing_number_leaves_a_gap_and_zigzag_goes_on_counting(folder: Path, tmp_path: Path) -> None:
    """Line 4 lies three spacings from line 1 and, like line 2, was walked back; line 10 lies nine away."""
    answers = Answers(line_spacing_m=0.5, line_length_m=1.0, walk="zigzag")
    rows = {row.line: row for row in draft(folder, answers, site=tmp_path / "site").rows}
    assert list(rows) == ["1", "2", "4", "10"]
    assert (rows["1"].start, rows["1"].end) == ((0.0, 0.0), (1.0, 0.0))
    assert (rows["2"].start, rows["2"].end) == ((1.0, 0.5), (0.0, 0.5))
    assert rows["10"].start == (1.0, 4.5)
    # 26 of 51 traces: 25 of 50 steps, half the length, from where the walk began
    assert (rows["4"].start, rows["4"].end) == ((1.0, 1.5), (0.5, 1.5))
    assert "26 traces" in rows["4"].note


def test_one_way_lines_all_start_at_the_baseline(folder: Path, tmp_path: Path) -> None:
    """No line is walked back."""
    rows = draft(folder, Answers(walk="one-way"), site=tmp_path / "site").rows
    assert {row.start[0] for row in rows} == {0.0}


@pytest.mark.parametrize(
    "names", [["20260418_101500", "20260418_101733", "20260418_102001"], ["north", "mid", "south"]]
)
def test_names_without_line_numbers_follow_each_other(tmp_path: Path, names: list[str]) -> None:
    """A clock time is no line number: nobody left 232 lines out."""
    for name in names:
        write(tmp_path / "stick" / f"{name}.sgy", 11)
    made = draft(tmp_path / "stick", Answers(line_spacing_m=0.5), site=tmp_path / "site")
    assert [row.line for row in made.rows] == sorted(names)
    assert [row.start[1] for row in made.rows] == [0.0, 0.5, 1.0]
    assert any("no line numbers" in note.came for note in made.notes)


def test_numbers_in_steps_of_five_are_neighbours(tmp_path: Path) -> None:
    """Lines named by their place in decimetres have no gaps."""
    for number in (0, 5, 10, 15):
        write(tmp_path / "stick" / f"{number:03d}.sgy", 11)
    made = draft(tmp_path / "stick", Answers(line_spacing_m=0.5), site=tmp_path / "site")
    assert [row.start[1] for row in made.rows] == [0.0, 0.5, 1.0, 1.5]
    assert not made.notes


def test_what_was_answered_is_not_called_guessed(folder: Path, tmp_path: Path) -> None:
    """And what was not answered is, in the result and in the file itself."""
    some = draft(folder, Answers(centre_frequency_mhz=500.0, walk="one-way"), site=tmp_path / "site")
    said = " ".join(some.guessed)
    assert "centre_frequency_mhz" not in said
    assert "walked" not in said
    assert "antenna_separation_m" in said
    assert all(f"#   {line}\n" in some.toml for line in some.guessed)
    full = Answers("T", 500.0, 0.2, 0.5, 1.0, "zigzag")
    assert [g.split(" ")[0] for g in draft(folder, full, site=tmp_path / "site").guessed] == ["interval_unit"]


@pytest.mark.parametrize(
    ("spacing", "length", "says"),
    [(20.0, 5.0, "swapped"), (2.5, 10.0, "more than 2 m"), (0.5, 0.2, "4 mm apart"), (0.25, 1.0, "")],
)
def test_unlikely_answers_are_questioned(
    folder: Path, tmp_path: Path, spacing: float, length: float, says: str
) -> None:
    """51 traces on 0.2 m are 4 mm apart (closed form); 1 m, 0.25 m apart, is nothing to speak of."""
    notes = draft(folder, Answers(line_spacing_m=spacing, line_length_m=length), site=tmp_path / "site").notes
    told = " ".join(note.came for note in notes if note.severity == "warning")
    assert (says in told) if says else not told


@pytest.mark.parametrize(
    ("measured", "interval_ns", "nominal", "says", "not_says"),
    [
        (360.0, 0.25, 400, "the ground has lowered", "samples"),
        (455.0, 0.25, 500, "the ground has lowered", "samples"),
        (260.0, 0.5, 300, "the ground has lowered", "samples"),
        (420.0, 0.5, 500, "the ground has lowered", "samples"),
        (2600.0, 0.1, 2500, "the nearest usual one", "lowered"),
        (480.0, 0.6, 400, "fewer than 4 samples", "lowered"),
    ],
)
def test_the_guessed_frequency_does_not_contradict_the_measured_one(
    measured: float, interval_ns: float, nominal: float, says: str, not_says: str
) -> None:
    """The ground lowers a frequency; at 0.6 ns nothing above 1 / (4 x 0.6 ns) = 417 MHz is guessed."""
    found = Found((FoundLine(Path("a"), None, 51, 128, interval_ns),), (), (), interval_ns, measured)
    guessed = draft(found, site=Path("site")).guessed[0]
    assert guessed.startswith(
        f"centre_frequency_mhz {nominal}: measured is that the files are strongest near {measured:.0f}"
    )
    assert says in guessed
    assert not_says not in guessed


@pytest.mark.parametrize(
    ("shift", "turn"), [((0.0, 0.0), 0.0), ((565_000.0, 5_932_000.0), 0.0), ((565_000.0, 5_932_000.0), 0.7)]
)
def test_coordinates_in_the_files_give_places_and_spacing(
    tmp_path: Path, shift: tuple[float, float], turn: float
) -> None:
    """Three zigzag lines of 10 m, 0.5 m apart, turned and shifted on the map, come back as 10 m and 0.5 m.

    Headers hold centimetres, so a place is good to 0.5 cm in x and y, a length to 2 cm.
    """
    cos, sin = math.cos(turn), math.sin(turn)
    for number in range(3):
        along = np.linspace(0.0, 10.0, 51)[:: -1 if number == 1 else 1]
        x, y = along, np.full(51, 0.5 * number)
        write(
            tmp_path / "stick" / f"{number}.sgy",
            x=shift[0] + cos * x - sin * y,
            y=shift[1] + sin * x + cos * y,
        )
    found = look_through(tmp_path / "stick")
    assert found.spacing_m() == pytest.approx(0.5, abs=0.02)
    assert found.length_m() == pytest.approx(10.0, abs=0.02)
    made = draft(found, site=tmp_path / "site")
    assert [round(r.end[0] - r.start[0]) for r in made.rows] == [10, -10, 10]
    np.testing.assert_allclose([r.start[1] for r in made.rows], [0.0, 0.5, 1.0], atol=0.02)
    assert max(abs(v) for r in made.rows for v in (*r.start, *r.end)) < 11.0
    told = [note for note in made.notes if "coordinates begin at" in note.came]
    assert len(told) == (shift[0] > 0)
    assert all(f"E {shift[0]:.2f} N {shift[1]:.2f}" in note.came and "positions" in note.do for note in told)
    write_draft(made)
    assert len(read_survey(tmp_path / "site").rows) == 3
    # what the note promises: both lines wait in the draft, and it is still a survey with them
    toml = tmp_path / "site" / "survey.toml"
    kept = toml.read_text().replace("# positions =", "positions =").replace("# crs =", "crs =")
    toml.write_text(kept)
    config = read_survey(tmp_path / "site").config
    assert (config.grid[0].positions, config.survey.crs) == ("header", "EPSG:25832")


def test_crossing_lines_are_placed_by_spacing_instead(tmp_path: Path) -> None:
    """Coordinates of lines that are not parallel do not make one grid; it is said."""
    zero, walk = np.zeros(51), np.linspace(0, 10, 51)
    write(tmp_path / "stick" / "1.sgy", x=walk, y=zero + 1)
    write(tmp_path / "stick" / "2.sgy", x=zero + 1, y=walk)
    found = look_through(tmp_path / "stick")
    assert found.placed is None
    assert any("not parallel" in p.came for p in found.problems)


def test_several_recordings_in_a_file_become_several_rows(tmp_path: Path) -> None:
    """The trace counter of SEG-Y (bytes 1 to 4) starts again where a line begins; each part is read by itself."""
    write(tmp_path / "a.sgy", 21)
    write(tmp_path / "b.sgy", 31)
    joined = (tmp_path / "a.sgy").read_bytes() + (tmp_path / "b.sgy").read_bytes()[3600:]
    (tmp_path / "stick").mkdir()
    (tmp_path / "stick" / "day.sgy").write_bytes(joined)
    found = look_through(tmp_path / "stick")
    assert [(f.part, f.n_traces) for f in found.lines] == [(0, 21), (1, 31)]
    made = draft(found, site=tmp_path / "site")
    write_draft(made)
    assert [(r.part, r.file) for r in read_survey(tmp_path / "site").rows] == [
        (0, "lines/day.sgy"),
        (1, "lines/day.sgy"),
    ]


def test_a_damaged_file_is_left_out_and_named(folder: Path) -> None:
    """The others are drafted."""
    (folder / "L3.sgy").write_bytes(b"\0" * 100)
    found = look_through(folder)
    assert len(found.lines) == 4
    assert any(p.file == "L3.sgy" and p.came.startswith("left out") for p in found.problems)


def test_a_folder_without_lines_is_refused(tmp_path: Path) -> None:
    """Empty, or nothing in it can be read: both name the folder."""
    (tmp_path / "empty").mkdir()
    with pytest.raises(SurveyError, match="holds no files"):
        look_through(tmp_path / "empty")
    (tmp_path / "a.sgy").write_bytes(b"x")
    with pytest.raises(SurveyError, match="no line file here can be read"):
        look_through(tmp_path)


def test_a_written_draft_is_a_survey_and_the_originals_stay(folder: Path, tmp_path: Path) -> None:
    """The copies are byte for byte the originals; the survey reads without a complaint."""
    before = {p.name: p.read_bytes() for p in folder.iterdir()}
    made = draft(folder, Answers(title='Cäcilie\'s "field"\n2'), site=tmp_path / "site")
    write_draft(made)
    survey = read_survey(tmp_path / "site")
    assert survey.config.survey.title == 'Cäcilie\'s "field" 2'
    assert not survey.set_aside
    assert {p.name: p.read_bytes() for p in folder.iterdir()} == before
    for name in ("L1.sgy", "L10.sgy"):
        assert (tmp_path / "site" / "lines" / name).read_bytes() == before[name]


def test_lines_inside_the_survey_folder_are_used_where_they_are(tmp_path: Path) -> None:
    """Nothing is copied."""
    for number in (1, 2):
        write(tmp_path / "site" / "raw" / f"{number}.sgy")
    write_draft(draft(tmp_path / "site" / "raw", site=tmp_path / "site"))
    assert not (tmp_path / "site" / "lines").exists()
    assert [row.file for row in read_survey(tmp_path / "site").rows] == ["raw/1.sgy", "raw/2.sgy"]


@pytest.mark.parametrize("name", ["survey.toml", "lines.csv", "lines"])
def test_nothing_is_overwritten(folder: Path, tmp_path: Path, name: str) -> None:
    """What is there stays as it is, and nothing is added beside it."""
    site = tmp_path / "site"
    site.mkdir()
    (site / name).write_text("mine")
    made = draft(folder, site=site)
    with pytest.raises(SurveyError, match="is not overwritten"):
        write_draft(made)
    assert [p.name for p in site.iterdir()] == [name]
    assert (site / name).read_text() == "mine"


def test_a_copy_cut_short_leaves_no_half_survey(folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """When the disk fills up on the way, the folder holds nothing, and the same call works later."""
    made = draft(folder, site=tmp_path / "site")

    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr("planum.pipeline.draft.shutil.copy2", full)
        with pytest.raises(OSError, match="No space left"):
            write_draft(made)
    assert not list((tmp_path / "site").iterdir())
    write_draft(made)
    assert len(read_survey(tmp_path / "site").rows) == 4
