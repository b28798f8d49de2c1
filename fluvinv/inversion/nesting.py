"""Solving on a finer grid than the one that is published, so that the answer does not depend on the latter."""

from dataclasses import dataclass

import numpy as np
from scipy import sparse

from fluvinv.inversion.prior import FieldPrior, make_prior
from fluvinv.inversion.uplift_grid import UpliftGrid

#: A grid is refined only while the finer one stays below so many unknowns, places and modes of the prior.
MOST_UNKNOWNS, MOST_PLACES, MOST_MODES = 30_000, 2_500, 4_000


@dataclass(frozen=True, slots=True)
class Nested:
    """A published grid inside the grid that is solved on.

    Attributes
    ----------
    fine : UpliftGrid
        The grid that is solved on: half the spacing and half the step, or the published one.
    places : (n_places,) int array
        Index of each published place among the fine ones.
    ages : (n_ages,) int array
        Index of each published age among the fine ones.
    spread : (n_unknowns_fine, n_unknowns) csr array
        Interpolation from the published nodes to the fine ones; exact, since both grids are bilinear in
        space and linear in age and share their lines.
    """

    fine: UpliftGrid
    places: np.ndarray
    ages: np.ndarray
    spread: sparse.csr_array

    def pick(self, values: np.ndarray) -> np.ndarray:
        """Values at the published nodes, (n_ages, n_places), of (n_unknowns_fine,) values."""
        return values.reshape(self.fine.n_ages, -1)[self.ages][:, self.places]


def _halves(n: int) -> sparse.csr_array:
    """(2n - 1, n) linear interpolation from n nodes to these and the middles between them."""
    fine = np.arange(2 * n - 1)
    rows = np.concatenate([fine, fine[1::2]])
    columns = np.concatenate([fine // 2, fine[1::2] // 2 + 1])
    weights = np.where(rows % 2 == 0, 1.0, 0.5)
    return sparse.csr_array((weights, (rows, columns)), shape=(2 * n - 1, n))


def nest_with_prior(grid: UpliftGrid, range_space: float, range_time: float) -> tuple[Nested, FieldPrior]:
    """Refine a grid where that stays affordable, and make the prior on the grid that is solved on.

    Parameters
    ----------
    grid : UpliftGrid
    range_space : float, m
    range_time : float, yr

    Returns
    -------
    nested : Nested
    prior : FieldPrior
    """
    nested = nest(grid)
    prior = make_prior(nested.fine, range_space, range_time)
    if nested.fine is grid or prior.n_modes <= MOST_MODES:
        return nested, prior
    return as_it_is(grid), make_prior(grid, range_space, range_time)


def as_it_is(grid: UpliftGrid) -> Nested:
    """A grid that is solved on without refinement."""
    identity = sparse.csr_array(sparse.eye_array(grid.n_unknowns))
    return Nested(grid, np.arange(grid.n_places), np.arange(grid.n_ages), identity)


def nest(grid: UpliftGrid) -> Nested:
    """Refine a grid by two in space and age, where the size of the finer one allows it.

    Bilinear interpolation between map nodes flattens a field that curves, by an amount that grows with the
    square of the spacing; with thousands of heights that is more than a standard deviation. On a grid twice
    as fine it is a quarter of it.

    Parameters
    ----------
    grid : UpliftGrid
        Evenly spaced ages.

    Returns
    -------
    Nested
    """
    whole = grid.place >= 0
    cells = whole[:-1, :-1] & whole[1:, :-1] & whole[:-1, 1:] & whole[1:, 1:]
    inside = np.zeros((2 * grid.n_rows - 1, 2 * grid.n_cols - 1), dtype=bool)
    for d_row in range(3):
        for d_col in range(3):
            inside[d_row : d_row + 2 * cells.shape[0] : 2, d_col : d_col + 2 * cells.shape[1] : 2] |= cells
    n_places, n_ages = int(inside.sum()), 2 * grid.n_ages - 1
    if n_places > MOST_PLACES or n_places * n_ages > MOST_UNKNOWNS:
        return as_it_is(grid)
    place = np.full(inside.shape, -1, dtype=np.int32)
    place[inside] = np.arange(n_places, dtype=np.int32)
    fine = UpliftGrid(
        grid.west, grid.north, grid.spacing / 2, *inside.shape, _halves(grid.n_ages) @ grid.ages, place
    )  # fmt: skip
    in_space = sparse.kron(_halves(grid.n_rows), _halves(grid.n_cols), format="csr")
    in_space = in_space[inside.ravel()][:, whole.ravel()]
    return Nested(
        fine,
        place[::2, ::2][whole],
        np.arange(0, n_ages, 2),
        sparse.csr_array(sparse.kron(_halves(grid.n_ages), in_space, format="csr")),
    )
