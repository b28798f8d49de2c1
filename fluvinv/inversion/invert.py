"""The whole inversion of one network: rows, prior, damping, rates and what is known about them."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy import sparse
from threadpoolctl import threadpool_limits

from fluvinv.errors import NumericalError
from fluvinv.inversion.choose import Damping, LCurve, damping_at_corner, fixed_damping, l_curve
from fluvinv.inversion.nesting import nest_with_prior
from fluvinv.inversion.nonnegative import interval_above_zero, nonnegative_rates
from fluvinv.inversion.posterior import RESOLVED_SHARE, cumulative_mix, kernel_share, standard_deviation
from fluvinv.inversion.prior import FieldPrior, make_prior
from fluvinv.inversion.sensitivity import sensitivity
from fluvinv.inversion.solve import DENSE_LIMIT, Spectrum, decompose
from fluvinv.inversion.uplift_grid import UpliftGrid
from fluvinv.network import RiverNetwork

#: Half width of a 95 % interval in standard deviations.
Z95 = 1.959963984540054

#: Least time that all paths together spend at a resolved node, as a share of the age step.
LEAST_SAMPLED = 0.01

#: Below so many unknowns linear algebra gains little from threads, and on a busy machine threads that wait for each
#: other cost up to 30 times the time.
_ONE_THREAD_BELOW = 12_000

#: Rates that must not be negative are solved for, without modes, up to this many unknowns.
MOST_NON_NEGATIVE = 8000

_FIRST_RANK, _LAST_RANK = 400, 1600
#: Directions left out by the iterative solver may have filter factors up to this.
_LEFT_OUT = 0.05


@dataclass(frozen=True, slots=True)
class InversionOptions:
    """Numbers of the prior, the noise and the damping.

    Attributes
    ----------
    range_space : float, m
    range_time : float, yr
    choose : str
        "l-curve" or "fixed".
    spread : float or None, m/yr
        Needed for "fixed".
    height_sd : float or None, m
        White height error; estimated from the misfit when None.
    allow_subsidence : bool
    seed : int
    """

    range_space: float
    range_time: float
    choose: str = "l-curve"
    spread: float | None = None
    height_sd: float | None = None
    allow_subsidence: bool = True
    seed: int = 1


@dataclass(frozen=True, slots=True)
class Inversion:
    """An uplift history with its errors; arrays of unknowns are (n_ages, n_places).

    Attributes
    ----------
    grid : UpliftGrid
    rate, rate_sd, low, high : m/yr
        Estimate, standard deviation (half the 95 % interval / 1.96) and the interval's ends.
    cumulative, cumulative_sd : m
        Uplift since each age.
    sampled : yr
        Time that all paths together spend at each node.
    share : 0 to 1
        Squared share of the averaging kernel within one map node and one age node.
    fitted : (n_nodes,) float array, m
        Height above base level that the published rates leave, interpolated between map nodes and ages.
    solved : (n_nodes,) float array, m
        Fitted height above base level on the finer grid that was solved on.
    background : float, m/yr
        The free background rate (of the fit without a bound on the rates).
    damping : Damping
    curve : LCurve or None
    method : str
        "dense" or "iterative".
    effective_parameters, reduced_chi_square, log_evidence : float
    n_rows : int
        Heights that were used (nodes above base level).
    """

    grid: UpliftGrid
    rate: np.ndarray
    rate_sd: np.ndarray
    low: np.ndarray
    high: np.ndarray
    cumulative: np.ndarray
    cumulative_sd: np.ndarray
    sampled: np.ndarray
    share: np.ndarray
    fitted: np.ndarray
    solved: np.ndarray
    background: float
    damping: Damping
    curve: LCurve | None
    method: str
    effective_parameters: float
    reduced_chi_square: float
    log_evidence: float
    n_rows: int

    @property
    def resolved(self) -> np.ndarray:
        """(n_ages, n_places) bool array: the estimate averages the truth nearby, and paths pass there.

        Paths pass where all of them together spend at least a hundredth of an age step.
        """
        return (self.share >= RESOLVED_SHARE) & (self.sampled >= LEAST_SAMPLED * self.grid.ages[1])

    @property
    def well_sampled(self) -> np.ndarray:
        """(n_ages, n_places) bool array: the best sampled nodes that together hold 90 % of all path time."""
        order = np.argsort(-self.sampled, axis=None, kind="stable")
        before = np.cumsum(self.sampled.ravel()[order]) - self.sampled.ravel()[order]
        chosen = np.zeros(self.sampled.size, dtype=bool)
        chosen[order] = before < 0.9 * self.sampled.sum()
        return chosen.reshape(self.sampled.shape)


def _ignore(_step: str) -> None:
    """Take no notice of progress."""


def invert(
    network: RiverNetwork,
    tau: np.ndarray,
    grid: UpliftGrid,
    options: InversionOptions,
    progress: Callable[[str], None] = _ignore,
) -> Inversion:
    """Recover the uplift history of a network.

    Parameters
    ----------
    network : RiverNetwork
    tau : (n_nodes,) float array, yr
    grid : UpliftGrid
    options : InversionOptions
    progress : callable
        Called with the name of each step as it begins: "rows", "decomposition", "damping", "errors".

    Returns
    -------
    Inversion

    Raises
    ------
    NumericalError
        If a solver fails, or rates must be non-negative on a grid too large for the dense solver.

    Notes
    -----
    Solved on a grid twice as fine as the published one where that is affordable (see `nesting`); what is
    published are the rates at the nodes of the coarser one. Linear, for slope exponent n = 1, stationary drainage and
    uniform, constant erodibility. Heights alone do not give the erodibility: u_K(x, t) = a u(x, a t) with
    a = K/K0 fits as well.
    """
    with threadpool_limits(1 if grid.n_unknowns < _ONE_THREAD_BELOW else None, user_api="blas"):
        return _invert(network, tau, grid, options, progress)


def _invert(network, tau, grid, options, progress) -> Inversion:
    progress("rows")
    nested, prior = nest_with_prior(grid, options.range_space, options.range_time)
    G = sensitivity(network, tau, nested.fine)
    used = np.flatnonzero(tau > 0)
    rows, y = G[used], network.relative_height[used]
    progress("decomposition")
    spectrum, damping, curve = _decompose_and_choose(rows, y, tau[used], prior, options, progress)
    progress("errors")
    estimate, background = spectrum.solution(damping.weight)
    at_ages = np.eye(nested.fine.n_ages)[nested.ages]
    sd = standard_deviation(spectrum, damping, nested.fine, at_ages)[:, nested.places]
    mean = nested.pick(estimate)
    if options.allow_subsidence:
        rate, low, high = mean, mean - Z95 * sd, mean + Z95 * sd
    else:
        rate = _nonnegative(rows @ nested.spread, y, grid, options, damping).reshape(sd.shape)
        low, high = interval_above_zero(rate, sd)
    if not np.all(np.isfinite(rate)):
        raise NumericalError("the inversion gave rates that are not finite; the damping is too weak for this grid")
    mix = cumulative_mix(grid.ages)
    fitted = G @ (nested.spread @ rate.ravel())
    n_free = spectrum.effective_parameters(damping.weight)
    return Inversion(
        grid=grid,
        rate=rate,
        rate_sd=(high - low) / (2 * Z95),
        low=low,
        high=high,
        cumulative=mix @ rate,
        cumulative_sd=standard_deviation(spectrum, damping, nested.fine, mix @ at_ages)[:, nested.places],
        sampled=(nested.spread.T @ G.sum(axis=0)).reshape(sd.shape),
        share=kernel_share(rows, spectrum, damping, grid, nested),
        fitted=fitted,
        solved=G @ estimate if options.allow_subsidence else fitted,
        background=background,
        damping=damping,
        curve=curve,
        method=spectrum.method,
        effective_parameters=n_free,
        reduced_chi_square=float(np.sum((y - fitted[used]) ** 2) / (damping.height_sd**2 * (used.size - n_free))),
        log_evidence=spectrum.log_evidence(damping.weight, damping.height_sd),
        n_rows=used.size,
    )


def _decompose_and_choose(rows, y, tau, prior: FieldPrior, options: InversionOptions, progress):
    """Decompose with all directions, or with as many as the chosen damping needs."""
    rank = None if prior.n_modes <= DENSE_LIMIT else _FIRST_RANK
    while True:
        spectrum = decompose(rows, y, tau, prior, rank=rank, seed=options.seed)
        progress("damping")
        damping, curve = _choose(spectrum, options)
        if rank is None or spectrum.filter(damping.weight)[-1] <= _LEFT_OUT:
            return spectrum, damping, curve
        if rank >= _LAST_RANK:
            raise NumericalError(
                f"the heights determine more than {rank} numbers, and the prior has {prior.n_modes} modes on this"
                f" grid. Damp more, or choose longer ranges or a coarser grid (with {DENSE_LIMIT} modes or fewer)."
            )
        rank *= 2


def _choose(spectrum: Spectrum, options: InversionOptions) -> tuple[Damping, LCurve | None]:
    if options.choose == "fixed":
        return fixed_damping(spectrum, options.spread, options.height_sd), None
    curve = l_curve(spectrum)
    return damping_at_corner(spectrum, curve, options.height_sd), curve


def _nonnegative(rows: sparse.csr_array, y, grid: UpliftGrid, options: InversionOptions, damping) -> np.ndarray:
    """Non-negative rates, on the published grid."""
    if grid.n_unknowns > MOST_NON_NEGATIVE:
        raise NumericalError(
            f"rates that must not be negative are solved for up to {MOST_NON_NEGATIVE} unknowns, and this grid has"
            f" {grid.n_unknowns}. Choose a coarser uplift grid, or allow subsidence."
        )
    prior = make_prior(grid, options.range_space, options.range_time)
    return nonnegative_rates(rows, y, prior, damping.weight)
