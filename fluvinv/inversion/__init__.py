"""The inversion: unknowns, exact rows, prior, damping, solution and posterior."""

from fluvinv.inversion.compare import Comparison, compare, history_at_nodes
from fluvinv.inversion.cost import Cost, predict_cost
from fluvinv.inversion.invert import Inversion, InversionOptions, invert
from fluvinv.inversion.nesting import nest_with_prior
from fluvinv.inversion.sensitivity import sensitivity
from fluvinv.inversion.solve import DENSE_LIMIT
from fluvinv.inversion.uplift_grid import (
    UpliftGrid,
    age_nodes,
    make_grid,
    nice_number,
    suggest_duration,
    suggest_ranges,
    suggest_spacing,
    suggest_step,
)

__all__ = [
    "DENSE_LIMIT",
    "Comparison",
    "Cost",
    "Inversion",
    "InversionOptions",
    "UpliftGrid",
    "age_nodes",
    "compare",
    "history_at_nodes",
    "invert",
    "make_grid",
    "nest_with_prior",
    "nice_number",
    "predict_cost",
    "sensitivity",
    "suggest_duration",
    "suggest_ranges",
    "suggest_spacing",
    "suggest_step",
]
