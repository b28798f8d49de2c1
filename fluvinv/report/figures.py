"""Figures of a run: maps through time, histories at places, misfit, trade-off."""

import numpy as np
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure
from matplotlib.patches import Patch, PathPatch
from matplotlib.path import Path as MplPath
from matplotlib.ticker import LogLocator, NullFormatter, ScalarFormatter
from matplotlib.transforms import Affine2D

from fluvinv.inversion import Inversion
from fluvinv.network import RiverNetwork
from fluvinv.report.drawing import (
    ACCENT,
    FAINT,
    HATCH,
    INK,
    PALE_WATER,
    WATER,
    draw_rivers,
    frame_map,
    map_height,
    new_figure,
    north_arrow,
    river_lines,
    scale_bar,
)
from fluvinv.units import m_per_yr_to_mm_per_yr, yr_to_myr

RATE_COLOURS = "YlOrBr"
_MOST_PANELS = 12


def _panel_grid(n_panels: int, aspect: float) -> tuple[int, int]:
    """Rows and columns that make the page look balanced for panels of this height over width."""
    n_cols = min(n_panels, max(1, round(np.sqrt(n_panels * 1.6 * aspect))))
    return -(-n_panels // n_cols), n_cols


def _cell_edges(inversion: Inversion) -> tuple[np.ndarray, np.ndarray]:
    grid = inversion.grid
    half = grid.spacing / 2
    return np.append(grid.x - half, grid.x[-1] + half) / 1e3, np.append(grid.y + half, grid.y[-1] - half) / 1e3


def _hatch_cells(axes, edges, where: np.ndarray) -> None:
    """Hatch the map cells where a (n_rows, n_cols) bool array is true."""
    x, y = edges
    rows, cols = np.nonzero(where)
    squares = [MplPath.unit_rectangle().transformed(_cell_to_map(x, y, r, c)) for r, c in zip(rows, cols, strict=True)]
    if squares:
        outline = PathPatch(
            MplPath.make_compound_path(*squares), facecolor="none", edgecolor=HATCH, hatch="////", linewidth=0
        )
        axes.add_patch(outline)


def _cell_to_map(x, y, row, col) -> Affine2D:
    return Affine2D().scale(x[col + 1] - x[col], y[row + 1] - y[row]).translate(x[col], y[row])


def uplift_history(inversion: Inversion, network: RiverNetwork) -> Figure:
    """Small multiples of the uplift rate, one colour scale, hatched where not resolved."""
    grid = inversion.grid
    stack = grid.to_stack(m_per_yr_to_mm_per_yr(inversion.rate))
    resolved = grid.to_stack(inversion.resolved.astype(float))
    shown = np.unique(np.linspace(0, grid.n_ages - 1, min(grid.n_ages, _MOST_PANELS)).round().astype(int))
    aspect = (np.ptp(grid.y) + grid.spacing) / (np.ptp(grid.x) + grid.spacing)
    n_rows, n_cols = _panel_grid(shown.size, aspect)
    width = 9.5
    figure = new_figure(width, min(14.0, max(3.0, (width / n_cols * aspect + 0.35) * n_rows + 1.0)))
    low, high = min(0.0, np.nanmin(stack)), max(np.nanmax(stack), 1e-12)
    edges = _cell_edges(inversion)
    all_axes = np.atleast_1d(figure.subplots(n_rows, n_cols, squeeze=False)).ravel()
    for axes, age in zip(all_axes, shown, strict=False):
        image = axes.pcolormesh(*edges, stack[age], cmap=RATE_COLOURS, vmin=low, vmax=high, rasterized=True)
        draw_rivers(axes, network, colour=PALE_WATER, width=0.2)
        _hatch_cells(axes, edges, resolved[age] == 0)
        frame_map(axes, network, margin=0.07)
        axes.set_title(f"{yr_to_myr(grid.ages[age]):.3g} Ma")
    for axes in all_axes[shown.size :]:
        axes.set_visible(False)
    scale_bar(all_axes[0])
    north_arrow(all_axes[0])
    bar = figure.colorbar(image, ax=all_axes.tolist(), orientation="horizontal", fraction=0.04, aspect=50)
    bar.set_label("uplift rate (mm/yr)")
    key = Patch(facecolor="white", edgecolor=HATCH, hatch="////", label="not resolved")
    figure.legend(handles=[key], loc="outside lower right")
    return figure


def _spread_places(inversion: Inversion) -> list[int]:
    """Up to six places over the whole map: in each third from west to east, north and south, the best resolved."""
    xy = inversion.grid.place_xy
    order = np.lexsort((inversion.sampled.sum(axis=0), inversion.resolved.sum(axis=0)))
    rank = np.empty(order.size)
    rank[order] = np.arange(order.size)
    chosen = []
    for third in np.array_split(np.argsort(xy[:, 0], kind="stable"), min(3, order.size)):
        by_row = third[np.argsort(-xy[third, 1], kind="stable")]
        chosen += [int(half[np.argmax(rank[half])]) for half in np.array_split(by_row, 2) if half.size]
    return sorted(chosen, key=lambda place: (-xy[place, 1] > -np.median(xy[:, 1]), xy[place, 0]))


def histories(inversion: Inversion, network: RiverNetwork, known: np.ndarray | None = None) -> Figure:
    """Rate against age with its 95 % interval at up to six places, and a map that shows where.

    `known` is a known history to compare with, (n_ages, n_places) in m/yr.
    """
    grid = inversion.grid
    chosen = _spread_places(inversion)
    ages = yr_to_myr(grid.ages)
    figure = new_figure(9.5, 5.6)
    mosaic = figure.subplot_mosaic([["map", "A", "B", "C"], ["map", "D", "E", "F"]], width_ratios=[1.5, 1, 1, 1])
    draw_rivers(mosaic["map"], network, colour=WATER)
    frame_map(mosaic["map"], network)
    scale_bar(mosaic["map"])
    values = m_per_yr_to_mm_per_yr(np.stack([inversion.rate, inversion.low, inversion.high]))
    top = 1.05 * np.max(values[2][:, chosen])
    bottom = min(0.0, 1.05 * np.min(values[1][:, chosen]))
    for name, place in zip("ABCDEF", chosen, strict=False):
        axes = mosaic[name]
        rate, low, high = values[:, :, place]
        solid = inversion.resolved[:, place]
        axes.fill_between(ages, low, high, color=FAINT, alpha=0.45, linewidth=0, label="95 % interval")
        axes.plot(ages, rate, color=INK, linewidth=1, linestyle=":", label="not resolved")
        axes.plot(ages, np.where(solid, rate, np.nan), color=INK, linewidth=1.8, label="resolved")
        if known is not None:
            axes.plot(ages, m_per_yr_to_mm_per_yr(known[:, place]), color=ACCENT, linewidth=1.2, label="known history")
        axes.set_xlim(ages[-1], 0)
        axes.set_ylim(bottom, top)
        axes.set_title(name, loc="left", fontweight="bold")
        x, y = grid.place_xy[place] / 1e3
        mosaic["map"].plot(x, y, "o", color=ACCENT, markersize=4)
        mosaic["map"].annotate(name, (x, y), (4, 3), textcoords="offset points", fontweight="bold")
    for name in "ABCDEF"[len(chosen) :]:
        mosaic[name].set_visible(False)
    mosaic["A"].set_ylabel("uplift rate (mm/yr)")
    mosaic["D"].set_ylabel("uplift rate (mm/yr)")
    for name in "DEF":
        mosaic[name].set_xlabel("age (Ma)")
    handles, labels = mosaic["A"].get_legend_handles_labels()
    figure.legend(handles, labels, loc="outside lower center", ncols=4)
    return figure


def misfit_map(residual: np.ndarray, network: RiverNetwork) -> Figure:
    """Observed minus fitted height along the rivers."""
    figure = new_figure(7.5, map_height(network, 6.4))
    axes = figure.subplots()
    upper = np.flatnonzero(network.receiver >= 0)
    limit = max(float(np.quantile(np.abs(residual), 0.98)), 1e-9)
    lines = LineCollection(
        river_lines(network), cmap="RdBu_r", linewidths=0.6 + 2 * np.sqrt(network.area[upper] / network.area.max())
    )
    lines.set_array(residual[upper])
    lines.set_clim(-limit, limit)
    axes.add_collection(lines)
    axes.set_facecolor("#dfe3e4")
    frame_map(axes, network)
    scale_bar(axes)
    north_arrow(axes)
    figure.colorbar(lines, ax=axes, shrink=0.7, label="observed minus fitted height (m)", extend="both")
    return figure


def trade_off(inversion: Inversion) -> Figure:
    """The L-curve with the chosen corner, and its curvature."""
    curve = inversion.curve
    spread = m_per_yr_to_mm_per_yr(inversion.damping.height_sd / curve.weights)
    rms = curve.misfit_norm / np.sqrt(inversion.n_rows)
    at = int(np.argmin(np.abs(np.log(curve.weights / curve.corner))))
    figure = new_figure(8, 3.6)
    left, right = figure.subplots(1, 2)
    left.loglog(rms, m_per_yr_to_mm_per_yr(curve.rough_norm), color=INK, linewidth=1.4)
    label = "corner, chosen" if curve.clear else "greatest bend, no clear corner"
    left.plot(rms[at], m_per_yr_to_mm_per_yr(curve.rough_norm[at]), "o", color=ACCENT, label=label)
    left.xaxis.set_major_locator(LogLocator(base=10, subs=(1.0, 2.0, 5.0)))
    left.xaxis.set_major_formatter(ScalarFormatter())
    left.xaxis.set_minor_formatter(NullFormatter())
    left.set_xlabel("misfit, rms (m)")
    left.set_ylabel("norm of the departure from\nthe background rate (mm/yr)")
    left.legend()
    right.semilogx(spread, curve.curvature, color=INK, linewidth=1.4)
    right.axvline(m_per_yr_to_mm_per_yr(inversion.damping.spread), color=ACCENT, linewidth=1)
    right.set_xlabel("spread that the weight stands for (mm/yr)")
    right.set_ylabel("curvature")
    return figure
