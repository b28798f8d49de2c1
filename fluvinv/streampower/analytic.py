r"""Closed-form long profiles under Hack's law, to hold numerical results against.

Distance x is measured from the divide, the outlet lies at x = L, and area follows A = ka x^h (Hack 1957).
The forms are those of Howard & Kerby (1983), Whipple & Tucker (1999), Whipple (2001) and Perron & Royden
(2013); they hold for uniform erodibility, from x > 0 to L.
"""

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True, slots=True)
class HackRiver:
    """A single river under Hack's law.

    Attributes
    ----------
    length : float, m
        L, distance from the divide to the outlet.
    area_factor : float, m^(2-h)
        ka.
    area_power : float
        h.
    erodibility : float, m^(1-2m)/yr
        K.
    area_exponent, slope_exponent : float
        m and n.
    """

    length: float
    area_factor: float
    area_power: float
    erodibility: float
    area_exponent: float
    slope_exponent: float = 1.0

    def area(self, x):
        """Upstream area (m2) at distance x (m) from the divide."""
        return self.area_factor * np.asarray(x, dtype=float) ** self.area_power

    def _integral(self, x, concavity):
        """Integrate A^-concavity from x to the outlet; the power law's exponent may be -1."""
        exponent = 1.0 - self.area_power * concavity
        if abs(exponent) < 1e-12:
            value = np.log(self.length / x)
        else:
            value = (self.length**exponent - np.asarray(x, dtype=float) ** exponent) / exponent
        return self.area_factor**-concavity * value

    def steady_slope(self, x, uplift_rate):
        """Slope of the steady profile: S = (U/K)^(1/n) A^(-m/n)."""
        n = self.slope_exponent
        steepness = (uplift_rate / self.erodibility) ** (1 / n)
        return steepness * self.area(x) ** (-self.area_exponent / n)

    def steady_height(self, x, uplift_rate):
        """Height (m) above the outlet of the steady profile under a uniform uplift rate (m/yr)."""
        n = self.slope_exponent
        return (uplift_rate / self.erodibility) ** (1 / n) * self._integral(x, self.area_exponent / n)

    def chi(self, x, reference_area=1.0):
        """The chi coordinate (m) for concavity m/n and reference area A0 (m2)."""
        concavity = self.area_exponent / self.slope_exponent
        return reference_area**concavity * self._integral(x, concavity)

    def travel_time(self, x):
        """Time (yr) from the outlet to x for n = 1.

        Raises
        ------
        ValueError
            If the slope exponent is not one; celerity then depends on slope.
        """
        if self.slope_exponent != 1:
            raise ValueError("travel time is a property of the river alone only for slope exponent 1")
        return self._integral(x, self.area_exponent) / self.erodibility

    def height_after_step(self, x, rate_before, rate_after, time_since):
        """Height (m) above the outlet, for n = 1, some time (yr) after a uniform rate changed at once.

        Everything downstream of the knickpoint has forgotten the old rate; the knickpoint itself stands at
        rate_after * time_since in every tributary (Niemann et al. 2001).
        """
        tau = self.travel_time(x)
        new = np.minimum(tau, time_since)
        return rate_after * new + rate_before * (tau - new)
