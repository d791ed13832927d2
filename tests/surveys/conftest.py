"""The measures stand in a plain module beside the tests; surveys are mapped to their NetCDF file only."""

from __future__ import annotations

import importlib.util
import shutil
import sys
from collections.abc import Callable
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest
import xarray as xr

from planum.outputs.netcdf import write_netcdf
from planum.outputs.stretch import stretch_of
from planum.pipeline import run
from planum.pipeline.told import RunFacts, statements

ROOT = Path(__file__).parents[2]


def module(path: Path) -> ModuleType:
    """Load a module that belongs to no package."""
    spec = importlib.util.spec_from_file_location(f"loaded_{path.stem}", path)
    assert spec is not None
    assert spec.loader is not None
    loaded = importlib.util.module_from_spec(spec)
    sys.modules[spec.name] = loaded  # dataclasses look their module up
    spec.loader.exec_module(loaded)
    return loaded


@pytest.fixture(scope="session")
def metrics() -> ModuleType:
    """The module ``metrics.py`` of this folder."""
    return module(Path(__file__).with_name("metrics.py"))


@pytest.fixture(scope="session")
def reference_chain() -> ModuleType:
    """The independent chain of ``benchmarks/``, which shares no code with the package."""
    return module(ROOT / "benchmarks" / "reference_chain.py")


@pytest.fixture(scope="session")
def marrowby(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A copy of the demo survey that tests may map into."""
    site = tmp_path_factory.mktemp("marrowby") / "site"
    shutil.copytree(ROOT / "grids" / "marrowby", site, ignore=shutil.ignore_patterns("out*", "work", "pictures"))
    return site


@pytest.fixture(scope="session")
def slices_of() -> Callable[..., xr.Dataset]:
    """Map a site as the program does, all but the pictures, and return its slices.

    ``settings`` are texts appended to survey.toml after its own ``[slices]`` was cut off.
    """

    def only_netcdf(folder: Path, stack: xr.Dataset, facts: RunFacts, **_: Any) -> RunFacts:
        write_netcdf(folder / "slices.nc", stack, statements(facts.plan, stack, stretch_of(stack)))
        (folder / "run.json").write_text("{}", encoding="utf-8")
        return facts

    def mapped(site: Path, name: str, *settings: str) -> xr.Dataset:
        path = site / "survey.toml"
        own = path.read_text(encoding="utf-8")
        path.write_text("\n".join([own.partition("[slices]")[0], *settings]), encoding="utf-8")
        try:
            with pytest.MonkeyPatch.context() as patch:
                patch.setattr(run, "write_products", only_netcdf)
                out = run.map_site(site, name=name).out
        finally:
            path.write_text(own, encoding="utf-8")
        with xr.open_dataset(out / "slices.nc", engine="h5netcdf") as data:
            return data.load()

    return mapped
