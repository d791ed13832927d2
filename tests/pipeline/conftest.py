"""A one-page survey, mapped once for all tests of the pipeline."""

from __future__ import annotations

import shutil
from dataclasses import replace
from pathlib import Path

import pytest

from planum.errors import Problem
from planum.pipeline import products
from planum.pipeline.run import RunResult, map_site
from planum.synthetic.folder import write_survey
from planum.synthetic.ready import one_page


@pytest.fixture(scope="session")
def page(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The survey folder of one wall, 17 lines of 121 traces; not mapped. Copy it before changing it."""
    folder = tmp_path_factory.mktemp("page") / "site"
    scene, layout = one_page()
    write_survey(folder, scene, layout, seed=1)
    with (folder / "survey.toml").open("a", encoding="utf-8") as file:
        file.write("\n[slices]\nbottom_m = 1.2\nthickness_m = 0.1\nstep_m = 0.1\n")
    return folder


@pytest.fixture(scope="session")
def scrap(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A very small survey, five lines of 3 m and three slices, for what has to be run many times."""
    folder = tmp_path_factory.mktemp("scrap") / "site"
    scene, layout = one_page()
    write_survey(folder, scene, replace(layout, length_m=3.0, width_m=1.0), seed=1)
    with (folder / "survey.toml").open("a", encoding="utf-8") as file:
        file.write("\n[ground]\nvelocity_m_per_ns = 0.0875\n")
        file.write("\n[slices]\ntop_m = 0.4\nbottom_m = 0.7\nthickness_m = 0.1\nstep_m = 0.1\n")
    return folder


@pytest.fixture
def no_isosurface(monkeypatch: pytest.MonkeyPatch) -> None:
    """Behave like a machine that cannot draw in 3-D: costs that one picture, which has tests of its own."""
    problem = Problem(came="this machine cannot draw", do="install a drawing library")
    monkeypatch.setattr(products, "draw_scene", lambda *_: problem)


@pytest.fixture(scope="session")
def mapped(page: Path, tmp_path_factory: pytest.TempPathFactory) -> RunResult:
    """The same, mapped with everything."""
    site = tmp_path_factory.mktemp("mapped") / "site"
    shutil.copytree(page, site)
    return map_site(site)
