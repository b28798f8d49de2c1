"""What is known after the inversion: standard deviations, and where an average is an average of the truth."""

import numpy as np
from scipy import sparse

from fluvinv.inversion.choose import Damping
from fluvinv.inversion.nesting import Nested
from fluvinv.inversion.solve import Spectrum
from fluvinv.inversion.uplift_grid import UpliftGrid

#: Least share of the squared averaging kernel inside one map node and one age node.
RESOLVED_SHARE = 0.4


def standard_deviation(spectrum: Spectrum, damping: Damping, grid: UpliftGrid, mix: np.ndarray) -> np.ndarray:
    r"""Posterior standard deviation of linear mixtures over age of the rate at each place.

    The posterior covariance of the field is spread^2 (R - Z F Z') with R the prior's correlation, Z = S V and
    F the filter factors (Tarantola 2005, eq. 3.38, in spectral form). Where the damping's weight is not that of
    the field's spread, the error of the damped estimate has for each direction the bias (1 - f) times the
    spread and the noise f^2 height_sd^2 / d; F is then 2 f - f^2 - (height_sd / spread)^2 f^2 / d, which is f
    when the weight is the spread's own. The free background adds its own part:
    u = (1 - 1 g') f + error of the background, of variance height_sd^2 / tau'tau.

    Parameters
    ----------
    spectrum, damping, grid
    mix : (n_out, n_ages) float array
        Each row mixes the rates of a place over age: the identity for rates, trapezoid weights for
        cumulative uplift.

    Returns
    -------
    (n_out, n_places) float array, m/yr times the unit of the mix

    Notes
    -----
    It holds for the stated damping numbers, erodibility and area exponent, and for white misfit.
    """
    n_ages, n_places = grid.n_ages, grid.n_places
    g = spectrum.background_row
    factors = spectrum.filter(damping.weight)
    ratio = (damping.height_sd / damping.field_spread) ** 2
    gain = 2 * factors - factors**2 - ratio * spectrum.values / (spectrum.values + damping.weight**2) ** 2
    basis = spectrum.prior.root(spectrum.vectors) * np.sqrt(np.maximum(gain, 0.0))
    carried = basis.T @ g
    basis -= carried
    learnt = np.empty((mix.shape[0], n_places))
    cube = basis.reshape(n_ages, n_places, -1)
    for row, weights in enumerate(mix):
        learnt[row] = np.sum(np.tensordot(weights, cube, axes=(0, 0)) ** 2, axis=1)
    correlated = spectrum.prior.correlate(g)
    own = np.einsum("ij,jk,ik->i", mix, spectrum.prior.time, mix)[:, None]
    total = mix.sum(axis=1)[:, None]
    cross = mix @ correlated.reshape(n_ages, n_places)
    background = ratio / spectrum.tau_squared + g @ correlated
    variance = own - 2 * total * cross + total**2 * background - learnt
    return damping.field_spread * np.sqrt(np.maximum(variance, 0.0))


def cumulative_mix(ages: np.ndarray) -> np.ndarray:
    """(n_ages, n_ages) float array, yr: integral of a piecewise linear rate from age 0 to each age."""
    half = 0.5 * np.diff(ages)
    mix = np.zeros((ages.size, ages.size))
    for age in range(1, ages.size):
        mix[age] = mix[age - 1]
        mix[age, age - 1 : age + 1] += half[age - 1]
    return mix


def kernel_share(
    rows: sparse.csr_array, spectrum: Spectrum, damping: Damping, grid: UpliftGrid, nested: Nested
) -> np.ndarray:
    """Share of the squared averaging kernel that lies within one map node and one age node.

    The averaging kernel of a node is its row of A = d u_hat / d u_true, background included: every estimate
    is an average of the true rates with these weights. The share is a statement about the averaging, not
    about the prior. With Z = S V, A = 1 g' + (1 - 1 g') Z (D + lambda^2)^-1 Z' G' Q G; directions whose
    filter factor is below 1e-4 add nothing that counts.

    Parameters
    ----------
    rows : (n_rows, n_unknowns_fine) csr array, yr
        The rows that were decomposed.
    spectrum, damping
    grid : UpliftGrid
        The published grid, whose nodes are meant.
    nested : Nested
        The published grid inside the one that was solved on.

    Returns
    -------
    (n_ages, n_places) float array
        Between 0 and 1; 0 where the estimate depends on nothing.
    """
    g = spectrum.background_row
    used = spectrum.filter(damping.weight) > 1e-4
    basis = spectrum.prior.root(spectrum.vectors[:, used])
    carried = g @ basis
    right = np.empty((grid.n_unknowns, basis.shape[1] + 1))
    seen = rows @ basis
    right[:, :-1] = nested.spread.T @ (rows.T @ seen - spectrum.tau_squared * np.outer(g, carried))
    right[:, -1] = nested.spread.T @ g
    published = basis.reshape(nested.fine.n_ages, nested.fine.n_places, -1)[nested.ages][:, nested.places]
    left = np.empty_like(right)
    left[:, :-1] = (published.reshape(grid.n_unknowns, -1) - carried) / (spectrum.values[used] + damping.weight**2)
    left[:, -1] = 1.0
    whole = np.sum((left @ (right.T @ right)) * left, axis=1)
    near = _near_squares(left, right, grid)
    share = np.divide(near, whole, out=np.zeros_like(near), where=whole > 0)
    return np.clip(share, 0.0, 1.0).reshape(grid.n_ages, grid.n_places)


def _near_squares(left: np.ndarray, right: np.ndarray, grid: UpliftGrid) -> np.ndarray:
    """Sum of squared entries of left @ right' over the neighbours of each unknown, itself included."""
    n_ages, n_places = grid.n_ages, grid.n_places
    padded = np.full((grid.n_rows + 2, grid.n_cols + 2), -1)
    padded[1:-1, 1:-1] = grid.place
    rows, cols = np.nonzero(grid.place >= 0)
    left_cube = left.reshape(n_ages, n_places, -1)
    right_cube = right.reshape(n_ages, n_places, -1)
    near = np.zeros((n_ages, n_places))
    for d_row in (-1, 0, 1):
        for d_col in (-1, 0, 1):
            neighbour = padded[rows + 1 + d_row, cols + 1 + d_col]
            here = np.flatnonzero(neighbour >= 0)
            there = neighbour[here]
            for d_age in (-1, 0, 1):
                for age in range(max(0, -d_age), min(n_ages, n_ages - d_age)):
                    entries = np.einsum("ij,ij->i", left_cube[age, here], right_cube[age + d_age, there])
                    near[age, here] += entries**2
    return near.ravel()
