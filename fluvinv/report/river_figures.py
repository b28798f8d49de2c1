"""Figures of rivers: map, long profiles, chi, travel time."""

import numpy as np
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from fluvinv.network import RiverNetwork
from fluvinv.report.drawing import (
    ACCENT,
    BASIN_COLOURS,
    FAINT,
    INK,
    WATER,
    draw_rivers,
    frame_map,
    map_height,
    new_figure,
    north_arrow,
    scale_bar,
)
from fluvinv.units import m2_to_km2, m_to_km, yr_to_myr


def _rivers(network: RiverNetwork, basin: int) -> list[np.ndarray]:
    """Node indices of each river of a basin (by index), each with the node it joins in front."""
    first = network.outlet[basin]
    nodes = np.arange(first, first + network.subtree_size[first])
    starts = nodes[np.r_[True, np.diff(network.river_id[nodes]) != 0]]
    rivers = np.split(nodes, starts[1:] - first)
    return [np.r_[network.receiver[river[0]], river] if network.receiver[river[0]] >= 0 else river for river in rivers]


def _largest_basins(network: RiverNetwork, n_basins: int) -> np.ndarray:
    return np.argsort(-network.subtree_size[network.outlet], kind="stable")[:n_basins]


def _plot_basin(axes, network, basin, x, y, colour, width=0.5, style="-"):
    """Draw all rivers of a basin with one call, a gap between them."""
    parts = _rivers(network, basin)
    gap = [np.nan]
    xs = np.concatenate([np.r_[x[part], gap] for part in parts])
    ys = np.concatenate([np.r_[y[part], gap] for part in parts])
    axes.plot(xs, ys, style, color=colour, linewidth=width)


def network_map(network: RiverNetwork) -> Figure:
    """Rivers by Strahler order, with the outlets."""
    figure = new_figure(7.5, map_height(network, 7.2))
    axes = figure.subplots()
    draw_rivers(axes, network, colour=WATER, width=0.7)
    size = 4 + 60 * np.sqrt(network.area[network.outlet] / network.area.max())
    axes.scatter(network.base_map_x / 1e3, network.base_map_y / 1e3, s=size, color=ACCENT, linewidths=0, zorder=3)
    frame_map(axes, network)
    scale_bar(axes)
    north_arrow(axes)
    axes.set_title(
        f"{network.n_basins} basins, {network.n_rivers:,} rivers, {network.n_nodes:,} river nodes;"
        f" largest basin {m2_to_km2(network.area.max()):,.0f} km²"
    )
    axes.legend(handles=[Line2D([], [], marker="o", linestyle="", color=ACCENT, label="outlet")], loc="lower right")
    return figure


def long_profiles(network: RiverNetwork, fitted: np.ndarray | None = None) -> Figure:
    """Long profiles of the six basins with most river nodes, observed and fitted."""
    basins = _largest_basins(network, 6)
    n_cols = min(3, basins.size)
    n_rows = -(-basins.size // n_cols)
    figure = new_figure(3.2 * n_cols + 0.4, 2.4 * n_rows + 0.5)
    all_axes = figure.subplots(n_rows, n_cols, squeeze=False, sharey=True).ravel()
    for axes, basin in zip(all_axes, basins, strict=False):
        if fitted is not None:
            _plot_basin(axes, network, basin, m_to_km(network.distance), fitted, ACCENT, width=1.4)
        _plot_basin(axes, network, basin, m_to_km(network.distance), network.height, INK, width=0.5)
        area = m2_to_km2(network.area[network.outlet[basin]])
        axes.set_title(f"basin {network.basin_id[network.outlet[basin]]}: {area:,.0f} km²")
        axes.set_xlabel("distance from the outlet (km)")
    for axes in all_axes[basins.size :]:
        axes.set_visible(False)
    for row in range(n_rows):
        all_axes[row * n_cols].set_ylabel("height (m)")
    handles = [Line2D([], [], color=INK, label="observed")]
    if fitted is not None:
        handles.append(Line2D([], [], color=ACCENT, label="fitted"))
    figure.legend(handles=handles, loc="outside lower center", ncols=2)
    return figure


def against_coordinate(network: RiverNetwork, coordinate: np.ndarray, label: str, fitted=None) -> Figure:
    """Height above base level against chi or travel time, the largest basins in colour."""
    panels = 1 if fitted is None else 2
    figure = new_figure(4.6 * panels + 0.6, 4)
    all_axes = figure.subplots(1, panels, squeeze=False, sharey=True, sharex=True).ravel()
    basins = _largest_basins(network, network.n_basins)
    base = network.base_level[network.basin_index]
    heights = [network.height - base] + ([] if fitted is None else [fitted - base])
    for axes, height, title in zip(all_axes, heights, ("observed", "fitted"), strict=False):
        for rank in range(basins.size - 1, -1, -1):
            colour = BASIN_COLOURS[rank] if rank < len(BASIN_COLOURS) else FAINT
            _plot_basin(axes, network, basins[rank], coordinate, height, colour, width=0.6)
        axes.set_xlabel(label)
        if fitted is not None:
            axes.set_title(title)
    all_axes[0].set_ylabel("height above base level (m)")
    handles = [
        Line2D([], [], color=BASIN_COLOURS[rank], label=f"basin {network.basin_id[network.outlet[basin]]}")
        for rank, basin in enumerate(basins[: len(BASIN_COLOURS)])
    ]
    if basins.size > len(BASIN_COLOURS):
        handles.append(Line2D([], [], color=FAINT, label="others"))
    figure.legend(handles=handles, loc="outside lower center", ncols=7 if panels == 2 else 4)
    return figure


def height_against_chi(network: RiverNetwork, chi: np.ndarray) -> Figure:
    """Height above base level against chi (A0 = 1 m2)."""
    return against_coordinate(network, chi, "χ with A₀ = 1 m² (m)")


def height_against_travel_time(network: RiverNetwork, tau: np.ndarray, fitted: np.ndarray) -> Figure:
    """Height above base level against travel time, observed and fitted."""
    return against_coordinate(network, yr_to_myr(tau), "travel time (Myr)", fitted)
