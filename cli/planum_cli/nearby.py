"""What a survey says of a single line file: the survey folder is looked for around the file."""

from __future__ import annotations

import os
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from planum.errors import Problem, SurveyError

if TYPE_CHECKING:
    from planum.lines.recording import ReadOptions
    from planum.survey.folder import Survey

__all__ = ["survey_of"]

LEVELS = 3
"""The file's own folder, and one and two folders up."""


def survey_of(file: Path) -> tuple[ReadOptions | None, str, tuple[Problem, ...]]:
    """Return how a survey around ``file`` has it read, where that is written, and what keeps a survey from being used.

    Nothing (None and an empty text) when there is no ``survey.toml``, or when it does not tell which radar made the
    file. The whole file is to be seen: which part of it is which line does not matter here.
    """
    for folder in Path(os.path.abspath(file)).parents[:LEVELS]:
        if (folder / "survey.toml").is_file():
            break
    else:
        return None, "", ()
    shown = os.path.relpath(folder / "survey.toml")
    try:
        options, radar = _options(folder, file)
    except SurveyError as error:
        came = f"cannot be used ({error.problems[0]})" if error.problems else "cannot be used"
        do = f"planum check {os.path.relpath(folder)}"
        return None, "", (Problem(came, do=do, file=shown, severity="warning"),)
    if options is None:
        came = "does not say which of its radars made this file"
        do = "name the file in the register, or give --unit and --frequency-mhz"
        return None, "", (Problem(came, do=do, file=shown, severity="note"),)
    return options, f"{shown}, radar {radar}", ()


def _options(folder: Path, file: Path) -> tuple[ReadOptions | None, str]:
    """Return how the survey has the file read and the radar's name; of an unknown file the only radar's."""
    from planum.lines.recording import ReadOptions
    from planum.survey.checking import load_config
    from planum.survey.folder import read_survey
    from planum.survey.safety import MOST_TOML_BYTES, read_text_capped

    try:
        survey = read_survey(folder)
    except SurveyError:  # a register that is not finished yet is no reason not to look at a line
        radars = load_config(read_text_capped(folder, "survey.toml", most_bytes=MOST_TOML_BYTES)).radar
    else:
        found = _in_register(survey, file)
        if found is not None:
            return found
        radars = survey.config.radar
    if len(radars) != 1:
        return None, ""
    radar = radars[0]
    options = ReadOptions(
        interval_ns=radar.sample_interval_ns,
        interval_unit=radar.interval_unit,
        centre_frequency_ghz=radar.centre_frequency_mhz / 1e3,
    )
    return options, radar.name


def _in_register(survey: Survey, file: Path) -> tuple[ReadOptions, str] | None:
    """Return the same for a file a row names; None when no row does."""
    from planum.pipeline.run import sources_of

    real = file.resolve()
    for row, source in sources_of(survey):
        if source.path == real:
            return replace(source.options, part=None, split=None, header_positions=False), row.radar
    return None
