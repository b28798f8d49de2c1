"""The terrain stage as a whole: a grid becomes a river network and an account of what was left out."""

from dataclasses import dataclass

import numpy as np
from pyproj import CRS

from fluvinv.errors import InputError, SettingsError
from fluvinv.network import RiverNetwork
from fluvinv.terrain.channels import LEAST_CELLS, auto_channel_area, connect_channels
from fluvinv.terrain.completeness import CUT_BY_EDGE, CUT_BY_VOID, Drainage, drain
from fluvinv.terrain.grid import Grid, areal_scale
from fluvinv.terrain.routing import NOT_LAND, route
from fluvinv.terrain.sea import SeaReport, find_sea
from fluvinv.units import m2_to_km2

#: Areas stretched by more than this by the DEM's CRS are worth a warning.
MOST_STRETCH = 0.03


@dataclass(frozen=True, slots=True)
class TerrainReport:
    """What the terrain stage found and did.

    Attributes
    ----------
    n_land : int
        Land cells.
    land_area : float, m2
    sea : SeaReport
        Sea and void cells, and how void was judged.
    channel_area : float, m2
        Upstream area from which cells are channel nodes.
    n_channel_cells : int
        Cells with at least that area, usable or not.
    not_usable : dict of str to int
        How many of them are not usable and why: "upstream_touches_edge", "upstream_touches_void" (and not
        the edge), "downstream_incomplete" (complete themselves). They are dropped under "drop" and kept
        under "keep"; under "complete" every cell counts as usable.
    dropped : dict of str to int
        Those that were dropped.
    largest_basin : float, m2
        Area of the largest basin in the network.
    map_crs : pyproj.CRS
        CRS of the network's map coordinates.
    areal_scale : float
        How many times too large the DEM's CRS draws areas in the middle of the rivers.
    """

    n_land: int
    land_area: float
    sea: SeaReport
    channel_area: float
    n_channel_cells: int
    not_usable: dict[str, int]
    dropped: dict[str, int]
    largest_basin: float
    map_crs: CRS
    areal_scale: float

    @property
    def share_affected(self) -> float:
        """Share of the network's nodes that are not usable; above 0 only under "keep"."""
        n_bad = sum(self.not_usable.values()) - sum(self.dropped.values())
        return n_bad / (self.n_channel_cells - sum(self.dropped.values()))

    @property
    def warnings(self) -> list[str]:
        """What the reader of the result must know, one sentence or two each."""
        found = []
        if self.share_affected > 0:
            found.append(
                f"{self.share_affected:.0%} of the river nodes have catchments that the DEM does not hold as a whole"
                "(terrain.incomplete: keep): their areas and travel times are wrong."
            )
        if self.sea.void_taken_as in ("sea", "mixed"):
            found.append(
                f"{self.sea.n_void_sea} of {self.sea.n_void} void cells were taken for sea; if they are gaps in "
                "the land, set catchment.nodata to void."
            )
        if abs(self.areal_scale - 1) > MOST_STRETCH:
            found.append(
                f"the DEM's CRS draws areas {self.areal_scale:.3g} times as large as they are, and nothing corrects it:"
                " lengths, areas and travel times are wrong with it. Warp the DEM to a CRS made for this place, or to "
                "longitude and latitude."
            )
        return found


def build_network(
    grid: Grid,
    *,
    base_level: float = 0.0,
    nodata: str = "auto",
    depressions: str = "carve",
    channel_area: float | str = "auto",
    incomplete: str = "drop",
    projection: str = "auto",
) -> tuple[RiverNetwork, TerrainReport]:
    """Draw the drainage of a DEM and keep the rivers whose catchments are complete.

    Parameters
    ----------
    grid : Grid
    base_level : float, m
        Height of the sea.
    nodata : {"auto", "sea", "void"}
        What void cells are, see `find_sea`.
    depressions : {"carve", "fill"}
        How water crosses depressions, see `route`. Heights are not changed by it.
    channel_area : float or "auto", m2
        Upstream area from which a cell is a channel node, see `auto_channel_area`.
    incomplete : {"drop", "keep", "complete"}
        What becomes of catchments that the DEM does not hold as a whole: "drop" leaves them out, "keep" uses
        them and counts them, "complete" states that the DEM was cut along the divide.
    projection : str
        CRS of the map coordinates, see `choose_map_crs`.

    Returns
    -------
    network : RiverNetwork
    report : TerrainReport

    Raises
    ------
    InputError
        If nothing is left to build a network from; the message counts what was lost where.
    SettingsError
        If the projection cannot be used, or a given channel area is above every basin.
    """
    sea, sea_report = find_sea(grid, base_level, nodata)
    receiver = route(grid, sea, base_level, depressions)
    drainage = drain(grid, sea, receiver)
    if incomplete == "drop" and sea_report.n_sea == 0:
        raise InputError(_no_sea_message(receiver, drainage, base_level))
    land = receiver != NOT_LAND
    land_area = float(drainage.area[_is_outlet(receiver)].sum())
    usable = land if incomplete == "complete" else land & (drainage.basin_cut == 0)
    allowed = usable if incomplete == "drop" else land
    threshold = channel_area
    if channel_area == "auto":
        threshold = auto_channel_area(drainage.area[allowed], land_area / drainage.order.size)
    channel = land & (drainage.area >= threshold)
    not_usable = _count_reasons(drainage, channel & ~usable)
    if not (channel & allowed).any():
        if not any(not_usable.values()):
            raise _no_basin_is_large_enough(drainage, threshold, channel_area == "auto")
        raise InputError(_no_channel_message(drainage, threshold, usable, not_usable))
    network, map_crs = connect_channels(grid, receiver, drainage, channel & allowed, base_level, projection)
    report = TerrainReport(
        n_land=drainage.order.size,
        land_area=land_area,
        sea=sea_report,
        channel_area=float(threshold),
        n_channel_cells=int(np.count_nonzero(channel)),
        not_usable=not_usable,
        dropped=not_usable if incomplete == "drop" else dict.fromkeys(not_usable, 0),
        largest_basin=float(network.area[network.outlet[0]]),
        map_crs=map_crs,
        areal_scale=areal_scale(grid.crs, float(np.mean(network.x)), float(np.mean(network.y))),
    )
    return network, report


def _is_outlet(receiver: np.ndarray) -> np.ndarray:
    """(n_cells,) bool array: land cells whose water goes to the sea or leaves the grid."""
    return (receiver != NOT_LAND) & ((receiver < 0) | (receiver[receiver] == NOT_LAND))


def _count_reasons(drainage: Drainage, cells: np.ndarray) -> dict[str, int]:
    """How many of the cells are not usable for which reason."""
    cut = drainage.cut[cells]
    by_edge = (cut & CUT_BY_EDGE) > 0
    return {
        "upstream_touches_edge": int(np.count_nonzero(by_edge)),
        "upstream_touches_void": int(np.count_nonzero(~by_edge & ((cut & CUT_BY_VOID) > 0))),
        "downstream_incomplete": int(np.count_nonzero(cut == 0)),
    }


_WAYS_OUT = (
    "Write 'terrain.incomplete: keep' to use such catchments with a warning, or 'terrain.incomplete: complete' "
    "if the DEM was cut along the divide."
)


def _no_sea_message(receiver: np.ndarray, drainage: Drainage, base_level: float) -> str:
    n_outlets = int(np.count_nonzero(_is_outlet(receiver)))
    return (
        f"catchment.dem: no sea, so no catchment is known to be complete: none of its {drainage.order.size} "
        f"land cells reaches a cell at or below base level ({base_level:g} m) that is connected to the DEM's "
        f"edge or to nodata; all {n_outlets} outlets lie on the edge or beside void cells. {_WAYS_OUT} "
        "If the DEM does hold a sea or lake, set catchment.base_level_m to its level."
    )


def _no_basin_is_large_enough(drainage: Drainage, threshold: float, auto: bool) -> InputError | SettingsError:
    """The error for a threshold above every basin: the settings' fault when set, the DEM's when not."""
    area, largest = (f"{m2_to_km2(a):.6g} km2" for a in (threshold, drainage.area[drainage.order].max()))
    if auto:
        return InputError(
            f"catchment.dem: no basin is large enough for a river; the largest drains {largest}, and channels begin "
            f"at {LEAST_CELLS} cells ({area}). Take a larger or finer DEM, or set terrain.channel_area_km2."
        )
    return SettingsError(
        f"terrain.channel_area_km2: {area} is above every basin; the largest drains {largest}. Set a smaller area."
    )


def _no_channel_message(drainage: Drainage, threshold: float, usable: np.ndarray, not_usable: dict[str, int]) -> str:
    """Why no channel node is left: no basin above the threshold is complete."""
    edge, void, below = not_usable.values()
    area_km2 = f"{m2_to_km2(threshold):.6g}"
    if usable.any():
        largest = m2_to_km2(drainage.area[usable].max())
        rest = f"The largest complete basin drains {largest:.6g} km2; a smaller terrain.channel_area_km2 takes it in. "
    else:
        rest = "No basin of any size is complete. "
    return (
        f"catchment.dem: none of its {edge + void + below} channel cells (upstream area from {area_km2} km2) is "
        f"usable: {edge} drain ground that touches the DEM's edge, {void} ground that touches void cells, {below} "
        f"are complete but join an incomplete river below. {rest}{_WAYS_OUT}"
    )
