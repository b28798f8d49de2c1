"""Conversions between the units inside (m, yr) and the units at the edges (km, Myr, mm/yr)."""

M_PER_KM = 1e3
M2_PER_KM2 = 1e6
YR_PER_MYR = 1e6

#: 1 mm/yr = 1 km/Myr = 1e-3 m/yr
M_PER_YR_PER_MM_PER_YR = 1e-3


def km_to_m(value):
    """Kilometres to metres."""
    return value * M_PER_KM


def m_to_km(value):
    """Metres to kilometres."""
    return value / M_PER_KM


def km2_to_m2(value):
    """Square kilometres to square metres."""
    return value * M2_PER_KM2


def m2_to_km2(value):
    """Square metres to square kilometres."""
    return value / M2_PER_KM2


def myr_to_yr(value):
    """Million years to years."""
    return value * YR_PER_MYR


def yr_to_myr(value):
    """Years to million years."""
    return value / YR_PER_MYR


def mm_per_yr_to_m_per_yr(value):
    """Millimetres per year (= kilometres per million years) to metres per year."""
    return value * M_PER_YR_PER_MM_PER_YR


def m_per_yr_to_mm_per_yr(value):
    """Metres per year to millimetres per year."""
    return value / M_PER_YR_PER_MM_PER_YR


def m_per_myr_to_mm_per_yr(value):
    """Metres per million years to millimetres per year (1000 m/Myr = 1 mm/yr)."""
    return value / 1e3


def erodibility_m_to_km(erodibility, area_exponent):
    """Erodibility from m^(1-2m)/yr to km^(1-2m)/yr.

    Parameters
    ----------
    erodibility : float
        K in m^(1-2m)/yr.
    area_exponent : float
        m.

    Returns
    -------
    float
        K times 1000^(2m - 1).
    """
    return erodibility * M_PER_KM ** (2 * area_exponent - 1)
