"""Velocities every textbook prints, from permittivity: v = c / sqrt(K) for a low-loss ground."""

from __future__ import annotations

import math

import pytest

from planum.constants import SPEED_OF_LIGHT, VELOCITY_RANGE
from planum.migration.stolt import alias_free_dip_deg

# Davis & Annan, Ground-penetrating radar for high-resolution mapping of soil and rock stratigraphy, Geophysical
# Prospecting 37 (1989), table 1 (from memory); the same figures stand in the public table of gpg.geosci.xyz.
# material, least and greatest relative permittivity, printed velocity in m/ns
TABLE = [
    ("air", 1, 1, 0.30),
    ("fresh water", 80, 80, 0.033),
    ("ice", 3, 4, 0.16),
    ("dry sand", 3, 5, 0.15),
    ("saturated sand", 20, 30, 0.06),
    ("limestone", 4, 8, 0.12),
    ("shale", 5, 15, 0.09),
    ("silt", 5, 30, 0.07),
    ("clay", 5, 40, 0.06),
    ("granite", 4, 6, 0.13),
]


@pytest.mark.parametrize(("material", "low", "high", "printed"), TABLE)
def test_printed_velocity_lies_between_those_of_its_permittivities(material, low, high, printed):
    # 2 %: the table prints two digits
    assert SPEED_OF_LIGHT / math.sqrt(high) * 0.98 <= printed <= SPEED_OF_LIGHT / math.sqrt(low) * 1.02


@pytest.mark.parametrize(("material", "low", "high", "printed"), TABLE)
def test_every_material_is_within_the_velocities_the_program_trusts(material, low, high, printed):
    # "0.30" for air is the printed rounding of c
    assert VELOCITY_RANGE[0] <= printed <= VELOCITY_RANGE[1] * 1.001


@pytest.mark.parametrize(
    ("permittivity", "printed"),
    # common practice: 0.3 in air, 0.06 in saturated sand or clay (K 25), 0.15 in dry sand or granite (K 4)
    [(1, 0.3), (25, 0.06), (4, 0.15)],
)
def test_common_velocities(permittivity, printed):
    assert SPEED_OF_LIGHT / math.sqrt(permittivity) == pytest.approx(printed, rel=0.001)  # c is 0.07 % below 0.3


@pytest.mark.parametrize(
    ("frequency_ghz", "wavelength_m"),
    [(0.01, 10.0), (2.0, 0.05)],  # common practice: 10 MHz to 2 GHz are 10 m to 5 cm at 0.1 m/ns
)
def test_spacing_of_a_quarter_wavelength_samples_every_dip(frequency_ghz, wavelength_m):
    """Quarter-wavelength trace spacing is the spatial Nyquist of a two-way section (common practice)."""

    def dip(share):
        return alias_free_dip_deg(
            velocity_m_per_ns=0.1, trace_spacing_m=wavelength_m * share, highest_ghz=frequency_ghz
        )

    assert dip(0.25) == pytest.approx(90.0, abs=1e-4)  # the arcsine's slope at 1 is infinite
    assert dip(0.5) == pytest.approx(30.0)  # half of the sine
