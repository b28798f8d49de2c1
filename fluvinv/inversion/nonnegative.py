"""Rates that must not be negative: the same damped least squares under u >= 0."""

import numpy as np
from scipy import linalg, sparse, stats

from fluvinv.errors import NumericalError
from fluvinv.inversion.prior import FieldPrior

_TRIES = 200
_NUGGET = 1e-8


def nonnegative_least_squares(H: np.ndarray, b: np.ndarray) -> np.ndarray:
    """Minimise u' H u / 2 - b' u under u >= 0, for H symmetric positive definite.

    Block principal pivoting: all unknowns that break a condition change sides at once; when that stops
    helping, only the last of them does, which ends in finitely many steps (Judice & Pires 1994; Kim & Park
    2011; from memory).

    Parameters
    ----------
    H : (n, n) float array
    b : (n,) float array

    Returns
    -------
    (n,) float array

    Raises
    ------
    NumericalError
        If H cannot be factored or the pivoting does not end.
    """
    free = np.ones(b.size, dtype=bool)
    fewest, patience = b.size + 1, 3
    for _ in range(_TRIES):
        u = np.zeros(b.size)
        index = np.flatnonzero(free)
        try:
            u[index] = linalg.solve(H[np.ix_(index, index)], b[index], assume_a="pos", check_finite=False)
        except linalg.LinAlgError as error:
            raise NumericalError("the non-negative inversion met a matrix that is not positive definite") from error
        pull = H @ u - b
        wrong = np.where(free, u < -1e-12 * np.abs(u).max(initial=0.0), pull < -1e-10 * np.abs(b).max())
        n_wrong = int(wrong.sum())
        if n_wrong == 0:
            return np.maximum(u, 0.0)
        if n_wrong < fewest:
            fewest, patience = n_wrong, 3
        elif patience > 0:
            patience -= 1
        else:
            wrong[: np.flatnonzero(wrong)[-1]] = False
        free ^= wrong
    raise NumericalError(f"the non-negative inversion did not settle within {_TRIES} exchanges")


def _inverse(correlation: np.ndarray) -> np.ndarray:
    """Inverse of a correlation matrix, with a nugget that keeps close nodes distinguishable."""
    return linalg.inv(correlation + _NUGGET * np.eye(correlation.shape[0]))


def nonnegative_rates(G: sparse.csr_array, y: np.ndarray, prior: FieldPrior, weight: float) -> np.ndarray:
    """Damped estimate of the rates under u >= 0, with a free background rate.

    Parameters
    ----------
    G : (n_rows, n_unknowns) csr array, yr
    y : (n_rows,) float array, m
    prior : FieldPrior
    weight : float, yr
        Ratio of height error to spread.

    Returns
    -------
    (n_unknowns,) float array, m/yr
    """
    H = (G.T @ G).toarray()
    inverse_space, inverse_time = _inverse(prior.space), _inverse(prior.time)
    pulled = np.outer(inverse_time.sum(axis=1), inverse_space.sum(axis=1)).ravel()
    damp = np.kron(inverse_time, inverse_space)
    damp -= np.outer(pulled, pulled) / pulled.sum()
    H += weight**2 * damp
    scale = np.sqrt(np.diag(H))
    return nonnegative_least_squares(H / np.outer(scale, scale), (G.T @ y) / scale) / scale


def interval_above_zero(rate: np.ndarray, sd: np.ndarray, level: float = 0.95):
    """Shortest interval of a Gaussian about the constrained rate, cut off at zero.

    Parameters
    ----------
    rate : array, m/yr
        Constrained estimate.
    sd : array of the same shape, m/yr
        Standard deviation without the constraint.
    level : float
        Probability inside.

    Returns
    -------
    low, high : arrays, m/yr
        Symmetric about the rate where that stays above zero, from zero upward elsewhere.

    Notes
    -----
    An approximation: each marginal is cut for itself, and what the constraint elsewhere adds is not counted.
    """
    safe = np.maximum(sd, np.finfo(float).tiny)
    mass = stats.norm.cdf(rate / safe)
    half = safe * stats.norm.ppf(0.5 * (1 + level * mass))
    from_zero = rate + safe * stats.norm.isf((1 - level) * mass)
    return np.where(half <= rate, rate - half, 0.0), np.where(half <= rate, rate + half, from_zero)
