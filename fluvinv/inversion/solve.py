r"""The damped linear inversion in spectral form.

The estimate minimises |y - G u|^2 + lambda^2 |w|^2 with u = u0 + S w: the columns of S are the modes of the
prior, the background rate u0 is free and lambda is the ratio of the height error to the prior's spread. Since
the rows of G sum to tau, the background's column is tau itself; projecting it out with Q leaves
M = S' G' Q G S = V D V'. From then on every damping costs next to nothing: filter factors are
f = d / (d + lambda^2) (Hansen 1998), and so are the misfit, the effective parameters and the posterior.
"""

from dataclasses import dataclass

import numpy as np
from scipy import linalg, sparse
from scipy.sparse.linalg import ArpackError, LinearOperator, eigsh

from fluvinv.errors import NumericalError
from fluvinv.inversion.prior import FieldPrior

#: Above this many modes of the prior only the best determined directions are computed, by Lanczos iteration.
DENSE_LIMIT = 4000

#: Entries of the dense products of rows and modes that are held at once.
_ENTRIES_AT_ONCE = 20_000_000


@dataclass(frozen=True, slots=True)
class Spectrum:
    """The inverse problem, decomposed.

    Attributes
    ----------
    prior : FieldPrior
    values : (k,) float array
        D, descending; squared singular values of Q G S (yr2).
    vectors : (n_modes, k) float array
        V.
    loads : (k,) float array
        V' S' G' Q y.
    background_row : (n_unknowns,) float array
        g = G' tau / (tau' tau): what the background takes from the rates; sums to 1.
    background_rate : float, m/yr
        Slope of y on tau.
    tau_squared : float, yr2
        tau' tau.
    y_squared : float, m2
        |Q y|^2.
    n_rows : int
        Number of heights.
    method : str
        "dense" (all directions) or "iterative" (the best determined ones).
    """

    prior: FieldPrior
    values: np.ndarray
    vectors: np.ndarray
    loads: np.ndarray
    background_row: np.ndarray
    background_rate: float
    tau_squared: float
    y_squared: float
    n_rows: int
    method: str

    def filter(self, weight: float) -> np.ndarray:
        """Filter factors f = d / (d + lambda^2) for lambda = weight (m per m/yr, that is yr)."""
        return self.values / (self.values + weight**2)

    def effective_parameters(self, weight: float) -> float:
        """Trace of the resolution, the background included."""
        return 1.0 + float(self.filter(weight).sum())

    def misfit(self, weight: float) -> float:
        """|y - G u|^2 (m2)."""
        share = self.values + 2 * weight**2
        return max(0.0, self.y_squared - float(np.sum(self.loads**2 * share / (self.values + weight**2) ** 2)))

    def roughness(self, weight: float) -> float:
        """|w|^2, the prior's norm of the departure from the background ((m/yr)^2)."""
        return float(np.sum((self.loads / (self.values + weight**2)) ** 2))

    def solution(self, weight: float) -> tuple[np.ndarray, float]:
        """Damped estimate of the rates.

        Returns
        -------
        rate : (n_unknowns,) float array, m/yr
            Background included.
        background : float, m/yr
        """
        field = self.prior.root(self.vectors @ (self.loads / (self.values + weight**2)))
        background = self.background_rate - float(self.background_row @ field)
        return background + field, background

    def log_evidence(self, weight: float, height_sd: float) -> float:
        """Log marginal likelihood of the heights, with a flat prior on the background rate.

        A constant in the settings of one network, it compares damping and noise numbers, nothing else.
        """
        chi_square = (self.misfit(weight) + weight**2 * self.roughness(weight)) / height_sd**2
        log_det = (self.n_rows - 1) * np.log(2 * np.pi * height_sd**2) + np.sum(np.log1p(self.values / weight**2))
        return -0.5 * float(chi_square + log_det + np.log(self.tau_squared))


def decompose(
    G: sparse.csr_array,
    y: np.ndarray,
    tau: np.ndarray,
    prior: FieldPrior,
    *,
    rank: int | None = None,
    seed: int = 1,
) -> Spectrum:
    """Decompose the inverse problem.

    Parameters
    ----------
    G : (n_rows, n_unknowns) csr array, yr
        Rows sum to tau.
    y : (n_rows,) float array, m
        Heights above base level.
    tau : (n_rows,) float array, yr
    prior : FieldPrior
    rank : int, optional
        Compute only this many directions, by Lanczos iteration; all, by dense algebra, when not given.
    seed : int
        Start of the Lanczos iteration.

    Returns
    -------
    Spectrum

    Raises
    ------
    NumericalError
        If there is no height above base level, or the eigensolver fails.
    """
    tau_squared = float(tau @ tau)
    if tau_squared == 0.0:
        raise NumericalError("no river node lies above its base level: there is nothing to invert")
    background_row = (G.T @ tau) / tau_squared
    background_rate = float(y @ tau) / tau_squared
    centred = y - background_rate * tau
    if rank is None:
        values, vectors = _all_directions(G, background_row, tau_squared, prior)
    else:
        values, vectors = _leading_directions(G, background_row, tau_squared, prior, rank, seed)
    values, vectors = np.maximum(values[::-1], 0.0), vectors[:, ::-1]
    return Spectrum(
        prior=prior,
        values=values,
        vectors=vectors,
        loads=vectors.T @ prior.root_transposed(G.T @ centred),
        background_row=background_row,
        background_rate=background_rate,
        tau_squared=tau_squared,
        y_squared=float(centred @ centred),
        n_rows=y.size,
        method="dense" if rank is None else "iterative",
    )


def _chunks(rows: sparse.csr_array):
    """Slices of the rows, small enough for their dense products with the modes."""
    step = max(16, _ENTRIES_AT_ONCE // rows.shape[1])
    for first in range(0, rows.shape[0], step):
        yield slice(first, min(first + step, rows.shape[0]))


def _all_directions(G, background_row, tau_squared, prior):
    matrix = np.zeros((prior.n_modes, prior.n_modes))
    for part in _chunks(G):
        by_mode = prior.rows_by_mode(G[part])
        matrix += by_mode.T @ by_mode
    pull = prior.root_transposed(background_row)
    matrix -= tau_squared * np.outer(pull, pull)
    try:
        return linalg.eigh(matrix, overwrite_a=True, check_finite=True, driver="evd")
    except (linalg.LinAlgError, ValueError) as error:
        raise NumericalError(f"the dense eigensolver failed on {prior.n_modes} modes: {error}") from error


def _leading_directions(G, background_row, tau_squared, prior, rank, seed):
    n_modes = prior.n_modes

    def product(white):
        rates = prior.root(white.ravel())
        curvature = G.T @ (G @ rates) - tau_squared * background_row * (background_row @ rates)
        return prior.root_transposed(curvature)

    operator = LinearOperator((n_modes, n_modes), matvec=product, dtype=float)
    start = np.random.default_rng(seed).standard_normal(n_modes)
    try:
        return eigsh(operator, k=min(rank, n_modes - 1), which="LA", v0=start, tol=1e-8)
    except ArpackError as error:
        raise NumericalError(f"the iterative eigensolver did not converge on {n_modes} modes: {error}") from error
