"""The inversion against dense linear algebra, and what its statements mean."""

import numpy as np
import pytest
from trees import random_network

from fluvinv.errors import NumericalError
from fluvinv.inversion import InversionOptions, age_nodes, invert, make_grid, sensitivity
from fluvinv.inversion import invert as invert_function
from fluvinv.inversion.choose import Damping, fixed_damping, implied_spread, l_curve
from fluvinv.inversion.nesting import as_it_is, nest
from fluvinv.inversion.posterior import cumulative_mix, kernel_share, standard_deviation
from fluvinv.inversion.prior import make_prior, matern_correlation
from fluvinv.inversion.solve import decompose
from fluvinv.streampower import travel_time

HEIGHT, SPREAD = 3.0, 1e-4


class Problem:
    """A small problem with its dense counterpart: the background rate is one more column with a flat prior."""

    def __init__(self, seed=3):
        self.network = random_network(260, seed)
        self.tau = travel_time(self.network, 1e-6, 0.5)
        self.grid = make_grid(self.network, 1e4, age_nodes(self.tau.max() / 4, self.tau.max()))
        self.G = sensitivity(self.network, self.tau, self.grid)
        self.prior = make_prior(self.grid, 3e4, 1.5e6)
        n = self.grid.n_unknowns
        assert self.prior.n_modes == n  # nothing is left out on so coarse a grid
        root = self.prior.root(np.eye(n))
        self.correlation = np.kron(self.prior.time, self.prior.space)
        rng = np.random.default_rng(seed)
        self.truth = 3e-4 + SPREAD * root @ rng.standard_normal(n)
        self.y = self.G @ self.truth + HEIGHT * rng.standard_normal(self.network.n_nodes)
        self.spectrum = decompose(self.G, self.y, self.tau, self.prior)
        self.damping = Damping(HEIGHT / SPREAD, HEIGHT, SPREAD, SPREAD)
        columns = np.column_stack([self.G @ root, self.tau])
        precision = np.diag(np.r_[np.full(n, SPREAD**-2), 0.0])
        to_rate = np.column_stack([root, np.ones(n)])
        posterior = np.linalg.inv(columns.T @ columns / HEIGHT**2 + precision)
        self.rate = to_rate @ posterior @ (columns.T @ self.y) / HEIGHT**2
        self.covariance = to_rate @ posterior @ to_rate.T
        self.kernel = to_rate @ posterior @ columns.T @ self.G.toarray() / HEIGHT**2
        self.trace = np.trace(columns @ posterior @ columns.T) / HEIGHT**2


@pytest.fixture(scope="module")
def problem():
    return Problem()


def test_solution_equals_dense_algebra(problem):
    rate, _ = problem.spectrum.solution(problem.damping.weight)
    np.testing.assert_allclose(rate, problem.rate, atol=1e-9 * np.abs(problem.rate).max() * 1e3)
    residual = problem.y - problem.G @ rate
    assert problem.spectrum.misfit(problem.damping.weight) == pytest.approx(residual @ residual, rel=1e-8)
    assert problem.spectrum.effective_parameters(problem.damping.weight) == pytest.approx(problem.trace, rel=1e-8)


def test_posterior_deviation_equals_dense_algebra(problem):
    """Check value 4.17 (Tarantola 2005, eq. 3.37-3.38; from memory; identity)."""
    sd = standard_deviation(problem.spectrum, problem.damping, problem.grid, np.eye(problem.grid.n_ages))
    np.testing.assert_allclose(sd.ravel(), np.sqrt(np.diag(problem.covariance)), rtol=1e-7)


def test_both_forms_of_the_posterior_agree(problem):
    """(G'G/s^2 + P)^-1 = C - C G'(G C G' + s^2)^-1 G C (check value 4.17): data space against ours, wide background."""
    wide = 1e4 * SPREAD
    C = SPREAD**2 * problem.correlation + wide**2
    G = problem.G.toarray()
    S = G @ C @ G.T + HEIGHT**2 * np.eye(G.shape[0])
    data_space = C - C @ G.T @ np.linalg.solve(S, G @ C)
    ours = standard_deviation(problem.spectrum, problem.damping, problem.grid, np.eye(problem.grid.n_ages)).ravel()
    np.testing.assert_allclose(ours, np.sqrt(np.diag(data_space)), rtol=1e-3)
    assert np.all(np.diag(problem.covariance) <= np.diag(C))


def test_errors_of_a_damped_estimate_equal_dense_algebra(problem):
    """Damped too much for the field's spread: error = bias + noise, by dense algebra on the estimator's matrix.

    u_hat = R y; the error covariance is (R G - 1) C (R G - 1)' + s^2 R R' with C the field's covariance (identity).
    """
    weight, wide = 12 * HEIGHT / SPREAD, 5 * SPREAD
    n = problem.grid.n_unknowns
    root = problem.prior.root(np.eye(n))
    columns = np.column_stack([problem.G @ root, problem.tau])
    normal = columns.T @ columns + np.diag(np.r_[np.full(n, weight**2), 0.0])
    estimator = np.column_stack([root, np.ones(n)]) @ np.linalg.solve(normal, columns.T)
    off = estimator @ problem.G.toarray() - np.eye(n)
    expected = wide**2 * off @ problem.correlation @ off.T + HEIGHT**2 * estimator @ estimator.T
    damping = Damping(weight, HEIGHT, HEIGHT / weight, wide)
    sd = standard_deviation(problem.spectrum, damping, problem.grid, np.eye(problem.grid.n_ages))
    np.testing.assert_allclose(sd.ravel(), np.sqrt(np.diag(expected)), rtol=1e-6)


def test_spread_of_the_field_is_implied_by_the_departure():
    """Truths drawn with a known spread, damped at several weights: the implied spread is it (over ten seeds)."""
    for share in (0.3, 1.0, 10.0):
        found = [implied_spread(case.spectrum, share * HEIGHT / SPREAD, HEIGHT) for case in map(Problem, range(10))]
        assert np.sqrt(np.mean(np.square(found))) == pytest.approx(SPREAD, rel=0.2)


def test_cumulative_deviation_equals_dense_algebra(problem):
    mix = cumulative_mix(problem.grid.ages)
    B = np.kron(mix, np.eye(problem.grid.n_places))
    expected = np.sqrt(np.maximum(np.diag(B @ problem.covariance @ B.T), 0))
    ours = standard_deviation(problem.spectrum, problem.damping, problem.grid, mix).ravel()
    np.testing.assert_allclose(ours, expected, atol=1e-6 * expected.max())


def test_cumulative_uplift_is_the_integral_of_the_rate(problem):
    """Trapezoids are exact for piecewise linear rates; numpy integrates the same function on a fine grid."""
    ages = problem.grid.ages
    rates = np.random.default_rng(1).uniform(0, 1e-3, ages.size)
    fine = np.linspace(0, ages[-1], 40_001)
    total = np.trapezoid(np.interp(fine, ages, rates), fine)
    assert (cumulative_mix(ages) @ rates)[-1] == pytest.approx(total, rel=1e-6)


def neighbours(grid):
    """(n_unknowns, n_unknowns) bool: within one map node and one age node."""
    rows, cols = np.nonzero(grid.place >= 0)
    age, place = np.divmod(np.arange(grid.n_unknowns), grid.n_places)
    return (
        (np.abs(rows[place][:, None] - rows[place]) <= 1)
        & (np.abs(cols[place][:, None] - cols[place]) <= 1)
        & (np.abs(age[:, None] - age) <= 1)
    )


def test_kernel_share_equals_dense_algebra(problem):
    grid = problem.grid
    squares = problem.kernel**2
    expected = (squares * neighbours(grid)).sum(axis=1) / squares.sum(axis=1)
    ours = kernel_share(problem.G, problem.spectrum, problem.damping, grid, as_it_is(grid)).ravel()
    np.testing.assert_allclose(ours, expected, atol=1e-4)  # filter factors below 1e-4 are left out


def test_averaging_kernels_of_a_constant_sum_to_one(problem):
    """The background is free, so a constant rate comes back as it is (check value 4.4)."""
    np.testing.assert_allclose(problem.kernel.sum(axis=1), 1.0, rtol=1e-6)
    flat = decompose(problem.G, 2e-4 * problem.tau, problem.tau, problem.prior)
    np.testing.assert_allclose(flat.solution(problem.damping.weight)[0], 2e-4, rtol=1e-9)


def test_evidence_equals_dense_algebra(problem):
    """log p(y) with a flat background: compared with the density of y under a very wide background."""
    G, wide = problem.G.toarray(), 1e-2
    S = SPREAD**2 * G @ problem.correlation @ G.T + HEIGHT**2 * np.eye(G.shape[0])
    S += wide**2 * np.outer(problem.tau, problem.tau)
    _, log_det = np.linalg.slogdet(2 * np.pi * S)
    density = -0.5 * (log_det + problem.y @ np.linalg.solve(S, problem.y))
    flat = density + 0.5 * np.log(2 * np.pi * wide**2)
    ours = problem.spectrum.log_evidence(problem.damping.weight, HEIGHT)
    assert ours == pytest.approx(flat, abs=0.05)


def test_iterative_solver_equals_dense(problem):
    iterative = decompose(problem.G, problem.y, problem.tau, problem.prior, rank=110)
    weight = problem.damping.weight
    np.testing.assert_allclose(iterative.solution(weight)[0], problem.spectrum.solution(weight)[0], atol=1e-8)
    np.testing.assert_allclose(iterative.values[:60], problem.spectrum.values[:60], rtol=1e-8)


def test_large_grids_go_to_the_iterative_solver(problem, monkeypatch):
    module = __import__("sys").modules["fluvinv.inversion.invert"]
    network = problem.network
    object.__setattr__(network, "height", problem.y)
    options = InversionOptions(3e4, 1.5e6, choose="fixed", spread=SPREAD, height_sd=HEIGHT)
    dense = invert_function(network, problem.tau, problem.grid, options)
    monkeypatch.setattr(module, "DENSE_LIMIT", 100)
    monkeypatch.setattr(module, "_FIRST_RANK", 100)
    iterative = invert_function(network, problem.tau, problem.grid, options)
    assert (dense.method, iterative.method) == ("dense", "iterative")
    assert np.abs(iterative.rate - dense.rate).max() < 0.2 * dense.rate_sd.min()
    np.testing.assert_allclose(iterative.rate_sd, dense.rate_sd, rtol=0.05)


def test_height_error_is_recovered_by_evidence(problem):
    found = fixed_damping(problem.spectrum, SPREAD, None)
    assert found.height_sd == pytest.approx(HEIGHT, rel=0.15)


def test_intervals_hold_the_truth_drawn_from_the_prior():
    """Truths drawn from the prior, noise as stated: 95 % intervals hold about 95 % (pooled over 12 seeds)."""
    inside = []
    for seed in range(12):
        case = Problem(seed)
        sd = standard_deviation(case.spectrum, case.damping, case.grid, np.eye(case.grid.n_ages)).ravel()
        inside.append(np.mean(np.abs(case.spectrum.solution(case.damping.weight)[0] - case.truth) < 1.96 * sd))
    assert 0.90 < np.mean(inside) < 0.985


def test_modes_reproduce_the_correlation(problem):
    """S S' is the correlation, S' its transpose, and rows by mode are rows times S."""
    n = problem.grid.n_unknowns
    root = problem.prior.root(np.eye(n))
    np.testing.assert_allclose(root @ root.T, problem.correlation, atol=1e-12)
    values = np.random.default_rng(0).standard_normal(n)
    np.testing.assert_allclose(problem.prior.root_transposed(values), root.T @ values, atol=1e-12)
    np.testing.assert_allclose(problem.prior.correlate(values), problem.correlation @ values, atol=1e-10)
    by_mode = problem.prior.rows_by_mode(problem.G[:7])
    np.testing.assert_allclose(by_mode, problem.G[:7] @ root, rtol=1e-10, atol=1e-6)


def test_correlations_at_known_points():
    """1 at 0; smoothness 1 at the range: sqrt(8) K_1(sqrt(8)) = 0.1396, "about 0.13" in Lindgren et al. (2011).

    Closed forms of half-integer smoothness (Rasmussen & Williams 2006, eq. 4.16-4.17; from memory).
    """
    assert matern_correlation(np.array([0.0]), 10.0, 2.0)[0] == 1.0
    assert matern_correlation(np.array([10.0]), 10.0, 1.0)[0] == pytest.approx(0.13962, abs=1e-4)
    d = np.array([0.5, 3.0, 20.0])
    np.testing.assert_allclose(matern_correlation(d, 10.0, 0.5), np.exp(-2 * d / 10), rtol=1e-10)
    s = np.sqrt(12) * d / 10
    np.testing.assert_allclose(matern_correlation(d, 10.0, 1.5), (1 + s) * np.exp(-s), rtol=1e-10)


def test_l_curve_falls_and_rises(problem):
    """Misfit grows and roughness falls with the weight, monotonically (identity)."""
    curve = l_curve(problem.spectrum)
    assert np.all(np.diff(curve.misfit_norm) > 0)
    assert np.all(np.diff(curve.rough_norm) < 0)


def test_rates_held_non_negative():
    """Where the unconstrained fit subsides, the constrained one stops at zero and its interval begins there."""
    case = Problem(4)
    heights = case.G @ np.where(case.truth > np.quantile(case.truth, 0.4), case.truth, 0.0)
    object.__setattr__(case.network, "height", heights)
    options = InversionOptions(3e4, 1.5e6, choose="fixed", spread=3e-4, height_sd=2.0)
    free = invert(case.network, case.tau, case.grid, options)
    held = invert(case.network, case.tau, case.grid, InversionOptions(3e4, 1.5e6, "fixed", 3e-4, 2.0, False))
    assert free.rate.min() < 0
    assert held.rate.min() == 0.0
    assert held.low.min() >= 0.0
    assert np.all(held.low <= held.rate)
    assert np.all(held.rate <= held.high)
    above = held.rate > 0
    assert np.all(held.low[above] < held.rate[above])
    assert np.all(held.rate[above] < held.high[above])
    assert held.rate_sd.min() > 0


def test_fitted_heights_are_those_of_the_published_rates():
    """What a reader gets who integrates the published stack along the rivers, whatever grid was solved on."""
    case = Problem(5)
    object.__setattr__(case.network, "height", case.y)
    result = invert(case.network, case.tau, case.grid, InversionOptions(3e4, 1.5e6, "fixed", SPREAD, HEIGHT))
    np.testing.assert_allclose(result.fitted, case.G @ result.rate.ravel(), atol=1e-8 * np.abs(case.y).max())
    assert np.abs(result.fitted - result.solved).max() > 0


def test_no_heights_no_inversion(problem):
    with pytest.raises(NumericalError, match="nothing to invert"):
        decompose(problem.G, problem.y, np.zeros_like(problem.tau), problem.prior)


def test_nested_grids_describe_the_same_fields(problem):
    """Interpolating to the finer grid changes no height, and picking the published nodes undoes it."""
    nested = nest(problem.grid)
    assert nested.fine.spacing == problem.grid.spacing / 2
    fine = sensitivity(problem.network, problem.tau, nested.fine)
    difference = fine @ nested.spread - problem.G
    assert np.abs(difference).max() < 1e-9 * problem.tau.max()
    values = np.random.default_rng(0).standard_normal(problem.grid.n_unknowns)
    np.testing.assert_array_equal(nested.pick(nested.spread @ values).ravel(), values)
    x, y = nested.fine.place_xy[nested.places].T
    np.testing.assert_array_equal(np.column_stack([x, y]), problem.grid.place_xy)


def test_kernel_share_on_nested_grids_equals_dense_algebra(problem):
    """Solved on the finer grid, averaged over the published one: A = pick d u_hat / d u_true spread."""
    grid, nested = problem.grid, nest(problem.grid)
    G = sensitivity(problem.network, problem.tau, nested.fine)
    prior = make_prior(nested.fine, 3e4, 1.5e6)
    spectrum = decompose(G, problem.y, problem.tau, prior)
    root = prior.root(np.eye(prior.n_modes))
    columns = np.column_stack([G @ root, problem.tau])
    precision = np.diag(np.r_[np.full(prior.n_modes, SPREAD**-2), 0.0])
    posterior = np.linalg.inv(columns.T @ columns / HEIGHT**2 + precision)
    to_rate = np.column_stack([root, np.ones(nested.fine.n_unknowns)])
    kernel = to_rate @ posterior @ columns.T @ (G @ nested.spread).toarray() / HEIGHT**2
    cube = kernel.reshape(nested.fine.n_ages, nested.fine.n_places, -1)[nested.ages][:, nested.places]
    squares = cube.reshape(grid.n_unknowns, -1) ** 2
    ours = kernel_share(G, spectrum, problem.damping, grid, nested).ravel()
    np.testing.assert_allclose(ours, (squares * neighbours(grid)).sum(axis=1) / squares.sum(axis=1), atol=1e-3)


def test_halving_spacing_and_step_keeps_the_answer():
    """The prior is one on functions: its numbers fixed, a grid twice as fine moves rates by less than sd/2."""
    network = random_network(900, 7, step=1500.0)
    tau = travel_time(network, 1e-6, 0.5)
    range_space, range_time = 5e4, 0.6 * tau.max()
    finest = make_grid(network, 2.5e3, age_nodes(tau.max() / 40, tau.max()))
    rng = np.random.default_rng(1)
    prior = make_prior(finest, range_space, range_time)
    truth = 3e-4 + SPREAD * prior.root(rng.standard_normal(prior.n_modes))
    noise = 20.0
    heights = sensitivity(network, tau, finest) @ truth + noise * rng.standard_normal(network.n_nodes)
    object.__setattr__(network, "height", heights)
    options = InversionOptions(range_space, range_time, choose="fixed", spread=SPREAD, height_sd=noise)
    coarse = invert(network, tau, make_grid(network, 8e3, age_nodes(tau.max() / 12, tau.max())), options)
    fine = invert(network, tau, make_grid(network, 4e3, age_nodes(tau.max() / 24, tau.max())), options)
    at = {tuple(xy): i for i, xy in enumerate(fine.grid.place_xy)}
    here, there = np.array([(i, at[tuple(xy)]) for i, xy in enumerate(coarse.grid.place_xy) if tuple(xy) in at]).T
    change = np.abs(fine.rate[::2][:, there] - coarse.rate[:, here]) / coarse.rate_sd[:, here]
    assert np.mean(change[coarse.well_sampled[:, here]] < 0.5) > 0.95
