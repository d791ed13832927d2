"""The measures stand in a plain module beside the tests."""

from __future__ import annotations

import importlib.util
from pathlib import Path
from types import ModuleType

import pytest


@pytest.fixture(scope="session")
def metrics() -> ModuleType:
    """The module ``metrics.py`` of this folder."""
    spec = importlib.util.spec_from_file_location("survey_metrics", Path(__file__).with_name("metrics.py"))
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module
