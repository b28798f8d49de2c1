"""The inversion: unknowns, exact rows, prior, damping, solution and posterior."""

from fluvinv.inversion.invert import Inversion, InversionOptions, invert
from fluvinv.inversion.sensitivity import sensitivity
from fluvinv.inversion.solve import DENSE_LIMIT
from fluvinv.inversion.uplift_grid import UpliftGrid, age_nodes, make_grid, suggest_spacing, suggest_step

__all__ = [
    "DENSE_LIMIT",
    "Inversion",
    "InversionOptions",
    "UpliftGrid",
    "age_nodes",
    "invert",
    "make_grid",
    "sensitivity",
    "suggest_spacing",
    "suggest_step",
]
