"""The prior: the uplift rate as a smooth random field in space and time about a free background rate."""

from dataclasses import dataclass

import numpy as np
from scipy import linalg, sparse, special

from fluvinv.inversion.uplift_grid import UpliftGrid

#: Modes whose prior variance is below this share of the largest are left out.
SMALLEST_MODE = 1e-5

#: Smoothness of the field in space and in time. Rougher fields (1 and 1/2) let the rate between two nodes differ so
#: much from the line between them that the answer depends on the grid: halving spacing and step widened the
#: standard deviations by 40 %, against 8 % with these.
SMOOTHNESS_SPACE, SMOOTHNESS_TIME = 2.0, 1.5


def matern_correlation(distance, range_, smoothness):
    r"""Correlation of a Matern field.

    .. math:: \rho(d) = \frac{2^{1-\nu}}{\Gamma(\nu)} (\kappa d)^\nu K_\nu(\kappa d), \quad \kappa = \sqrt{8\nu} / r

    with the range r as Lindgren, Rue & Lindstrom (2011) define it: there the correlation has fallen to about
    0.14. The correlation is used as it stands, so there is no edge effect and no dependence on the grid.

    Parameters
    ----------
    distance : array, m or yr
    range_ : float, the same unit
    smoothness : float
        nu; 1/2 is the exponential.

    Returns
    -------
    array of the same shape
    """
    scaled = np.sqrt(8.0 * smoothness) * np.abs(np.asarray(distance, dtype=float)) / range_
    result = np.ones_like(scaled)
    apart = scaled > 1e-9
    factor = 2 ** (1 - smoothness) / special.gamma(smoothness)
    result[apart] = factor * scaled[apart] ** smoothness * special.kv(smoothness, scaled[apart])
    return result


@dataclass(frozen=True, slots=True)
class FieldPrior:
    """The prior on the nodes of a grid, as a product of space and time, with its leading modes.

    The prior is u = u0 + f with a free background rate u0 and a Gaussian field f of covariance
    spread^2 times the product of a Matern correlation in space and one in time. It is a prior on functions:
    halving the spacing or the step of the grid leaves it as it is. Its modes are products of the
    eigenvectors of both correlations; modes with next to no prior variance are left out, so that a finer
    grid does not mean more numbers to solve for.

    Attributes
    ----------
    space : (n_places, n_places) float array
        Correlation between places.
    time : (n_ages, n_ages) float array
        Correlation between ages.
    space_modes, time_modes : (n_places, n_places) and (n_ages, n_ages) float arrays
        Eigenvectors times the square roots of their eigenvalues.
    kept : (n_modes,) int array
        Kept products, as indices into the flattened (n_ages, n_places) table of products.
    """

    space: np.ndarray
    time: np.ndarray
    space_modes: np.ndarray
    time_modes: np.ndarray
    kept: np.ndarray

    @property
    def n_modes(self) -> int:
        """Number of modes that are kept."""
        return self.kept.size

    def root(self, white: np.ndarray) -> np.ndarray:
        """Turn independent standard normals, one per mode, into the unit field at the unknowns.

        Parameters
        ----------
        white : (n_modes, ...) float array

        Returns
        -------
        (n_unknowns, ...) float array
        """
        n_ages, n_places = self.time.shape[0], self.space.shape[0]
        table = np.zeros((n_ages * n_places, *white.shape[1:]))
        table[self.kept] = white
        field = np.matmul(self.space_modes, table.reshape(n_ages, n_places, -1))
        return np.tensordot(self.time_modes, field, axes=(1, 0)).reshape(table.shape)

    def root_transposed(self, values: np.ndarray) -> np.ndarray:
        """Transpose of `root`: from (n_unknowns,) values to (n_modes,)."""
        table = self.time_modes.T @ values.reshape(self.time.shape[0], -1) @ self.space_modes
        return table.ravel()[self.kept]

    def rows_by_mode(self, rows: sparse.csr_array) -> np.ndarray:
        """Rows of the sensitivity matrix times every mode.

        Parameters
        ----------
        rows : (n_rows, n_unknowns) csr array

        Returns
        -------
        (n_rows, n_modes) float array
        """
        n_ages, n_places = self.time.shape[0], self.space.shape[0]
        by_place = rows.reshape((rows.shape[0] * n_ages, n_places)).tocsr() @ self.space_modes
        by_age = np.matmul(self.time_modes.T, by_place.reshape(rows.shape[0], n_ages, n_places))
        return by_age.reshape(rows.shape[0], -1)[:, self.kept]

    def correlate(self, values: np.ndarray) -> np.ndarray:
        """The correlation matrix times (n_unknowns,) values."""
        return (self.time @ values.reshape(self.time.shape[0], -1) @ self.space).ravel()


def _modes(correlation: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Eigenvalues, descending, and eigenvectors scaled by the roots of their eigenvalues."""
    values, vectors = linalg.eigh(correlation)
    values = np.maximum(values[::-1], 0.0)
    return values, vectors[:, ::-1] * np.sqrt(values)


def make_prior(grid: UpliftGrid, range_space: float, range_time: float) -> FieldPrior:
    """Correlations and modes of the prior on the places and ages of a grid.

    Parameters
    ----------
    grid : UpliftGrid
    range_space : float, m
    range_time : float, yr
        Distances at which the correlation has fallen to about 0.14.

    Returns
    -------
    FieldPrior
    """
    xy = grid.place_xy
    distance = np.hypot(xy[:, None, 0] - xy[None, :, 0], xy[:, None, 1] - xy[None, :, 1])
    space = matern_correlation(distance, range_space, SMOOTHNESS_SPACE)
    time = matern_correlation(grid.ages[:, None] - grid.ages[None, :], range_time, SMOOTHNESS_TIME)
    space_values, space_modes = _modes(space)
    time_values, time_modes = _modes(time)
    variance = np.outer(time_values, space_values).ravel()
    kept = np.flatnonzero(variance > SMALLEST_MODE * variance.max())
    return FieldPrior(space, time, space_modes, time_modes, kept)
