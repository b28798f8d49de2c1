"""Seeded makers of invented islands whose uplift history is known, for the demo and the tests."""

from fluvinv.landscape.demo import DEMO_NAME, Demo, demo_island
from fluvinv.landscape.grow import Landscape, grow_landscape
from fluvinv.landscape.histories import Uplift, sample_history, steady, tilt_with_step, two_domes
from fluvinv.landscape.outline import island_mask

__all__ = [
    "DEMO_NAME",
    "Demo",
    "Landscape",
    "Uplift",
    "demo_island",
    "grow_landscape",
    "island_mask",
    "sample_history",
    "steady",
    "tilt_with_step",
    "two_domes",
]
