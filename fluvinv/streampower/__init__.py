"""Stream power: travel times on a river network and closed-form profiles."""

from fluvinv.streampower.travel_time import chi, travel_time

__all__ = ["chi", "travel_time"]
