"""Statements for the window's tests."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from planum.records import Statement


def statement_for(top: float, bottom: float) -> Statement:
    return Statement(
        quantity="reflection envelope",
        top_m=top,
        bottom_m=bottom,
        statistic="mean",
        velocity_m_per_ns=0.085,
        velocity_error_m_per_ns=0.002,
        velocity_origin="measured",
        depth_error_m=0.04,
        zero_rule="direct wave",
        zero_error_ns=0.2,
        surface="the ground surface",
        date="2026-04-18",
        migration="migrated in 2-D, line by line",
        fill="filled",
        line_spacing_m=0.25,
        coverage_rule="masked",
        resolution="0.1 m",
        stretch="one stretch",
    )


@pytest.fixture(scope="session")
def statement() -> Callable[[float, float], Statement]:
    """Return what makes the statement of an interval (m)."""
    return statement_for
