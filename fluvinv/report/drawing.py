"""What all figures share: paper, colours, scale bars, saving."""

from pathlib import Path

import matplotlib as mpl
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.collections import LineCollection
from matplotlib.figure import Figure

from fluvinv.network import RiverNetwork

INK = "#26323a"
FAINT = "#9aa7ad"
WATER = "#2b6f97"
PALE_WATER = "#8fb9cf"
ACCENT = "#b5432e"
HATCH = "#5d676d"
#: Distinct without colour vision trouble, dark enough on white; for the largest basins in turn.
BASIN_COLOURS = ("#2b6f97", "#b5432e", "#5c7f2b", "#7a4f99", "#b07a1e", "#3c3c3c")

STYLE = {
    "font.family": "DejaVu Sans",
    "font.size": 9,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.titlesize": 9,
    "axes.titlecolor": INK,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "legend.frameon": False,
    "hatch.linewidth": 0.5,
}


def new_figure(width: float, height: float) -> Figure:
    """Empty figure (inches) in the house style; draw inside `mpl.rc_context(STYLE)`."""
    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def save(figure: Figure, path: Path) -> None:
    """Write a PNG whose bytes depend on the drawing alone."""
    figure.savefig(path, dpi=160, metadata={"Software": None})


def styled():
    """Context in which the house style holds."""
    return mpl.rc_context(STYLE)


def river_lines(network: RiverNetwork) -> np.ndarray:
    """(n_edges, 2, 2) array, km: map coordinates of every edge between two nodes."""
    upper = np.flatnonzero(network.receiver >= 0)
    lower = network.receiver[upper]
    ends = [np.column_stack([network.map_x[i], network.map_y[i]]) for i in (upper, lower)]
    return np.stack(ends, axis=1) / 1e3


def draw_rivers(axes, network: RiverNetwork, colour=FAINT, width: float = 0.5, largest: float | None = None) -> None:
    """Draw the rivers of a network, wider where more water comes together."""
    upper = np.flatnonzero(network.receiver >= 0)
    area = network.area[upper]
    share = np.sqrt(area / (largest or area.max(initial=1.0)))
    lines = LineCollection(river_lines(network), colors=colour, linewidths=width * (0.5 + 2 * share), capstyle="round")
    axes.add_collection(lines)


def frame_map(axes, network: RiverNetwork, margin: float = 0.04) -> None:
    """Equal scales, limits around the network, no ticks."""
    x = np.concatenate([network.map_x, network.base_map_x]) / 1e3
    y = np.concatenate([network.map_y, network.base_map_y]) / 1e3
    pad = margin * max(np.ptp(x), np.ptp(y), 1e-3)
    axes.set_xlim(x.min() - pad, x.max() + pad)
    axes.set_ylim(y.min() - pad, y.max() + pad)
    axes.set_aspect("equal")
    axes.set_xticks([])
    axes.set_yticks([])
    for spine in axes.spines.values():
        spine.set_visible(False)


def map_height(network: RiverNetwork, width: float) -> float:
    """Height (inches) of a figure whose map is so wide, with room for a title."""
    x = np.concatenate([network.map_x, network.base_map_x])
    y = np.concatenate([network.map_y, network.base_map_y])
    return float(np.clip(width * np.ptp(y) / max(np.ptp(x), 1.0), 2.5, 9.0)) + 0.6


def scale_bar(axes) -> None:
    """A bar of a round number of kilometres in the lower left corner."""
    left, right = axes.get_xlim()
    bottom, top = axes.get_ylim()
    span = right - left
    length = max(step * 10.0**power for power in range(-3, 5) for step in (1, 2, 5) if step * 10.0**power <= 0.3 * span)
    x, y = left + 0.03 * span, bottom + 0.03 * (top - bottom)
    axes.plot([x, x + length], [y, y], color=INK, linewidth=2, solid_capstyle="butt")
    axes.annotate(f"{length:g} km", (x + length / 2, y), (0, 3), textcoords="offset points", ha="center", fontsize=8)


def north_arrow(axes) -> None:
    """An arrow to the grid's north in the upper right corner."""
    arrow = {"arrowstyle": "-|>", "color": INK, "linewidth": 1}
    axes.annotate("", (0.97, 0.99), (0.97, 0.89), xycoords="axes fraction", arrowprops=arrow)
    axes.annotate("N", (0.97, 0.88), xycoords="axes fraction", ha="center", va="top", fontsize=8)
