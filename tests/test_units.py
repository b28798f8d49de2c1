"""Conversions of units, and the labels of rates and ages, against identities and published numbers."""

import numpy as np
import pytest

from fluvinv import units
from fluvinv.files.settings import StreamPower
from fluvinv.streampower.analytic import HackRiver


@pytest.mark.parametrize(
    ("there", "back", "value", "converted"),
    [
        (units.km_to_m, units.m_to_km, 1.5, 1500.0),
        (units.km2_to_m2, units.m2_to_km2, 2.0, 2e6),
        (units.myr_to_yr, units.yr_to_myr, 1.25, 1.25e6),
        (units.mm_per_yr_to_m_per_yr, units.m_per_yr_to_mm_per_yr, 0.3, 3e-4),
    ],
)
def test_conversions_and_their_inverses(there, back, value, converted):
    assert there(value) == pytest.approx(converted, rel=1e-15)
    assert back(there(value)) == pytest.approx(value, rel=1e-15)
    np.testing.assert_allclose(there(np.array([value, 2 * value])), [converted, 2 * converted], rtol=1e-15)


def test_rate_units():
    """1 mm/yr = 1 km/Myr = 1000 m/Myr (check value 6.15, identity)."""
    km_per_myr = units.km_to_m(1.0) / units.myr_to_yr(1.0)
    assert units.mm_per_yr_to_m_per_yr(1.0) == pytest.approx(km_per_myr, rel=1e-15)
    assert units.m_per_myr_to_mm_per_yr(1000.0) == 1.0


def test_published_denudation_rates():
    """218 and 54 m/Myr, mean and median of basins, are 0.218 and 0.054 mm/yr.

    Check value 2.15 (Portenga & Bierman 2011, GSA Today 21(8), 4; seen).
    """
    assert units.m_per_myr_to_mm_per_yr(218.0) == pytest.approx(0.218, rel=1e-15)
    assert units.m_per_myr_to_mm_per_yr(54.0) == pytest.approx(0.054, rel=1e-15)


@pytest.mark.parametrize(("area_exponent", "factor"), [(0.4, 0.2512), (0.5, 1.0)])
def test_erodibility_in_kilometres(area_exponent, factor):
    """K in km^(1-2m)/yr is K in m^(1-2m)/yr times 1000^(2m-1) (check value 2.2, dimensional; identity)."""
    assert units.erodibility_m_to_km(1.0, area_exponent) == pytest.approx(factor, abs=5e-5)


def test_erodibility_in_kilometres_gives_the_same_celerity():
    """A length per time does not depend on the unit in which lengths and areas are given."""
    erodibility, m, area = 3e-6, 0.43, 2.7e8
    in_km = units.erodibility_m_to_km(erodibility, m) * units.m2_to_km2(area) ** m
    assert units.km_to_m(in_km) == pytest.approx(erodibility * area**m, rel=1e-13)


def test_reference_celerity_stands_for_the_erodibility():
    """c = K A^m (check value 1.6; Rosenbloom & Anderson 1994, from memory) at the reference area in km2."""
    power = StreamPower(reference_celerity_m_per_yr=0.05, reference_area_km2=100.0, area_exponent=0.4)
    assert power.erodibility_si * (1e8) ** 0.4 == pytest.approx(0.05, rel=1e-13)


def test_hack_law_in_three_units():
    """L = 1.4 A^0.6 in miles is 1.2729 A^0.6 in km and 0.31974 A^0.6 in m; inverse A = 6.69 x^1.667.

    Check value 2.6 (Hack 1957, USGS PP 294-B; ka and h in Whipple & Tucker 1999; from memory, the rest identity).
    The mile is 1.609344 km. Whipple & Tucker's 6.69 goes with h = 1.67, hence the loose tolerance on ka.
    """
    mile = units.km_to_m(1.609344)
    in_m = 1.4 * mile / mile**1.2
    assert in_m == pytest.approx(0.31974, rel=1e-4)
    assert units.m_to_km(in_m * units.km2_to_m2(1.0) ** 0.6) == pytest.approx(1.2729, rel=1e-4)
    river = HackRiver(1e5, 6.69, 1.0 / 0.6, 2e-5, 0.5)
    assert in_m * float(river.area(5e4)) ** 0.6 == pytest.approx(5e4, rel=2e-3)


def test_million_years_are_a_million_of_the_year_in_use():
    """The program counts in years and never in seconds: the choice of year cannot change a number.

    Check value 6.13: Julian year 31557600 s, CF year 31556925.9747 s (CF conventions 4.4; seen). They differ by
    2.14e-5, and no constant in the unit module is a length of the year.
    """
    julian_s, calendar_s = 31557600.0, 31556925.9747
    assert julian_s / calendar_s - 1 == pytest.approx(2.14e-5, rel=2e-3)
    constants = {name: value for name, value in vars(units).items() if isinstance(value, float)}
    assert constants == {
        "M_PER_KM": 1e3,
        "M2_PER_KM2": 1e6,
        "YR_PER_MYR": 1e6,
        "M_PER_YR_PER_MM_PER_YR": 1e-3,
    }
