"""The migration step of the recipe."""

from __future__ import annotations

from typing import Any, Literal, Self

from pydantic import Field, model_validator
from xarray import DataArray

from planum.constants import VELOCITY_RANGE
from planum.errors import Problem, RecipeError
from planum.migration.stolt import DIP_TAPER_DEG, EDGE_TAPER_M, MAX_DIP_DEG, check_settings, stolt
from planum.records import Quantity, Record, SetFacts

__all__ = ["MIGRATE", "Migrate", "MigrateParams"]

HIGHEST_OF_CENTRE = 3.0
"""Centre frequencies: three times its centre a Ricker spectrum, f² exp(-f²), has fallen to 0.3 % of its peak."""

LEAST_OF_CENTRE = 0.5
"""Centre frequencies: a band that ends below half of it holds next to nothing of the pulse (the same Ricker spectrum
has 4 % of its power there)."""


class MigrateParams(Record):
    """Settings of migration; None is learned from the survey."""

    velocity_m_per_ns: float | None = Field(None, description="None: the velocity found for the set")
    max_dip_deg: float = MAX_DIP_DEG
    dip_taper_deg: float = DIP_TAPER_DEG
    edge_taper_m: float = EDGE_TAPER_M
    highest_ghz: float | None = Field(None, description="None: three times the centre frequency, at most Nyquist")

    @model_validator(mode="after")
    def _possible(self) -> Self:
        velocity = VELOCITY_RANGE[1] if self.velocity_m_per_ns is None else self.velocity_m_per_ns
        check_settings(velocity, self.max_dip_deg, self.dip_taper_deg, self.edge_taper_m, self.highest_ghz)
        return self


class Migrate:
    """Constant-velocity migration, line by line; see :func:`planum.migration.stolt.stolt`."""

    name = "migrate"
    version = 2
    reach: Literal["trace", "line", "set"] = "line"
    takes: Quantity = "voltage"
    gives: Quantity = "voltage"
    Params = MigrateParams

    def learn(self, facts: SetFacts, params: MigrateParams) -> MigrateParams:
        """Return the settings with velocity and highest frequency filled in from the set's facts.

        Raises
        ------
        RecipeError
            When a highest frequency was given that leaves nothing of the pulse.
        """
        if problems := self.refused(params, centre_ghz=facts.centre_frequency_ghz):
            raise RecipeError(problems)
        found: dict[str, float] = {}
        if params.velocity_m_per_ns is None:
            found["velocity_m_per_ns"] = facts.velocity.value
        if params.highest_ghz is None:
            nyquist = 0.5 / facts.geometry.time_step_ns
            found["highest_ghz"] = min(HIGHEST_OF_CENTRE * facts.centre_frequency_ghz, nyquist)
        return params.model_copy(update=found)

    def refused(self, params: MigrateParams, *, centre_ghz: float) -> tuple[Problem, ...]:
        """Return what is wrong with the settings for an antenna of this centre frequency."""
        least = LEAST_OF_CENTRE * centre_ghz
        if params.highest_ghz is None or params.highest_ghz >= least:
            return ()
        return (
            Problem(
                came=f"highest_ghz is {params.highest_ghz:g} for an antenna of {centre_ghz:g} GHz",
                allowed=f"at least half the centre frequency, {least:g} GHz: below, nothing of the pulse is left",
                do="give a higher one (GHz, not MHz), or leave it out",
                key="recipe.migrate.highest_ghz",
            ),
        )

    def __call__(self, cube: DataArray, **params: Any) -> DataArray:
        """Migrate ``cube``.

        Raises
        ------
        RecipeError
            When no velocity is given and none was learned.
        """
        settings = MigrateParams(**params)
        if settings.velocity_m_per_ns is None:
            raise RecipeError(
                Problem(
                    came="migration has no velocity",
                    do="give velocity_m_per_ns, or learn it from the survey first",
                    key="recipe.migrate.velocity_m_per_ns",
                )
            )
        return stolt(cube, **settings.model_dump())


MIGRATE = Migrate()
