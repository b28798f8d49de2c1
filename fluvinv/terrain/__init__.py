"""Terrain: a DEM becomes a river network. The only home of drainage."""

from fluvinv.terrain.build import TerrainReport, build_network
from fluvinv.terrain.grid import Grid, StepLengths, make_grid
from fluvinv.terrain.heights import fall_downstream
from fluvinv.terrain.sea import Sea, SeaReport, find_sea

__all__ = [
    "Grid",
    "Sea",
    "SeaReport",
    "StepLengths",
    "TerrainReport",
    "build_network",
    "fall_downstream",
    "find_sea",
    "make_grid",
]
