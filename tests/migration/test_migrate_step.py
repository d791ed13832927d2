"""The recipe's migration step: what it learns and what it refuses."""

from __future__ import annotations

import numpy as np
import pytest
from pydantic import ValidationError

from planum import schema
from planum.errors import RecipeError
from planum.migration.steps import MIGRATE, MigrateParams
from planum.migration.stolt import stolt
from planum.records import CubeGeometry, SetFacts, Step, Velocity


@pytest.fixture
def cube(models):
    data = np.random.default_rng(5).normal(size=(2, 60, 120))
    return models.cube(data, 0.05 * np.arange(60), -1.0 + 0.2 * np.arange(120))


def facts(*, velocity=0.085, centre_ghz=0.4, time_step_ns=0.2):
    geometry = CubeGeometry(
        direction="x",
        line0_m=0.0,
        line_step_m=0.25,
        n_lines=2,
        along0_m=0.0,
        along_step_m=0.05,
        n_along=60,
        time0_ns=-1.0,
        time_step_ns=time_step_ns,
        n_time=120,
    )
    typical = schema.cube(np.zeros((2, 1, 120)), line=np.arange(2.0), along=np.zeros(1), time=geometry.times())
    return SetFacts(
        geometry=geometry,
        centre_frequency_ghz=centre_ghz,
        separation_m=0.16,
        velocity=Velocity.constant(velocity, 0.004, origin="measured"),
        typical=typical,
        envelope=np.ones(120),
        noise=0.1,
        spectrum=np.ones(61),
        spectrum_step_ghz=2.5 / 60,
    )


def test_it_is_a_step_from_voltage_to_voltage_that_looks_along_lines():
    assert isinstance(MIGRATE, Step)
    assert (MIGRATE.name, MIGRATE.reach, MIGRATE.takes, MIGRATE.gives) == ("migrate", "line", "voltage", "voltage")


def test_velocity_and_band_are_learned_from_the_set():
    learned = MIGRATE.learn(facts(), MigrateParams())
    assert learned.velocity_m_per_ns == 0.085
    assert learned.highest_ghz == pytest.approx(1.2)  # three times the centre frequency
    assert MIGRATE.learn(facts(time_step_ns=0.5), MigrateParams()).highest_ghz == pytest.approx(1.0)  # Nyquist


def test_what_was_given_is_not_learned():
    given = MigrateParams(velocity_m_per_ns=0.11, highest_ghz=0.9, max_dip_deg=50.0)
    assert MIGRATE.learn(facts(), given) == given


def test_learned_settings_call_the_function_of_the_same_name(cube):
    params = MIGRATE.learn(facts(), MigrateParams())
    out = MIGRATE(cube, **params.model_dump())
    assert out.identical(stolt(cube, velocity_m_per_ns=0.085, highest_ghz=params.highest_ghz))


def test_without_a_velocity_it_says_what_to_do(cube):
    with pytest.raises(RecipeError, match="give velocity_m_per_ns"):
        MIGRATE(cube)


@pytest.mark.parametrize(
    ("typed", "match"),
    [
        (
            {"velocity_m_per_ns": 0.5},
            r"velocity_m_per_ns = 0\.5; allowed: 0\.03 to 0\.29.*mend the value, or leave it out",
        ),
        ({"velocity_m_per_ns": 0.0}, r"velocity_m_per_ns = 0\.0"),
        ({"max_dip_deg": 90.0}, r"max_dip_deg = 90\.0"),
        ({"edge_taper_m": -1.0}, r"edge_taper_m = -1\.0"),
        ({"highest_ghz": 0.0}, r"highest_ghz = 0\.0"),
    ],
)
def test_settings_that_cannot_be_right_are_refused_as_they_are_typed(typed, match):
    with pytest.raises(ValidationError, match=match):
        MigrateParams(**typed)


def test_a_band_without_the_pulse_is_refused_once_the_antenna_is_known():
    """400 MHz typed as 0.04: nothing but silence would come out."""
    with pytest.raises(RecipeError, match=r"highest_ghz is 0\.04 for an antenna of 0\.4 GHz; at least half"):
        MIGRATE.learn(facts(), MigrateParams(highest_ghz=0.04))
    assert MIGRATE.learn(facts(), MigrateParams(highest_ghz=0.2)).highest_ghz == 0.2


def test_unknown_setting_is_refused(cube):
    with pytest.raises(ValidationError, match="speed"):
        MIGRATE(cube, velocity_m_per_ns=0.1, speed=3)
