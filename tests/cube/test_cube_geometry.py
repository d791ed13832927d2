"""Direction, spacing, rows and axes of a set."""

from __future__ import annotations

import numpy as np
import pytest

from planum.cube import geometry
from planum.errors import SurveyError
from planum.records import LineEntry

TIME = {"time_step_ns": 0.1, "n_time": 50, "time0_ns": -2.0}


def entry(line, start, end, *, traces=101, **more):
    return LineEntry(
        key=line,
        set="A/x",
        grid="A",
        line=line,
        row=0,
        file=f"{line}.sgy",
        first_trace=0,
        last_trace=traces - 1,
        start=start,
        end=end,
        **more,
    )


def lines(across, *, along=(0.0, 10.0), zigzag=True):
    out = []
    for i, y in enumerate(across):
        a, b = along if not (zigzag and i % 2) else along[::-1]
        out.append(entry(str(i), (a, float(y)), (b, float(y))))
    return out


@pytest.mark.parametrize(
    ("end", "way"),
    [((10, 0), "x"), ((-10, 0.99), "x"), ((0.5, -8), "y"), ((10, 1.01), None), ((7, 7), None), ((0, 0), None)],
)
def test_direction_is_the_axis_within_one_in_ten(end, way):
    assert geometry.line_direction((0.0, 0.0), end) == way


def test_an_oblique_line_is_refused_by_name():
    with pytest.raises(SurveyError, match=r"line slanted of grid A runs from \(0, 1\) to \(10, 4\)"):
        geometry.set_direction([*lines([0, 0.5]), entry("slanted", (0.0, 1.0), (10.0, 4.0))])


def test_all_oblique_and_crossing_lines_are_told_at_once():
    bad = [entry("slanted", (0.0, 1.0), (10.0, 4.0)), entry("crossing", (3.0, 0.0), (3.0, 10.0))]
    with pytest.raises(SurveyError, match="crossing of grid A runs along y, the others of set A/x along x") as caught:
        geometry.set_direction([*lines([0, 0.5, 1.0]), *bad])
    assert [p.line for p in caught.value.problems] == ["slanted", "crossing"]


def test_an_empty_set_is_refused():
    with pytest.raises(SurveyError, match="without lines"):
        geometry.set_direction([])


def test_spacing_survives_missing_lines_and_pieces():
    across = [0.0, 0.25, 0.5, 1.0, 1.25, 2.0, 2.25]
    pieces = [entry("1", (6.0, 0.25), (10.0, 0.25))]
    assert geometry.line_spacing([*lines(across), *pieces], direction="x") == 0.25


@pytest.mark.parametrize("across", [[0.0, 0.5, 1.0, 2.0, 4.5], [0.0, 1.0, 1.5], [0.0, 1.0, 2.5, 4.0]])
def test_spacing_with_most_lines_missing(across):
    """All places are multiples of half a metre: no two lines may fall into one row, whatever is missing."""
    step = geometry.line_spacing(lines(across), direction="x")
    assert step == pytest.approx(0.5)
    g = geometry.cube_geometry(lines(across), **TIME)
    assert len({e.row for e in geometry.place_rows(lines(across), g)[0]}) == len(across)


def test_two_lines_in_one_row_are_refused_and_pieces_are_not():
    twice = [*lines([0.0, 0.5, 1.0]), entry("9", (0.0, 0.52), (10.0, 0.52))]
    g = geometry.cube_geometry(lines([0.0, 0.5, 1.0]), **TIME)
    with pytest.raises(SurveyError, match=r"both lie on the row at 0\.50 m; one line in a row"):
        geometry.place_rows(twice, g)
    pieces = [*lines([0.0, 1.0]), entry("1", (0.0, 0.5), (4.0, 0.5)), entry("1b", (6.0, 0.5), (10.0, 0.5))]
    assert len(geometry.place_rows(pieces, g)[0]) == 4


def test_spacing_of_a_third_of_a_metre_survives_centimetre_tapes():
    """Positions rounded to 1 cm: the median step alone (0.33) would drift four rows over 400 lines."""
    typed = np.round(np.arange(400) / 3.0, 2)
    step = geometry.line_spacing(lines(typed), direction="x")
    # Fit of 400 positions with a rounding error of 1 cm/sqrt 12 each: slope error 2.5e-5 at 1 sigma / 400 ... 1e-6.
    assert step == pytest.approx(1 / 3, abs=5e-6)
    g = geometry.cube_geometry(lines(typed), **TIME)
    placed, problems = geometry.place_rows(lines(typed), g)
    assert [e.row for e in placed] == list(range(400))
    assert problems == ()


def test_repeated_lines_do_not_count_as_spacing():
    assert geometry.line_spacing(lines([0.0, 0.5, 0.505, 1.0, 1.5]), direction="x") == pytest.approx(0.5, abs=3e-3)


def test_a_single_line_has_a_width_of_its_own():
    g = geometry.cube_geometry(lines([3.0]), **TIME)
    assert (g.n_lines, g.line0_m, g.line_step_m) == (1, 3.0, geometry.ALONE_M)


def test_axes_cover_all_starts_and_ends():
    ragged = [entry("0", (1.0, 0.0), (9.0, 0.0), traces=401), entry("1", (10.5, 0.5), (2.0, 0.5), traces=426)]
    g = geometry.cube_geometry(ragged, **TIME)
    assert g.direction == "x"
    assert (g.along0_m, g.n_lines, g.line_step_m) == (1.0, 2, 0.5)
    assert g.along_step_m == pytest.approx(0.02)
    assert g.along()[-1] == pytest.approx(10.5)
    assert np.array_equal(g.lines(), [0.0, 0.5])


def test_lines_along_y_have_x_across():
    g = geometry.cube_geometry([entry("a", (2.0, 0.0), (2.0, 5.0)), entry("b", (1.5, 5.0), (1.5, 0.0))], **TIME)
    assert (g.direction, g.line0_m, g.line_step_m, g.along0_m) == ("y", 1.5, 0.5, 0.0)


def test_given_steps_are_kept():
    g = geometry.cube_geometry(lines([0, 0.5, 1.0]), line_step_m=0.25, along_step_m=0.05, **TIME)
    assert (g.line_step_m, g.n_lines, g.along_step_m, g.n_along) == (0.25, 5, 0.05, 201)


def test_missing_lines_leave_rows_empty():
    some = lines([0.0, 0.5, 2.0, 2.5])
    g = geometry.cube_geometry(some, **TIME)
    placed, _ = geometry.place_rows(some, g)
    assert g.n_lines == 6
    assert [e.row for e in placed] == [0, 1, 4, 5]


def test_a_line_off_its_row_is_warned_about():
    off = lines([0.0, 0.5, 1.06, 1.5, 2.0])
    g = geometry.cube_geometry(off, line_step_m=0.5, **TIME)
    _, problems = geometry.place_rows(off, g)
    assert [(p.line, p.severity) for p in problems] == [("2", "warning")]
    assert "0.060 m off its row at 1.000 m" in str(problems[0])


def test_a_first_line_that_is_off_does_not_drag_the_rows():
    off = lines([0.08, 0.5, 1.0, 1.5, 2.0])
    g = geometry.cube_geometry(off, line_step_m=0.5, **TIME)
    assert g.line0_m == pytest.approx(0.0)
    assert [p.line for p in geometry.place_rows(off, g)[1]] == ["0"]


def test_a_line_outside_the_rows_is_refused():
    g = geometry.cube_geometry(lines([0, 0.5]), **TIME)
    with pytest.raises(SurveyError, match="line 2 of grid A lies on row 2; rows 0 to 1"):
        geometry.place_rows(lines([0, 0.5, 1.0]), g)


def test_a_step_that_is_not_positive_is_refused():
    with pytest.raises(SurveyError, match="along_step_m: along_step_m is 0; a positive number"):
        geometry.cube_geometry(lines([0, 0.5]), along_step_m=0.0, **TIME)


def test_a_set_without_lengths_has_no_trace_spacing():
    with pytest.raises(SurveyError, match="no line with two traces"):
        geometry.trace_spacing([entry("0", (0.0, 0.0), (1.0, 0.0), traces=1)])


def test_spacing_bears_neighbours_that_are_both_a_little_off():
    """Two lines near a tenth off in opposite ways: their distance is 0.12 to 0.135 off, within the fifth promised."""
    across = [0.0, 0.95, 2.07, 4.0, 6.0, 8.0]
    g = geometry.cube_geometry(lines(across), **TIME)
    placed, _ = geometry.place_rows(lines(across), g)
    assert [e.row for e in placed] == [0, 1, 2, 4, 6, 8]


def test_spacing_does_not_bear_more_than_a_fifth():
    """Distances 1, 1, 1.25: a quarter off a step of 1, half off 1/2, a quarter off 1/3; the median is left, refined."""
    fitted = np.polyfit([0, 1, 2, 3], [0.0, 1.0, 2.0, 3.25], 1)[0]
    assert geometry.line_spacing(lines([0.0, 1.0, 2.0, 3.25]), direction="x") == pytest.approx(fitted, abs=1e-6)
    assert not geometry._fits(np.array([1.0, 1.0, 1.25]), 1.0)
    assert geometry._fits(np.array([1.0, 1.0, 1.19]), 1.0)


def test_moving_lines_onto_rows_is_said_once():
    """3 cm and 2 cm off at 0.5 m: under a tenth each, so one note that names the larger; 1 cm is the tape's own."""
    off = lines([0.0, 0.53, 1.0, 1.48, 2.0])
    g = geometry.cube_geometry(off, line_step_m=0.5, **TIME)
    _, problems = geometry.place_rows(off, g)
    assert [p.severity for p in problems] == ["note"]
    assert "rows 0.5 m apart, moved by up to 0.030 m (line 1)" in str(problems[0])
    tape = lines([0.0, 0.51, 1.0, 1.49, 2.0])
    assert geometry.place_rows(tape, geometry.cube_geometry(tape, line_step_m=0.5, **TIME))[1] == ()


@pytest.mark.parametrize(
    ("across", "along", "asked"),
    [
        ([0, 25, 50], (0.0, 20.0), ["lines"]),  # spacing typed in cm
        ([0, 0.5, 1.0], (0.0, 2000.0), ["traces"]),  # length typed in cm
        ([0, 50, 100], (0.0, 2000.0), ["lines", "traces"]),
        ([0, 5, 10], (0.0, 100.0), []),  # at the limits
    ],
)
def test_a_register_that_is_hardly_in_metres_is_asked_about(across, along, asked):
    some = lines(across, along=along)
    _, problems = geometry.place_rows(some, geometry.cube_geometry(some, **TIME))
    assert [p.severity for p in problems] == ["warning"] * len(asked)
    for name, problem in zip(asked, problems, strict=True):
        assert f"the {name} of grid A are" in str(problem)
        assert "is the register in metres?" in str(problem)


@pytest.mark.parametrize("step", [1e-7, 0.009, 10.1])
def test_a_typed_trace_spacing_the_recordings_do_not_bear_is_refused(step):
    """Recorded at 0.1 m on 10 m: ten places per trace is the most, one line the longest."""
    with pytest.raises(SurveyError, match=r"trace_spacing_m is .*0\.01 to 10 m: .* recorded 0\.1 m apart"):
        geometry.cube_geometry(lines([0, 0.5]), along_step_m=step, **TIME)
    assert geometry.cube_geometry(lines([0, 0.5]), along_step_m=0.01, **TIME).n_along == 1001
