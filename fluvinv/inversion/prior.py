"""The prior: the uplift rate as a smooth random field in space and time about a free background rate."""

from dataclasses import dataclass

import numpy as np
from scipy import linalg, special

from fluvinv.errors import NumericalError
from fluvinv.inversion.uplift_grid import UpliftGrid

#: Added to the diagonal of a correlation matrix, so that closely spaced nodes stay distinguishable.
_NUGGET = 1e-8


def matern_correlation(distance, range_):
    r"""Correlation of a plane Matern field of smoothness nu = 1 (Whittle 1954).

    .. math:: \rho(d) = \kappa d \, K_1(\kappa d), \quad \kappa = \sqrt{8} / r

    It is the field whose stochastic partial differential equation Lindgren, Rue & Lindstrom (2011) solve;
    here its correlation is used as it stands, so there is no edge effect and no dependence on the grid.
    At the range r the correlation has fallen to about 0.14.

    Parameters
    ----------
    distance : array, m
    range_ : float, m

    Returns
    -------
    array of the same shape
    """
    scaled = np.sqrt(8.0) * np.asarray(distance, dtype=float) / range_
    result = np.ones_like(scaled)
    apart = scaled > 0
    result[apart] = scaled[apart] * special.k1(scaled[apart])
    return result


def exponential_correlation(lag, range_):
    """Correlation exp(-2 |lag| / range): a Matern process of smoothness 1/2, 0.135 at the range.

    Sample paths are continuous and rough, so that a step in time is not forbidden.
    """
    return np.exp(-2.0 * np.abs(np.asarray(lag, dtype=float)) / range_)


@dataclass(frozen=True, slots=True)
class FieldPrior:
    """Correlation of the unknown rates as Kronecker factors: space times time.

    The prior is u = u0 + f with a free background rate u0 and a Gaussian field f of covariance
    spread^2 times the product of a Matern correlation in space and an exponential one in time. It is a prior
    on functions: halving the spacing or the step of the grid leaves it as it is.

    Attributes
    ----------
    space : (n_places, n_places) float array
        Lower Cholesky factor of the correlation between places.
    time : (n_ages, n_ages) float array
        Lower Cholesky factor of the correlation between ages.
    """

    space: np.ndarray
    time: np.ndarray

    def _apply(self, space, time, values):
        """Kronecker product (time x space) times columns of shape (n_unknowns, ...)."""
        shape = values.shape
        cube = values.reshape(time.shape[1], space.shape[1], -1)
        cube = np.matmul(space, cube)
        return np.tensordot(time, cube, axes=(1, 0)).reshape(shape)

    def root(self, white):
        """Turn independent standard normals into the unit field: S w, with S S' the correlation."""
        return self._apply(self.space, self.time, white)

    def root_transposed(self, values):
        """S' v."""
        return self._apply(self.space.T, self.time.T, values)

    def whiten_transposed(self, values):
        """S'^-1 v: the inverse of `root_transposed`."""
        shape = values.shape
        cube = values.reshape(self.time.shape[0], self.space.shape[0], -1)
        flat = np.moveaxis(cube, 1, 0).reshape(self.space.shape[0], -1)
        flat = linalg.solve_triangular(self.space, flat, lower=True, trans="T", check_finite=False)
        cube = np.moveaxis(flat.reshape(cube.shape[1], cube.shape[0], -1), 0, 1).reshape(cube.shape[0], -1)
        cube = linalg.solve_triangular(self.time, cube, lower=True, trans="T", check_finite=False)
        return cube.reshape(shape)

    def correlate(self, values):
        """S S' v: the correlation matrix times columns."""
        return self.root(self.root_transposed(values))


def _cholesky(correlation: np.ndarray, what: str) -> np.ndarray:
    correlation[np.diag_indices_from(correlation)] += _NUGGET
    try:
        return linalg.cholesky(correlation, lower=True, overwrite_a=True, check_finite=False)
    except linalg.LinAlgError as error:
        raise NumericalError(
            f"the prior's correlation in {what} is not positive definite: the range is very long for so fine"
            f" a grid. Choose a shorter range or a coarser uplift grid."
        ) from error


def make_prior(grid: UpliftGrid, range_space: float, range_time: float) -> FieldPrior:
    """Factor the prior's correlation on the places and ages of a grid.

    Parameters
    ----------
    grid : UpliftGrid
    range_space : float, m
    range_time : float, yr
        Distances at which the correlation has fallen to about 0.14.

    Returns
    -------
    FieldPrior

    Raises
    ------
    NumericalError
        If the correlation cannot be factored.
    """
    xy = grid.place_xy
    distance = np.hypot(xy[:, None, 0] - xy[None, :, 0], xy[:, None, 1] - xy[None, :, 1])
    space = _cholesky(matern_correlation(distance, range_space), "space")
    time = _cholesky(exponential_correlation(grid.ages[:, None] - grid.ages[None, :], range_time), "time")
    return FieldPrior(space, time)
