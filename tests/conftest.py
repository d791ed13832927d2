"""Shared by all tests: system packages are wanted, and their absence is a failure under CI."""

from __future__ import annotations

import os
import shutil

import pytest

os.environ.setdefault("MPLBACKEND", "Agg")


@pytest.hookimpl(tryfirst=True)
def pytest_runtest_setup(item: pytest.Item) -> None:
    """Skip a test whose system package is missing; with CI=true that is a failure."""
    for mark in item.iter_markers("system"):
        for program in mark.args:
            if shutil.which(program) is None:
                reason = f"needs the program {program!r}, which this machine lacks"
                if os.environ.get("CI", "").lower() == "true":
                    pytest.fail(reason)
                pytest.skip(reason)
