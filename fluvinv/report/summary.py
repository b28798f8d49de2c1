"""The result in words: for the terminal and for the record."""

import textwrap

import numpy as np

from fluvinv.inversion import Comparison, Inversion
from fluvinv.network import RiverNetwork
from fluvinv.units import m2_to_km2, m_per_yr_to_mm_per_yr, m_to_km, yr_to_myr

_WIDTH = 100


def verdict(result: Inversion) -> list[str]:
    """What was found, in sentences; averages are over resolved nodes."""
    grid, resolved = result.grid, result.resolved
    if not resolved.any():
        return [
            "Nowhere does the estimate average the truth within one map node and one age node: no rate is resolved."
        ]
    judged = result.well_sampled
    sentences = [f"{resolved[judged].mean():.0%} of the well-sampled nodes are resolved (map node and age node)."]
    ages = yr_to_myr(grid.ages)
    count = resolved.sum(axis=1)
    some = np.unique(np.linspace(0, np.flatnonzero(count)[-1], 4).round().astype(int))
    by_age = ", ".join(f"{count[age]} at {ages[age]:.3g} Ma" for age in some)
    sentences.append(f"Of {grid.n_places} map nodes, resolved are {by_age}; none that is older.")
    rates = m_per_yr_to_mm_per_yr(result.rate)
    share = result.rate_sd[resolved] / np.maximum(np.abs(result.rate[resolved]), 1e-30)
    lowest, highest = np.quantile(rates[resolved], [0.05, 0.95])
    sentences.append(
        f"Resolved rates run from {_plain(lowest)} to {_plain(highest)} mm/yr (5 to 95 % of nodes), with a median"
        f" standard deviation of {np.median(share):.1%} of the rate."
    )
    masked = np.where(resolved, rates, -np.inf)
    age, place = np.unravel_index(np.argmax(masked), rates.shape)
    x, y = grid.place_xy[place]
    sd = m_per_yr_to_mm_per_yr(result.rate_sd[age, place])
    sentences.append(
        f"The highest resolved rate, {_plain(rates[age, place])} ± {_plain(sd)} mm/yr, stands at"
        f" {ages[age]:.3g} Ma at x {x:,.0f} m, y {y:,.0f} m."
    )
    return sentences


def _plain(value: float) -> str:
    """A number to three figures, without an exponent."""
    digits = 3 - int(np.floor(np.log10(abs(value)))) - 1 if value else 2
    return f"{value:.{min(max(digits, 0), 8)}f}"


def _entry(label: str, text: str) -> list[str]:
    """A label and its text, wrapped and indented."""
    lines = textwrap.wrap(text, _WIDTH - 13) or [""]
    return [f"{label:<12} {lines[0]}"] + [f"{'':<12} {line}" for line in lines[1:]]


def network_lines(network: RiverNetwork, channel_area: float, dropped: dict, chosen: bool) -> list[str]:
    """The network in two lines."""
    how = "chosen from the DEM" if chosen else "as set"
    lines = _entry(
        "Rivers",
        f"{network.n_nodes:,} nodes on {network.n_rivers:,} rivers in {network.n_basins:,} basins; channels begin at"
        f" {m2_to_km2(channel_area):.3g} km² of upstream area ({how}); longest river"
        f" {m_to_km(network.distance.max()):,.0f} km.",
    )
    left_out = sum(dropped.values())
    if left_out:
        reasons = ", ".join(f"{count:,} {reason.replace('_', ' ')}" for reason, count in dropped.items() if count)
        lines += _entry("Left out", f"{left_out:,} channel nodes: {reasons}.")
    return lines


def clock_lines(erodibility: float, area_exponent: float, longest: float) -> list[str]:
    """What sets the clock."""
    unit = f"m^{1 - 2 * area_exponent:.3g}/yr" if area_exponent != 0.5 else "1/yr"
    return _entry(
        "Clock",
        f"erodibility {erodibility:.4g} {unit} at area exponent {area_exponent:g} was given, not found: heights alone"
        " cannot tell it, and c times the value fits as well, with rates times c and ages divided by c."
        f" The longest travel time is {yr_to_myr(longest):.3g} Myr.",
    )


def inversion_lines(result: Inversion, rms: float, choose: str, ranges: tuple[float, float]) -> list[str]:
    """Unknowns, damping and fit."""
    grid, damping = result.grid, result.damping
    lines = _entry(
        "Unknowns",
        f"{grid.n_unknowns:,}: {grid.n_places:,} map nodes {m_to_km(grid.spacing):g} km apart times {grid.n_ages} ages"
        f" {yr_to_myr(grid.ages[1]):g} Myr apart; {result.method} solver.",
    )
    weight_spread, departs, background = (
        _plain(m_per_yr_to_mm_per_yr(value)) for value in (damping.spread, damping.field_spread, result.background)
    )
    how = {
        "l-curve": f"corner of the L-curve, the weight of a spread of {weight_spread} mm/yr; the fitted rates depart"
        f" from the background as a spread of {departs} mm/yr would, and errors are for that",
        "fixed": f"fixed by the settings: a spread of {departs} mm/yr",
    }[choose]
    lines += _entry(
        "Damping",
        f"{how}; background {background} mm/yr, ranges {m_to_km(ranges[0]):.3g} km and {yr_to_myr(ranges[1]):.3g} Myr.",
    )
    return lines + _entry(
        "Fit",
        f"rms misfit {rms:.3g} m, height error {damping.height_sd:.3g} m taken as white; the heights determine about"
        f" {result.effective_parameters:.0f} numbers; reduced chi-square {result.reduced_chi_square:.3g}.",
    )


#: What is known about the stated intervals, by the way the damping was chosen.
ON_INTERVALS = {
    "l-curve": "The stated errors count what the damping hides, but take the misfit as white, and what the physics"
    " leaves out adds up along a river. On eleven grown landscapes with moving or standing divides the 95 % intervals"
    " held the truth at 89 to 100 % of the well-sampled nodes; rock that changes was not among them.",
    "fixed": "The stated errors hold for the stated spread and take the misfit as white; what the physics leaves out"
    " adds up along a river, so they are too small where drainage moved or rock changes.",
}


def comparison_line(comparison: Comparison) -> list[str]:
    """How the recovered history compares with the known one."""
    shape = (
        f"correlation {comparison.correlation:.3f}, skill {comparison.skill:.2f}, "
        if comparison.correlation is not None
        else "the known history does not vary, so no correlation; "
    )
    return _entry(
        "Comparison",
        f"against the known history at the {comparison.n_nodes:,} nodes that hold 90 % of all path time: {shape}"
        f"rms error {_plain(m_per_yr_to_mm_per_yr(comparison.rmse))} mm/yr; the stated 95 % intervals hold the known"
        f" rate at {comparison.cover:.0%} of them.",
    )


def entry(label: str, sentences: list[str]) -> list[str]:
    """A labelled list of sentences."""
    lines: list[str] = []
    for number, sentence in enumerate(sentences):
        lines += _entry(label if number == 0 else "", sentence)
    return lines
