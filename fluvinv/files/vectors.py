"""Vector files: the river network as a GeoPackage."""

from pathlib import Path

import geopandas as gpd
import numpy as np
import pyogrio
import pyproj
from shapely import LineString, points

from fluvinv.errors import OutputError
from fluvinv.network import RiverNetwork
from fluvinv.units import m2_to_km2, m_to_km

#: GeoPackage stores when a layer changed; a fixed time keeps equal results equal, byte for byte.
_FIXED_TIME = "1970-01-01T00:00:00.000Z"


def reaches(network: RiverNetwork) -> list[np.ndarray]:
    """Node indices of each reach, upstream first: from a source or junction down to the next junction.

    A reach ends with the node it joins, or with its own lowest node at an outlet.
    """
    donors = np.bincount(network.receiver[network.receiver >= 0], minlength=network.n_nodes)
    starts = np.flatnonzero(donors != 1)
    result = []
    for node in starts:
        path = [node]
        while network.receiver[path[-1]] >= 0:
            path.append(network.receiver[path[-1]])
            if donors[path[-1]] != 1:
                break
        result.append(np.array(path))
    return result


def channels_frame(network: RiverNetwork, chi: np.ndarray, crs: pyproj.CRS) -> gpd.GeoDataFrame:
    """Channel lines, one per reach between junctions, in the DEM's CRS.

    Steepness is the gain in corrected height per chi (A0 = 1 m2, so its unit is m^(2m/n)); empty for a
    reach without length.
    """
    rows = []
    for path in reaches(network):
        top, end = path[0], path[-1]
        if path.size == 1:
            continue
        rise = chi[top] - chi[end]
        rows.append(
            {
                "river_id": int(network.river_id[top]),
                "basin_id": int(network.basin_id[top]),
                "strahler_order": int(network.strahler_order[top]),
                "length_km": m_to_km(network.distance[top] - network.distance[end]),
                "steepness": (network.corrected_height[top] - network.corrected_height[end]) / rise
                if rise > 0
                else np.nan,
                "geometry": LineString(np.column_stack([network.x[path], network.y[path]])),
            }
        )
    columns = ["river_id", "basin_id", "strahler_order", "length_km", "steepness", "geometry"]
    return gpd.GeoDataFrame(rows, columns=columns, geometry="geometry", crs=crs)


def outlets_frame(network: RiverNetwork, crs: pyproj.CRS) -> gpd.GeoDataFrame:
    """Outlet points with area, base level and number of river nodes."""
    outlet = network.outlet
    return gpd.GeoDataFrame(
        {
            "basin_id": network.basin_id[outlet].astype(int),
            "area_km2": m2_to_km2(network.area[outlet]),
            "base_level_m": network.base_level,
            "elevation_m": network.height[outlet],
            "n_nodes": network.subtree_size[outlet].astype(int),
        },
        geometry=points(network.x[outlet], network.y[outlet]),
        crs=crs,
    )


def write_network(path: Path, network: RiverNetwork, chi: np.ndarray, crs: pyproj.CRS) -> None:
    """Write the layers `channels` and `outlets`.

    Raises
    ------
    OutputError
        If the file cannot be written.
    """
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": _FIXED_TIME})
    try:
        channels_frame(network, chi, crs).to_file(path, layer="channels", driver="GPKG", engine="pyogrio")
        outlets_frame(network, crs).to_file(path, layer="outlets", driver="GPKG", engine="pyogrio")
    except (pyogrio.errors.DataSourceError, pyogrio.errors.DataLayerError) as error:
        raise OutputError(f"{path}: cannot be written: {error}.") from error
    finally:
        pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": None})
