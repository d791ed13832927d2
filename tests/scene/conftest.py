"""The scene's tests draw only where the machine can."""

from __future__ import annotations

import os

import pytest

from planum.scene.probe import rendering_problem


@pytest.fixture(scope="session")
def _drawing() -> None:
    """Need a machine that can draw: its absence skips with the reason, and fails with CI=true."""
    problem = rendering_problem()
    if problem is not None:
        (pytest.fail if os.environ.get("CI", "").lower() == "true" else pytest.skip)(str(problem))
