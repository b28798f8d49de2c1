"""Corrected heights against general optimisers and the optimality conditions."""

import numpy as np
import pytest
from scipy.optimize import isotonic_regression, lsq_linear

from fluvinv.terrain import fall_downstream


def random_tree(n, rng, roots=1, spread=5):
    """Receivers of a random forest, receivers first."""
    receiver = np.array([max(0, i - 1 - rng.integers(0, spread)) for i in range(n)])
    receiver[rng.choice(n, roots, replace=False)] = -1
    receiver[0] = -1
    return receiver


def test_on_a_chain_it_is_the_isotonic_regression():
    rng = np.random.default_rng(1)
    for n in (1, 2, 3, 50, 400):
        height = np.cumsum(rng.normal(0.2, 1.0, n))
        got = fall_downstream(np.arange(n) - 1, height)
        np.testing.assert_allclose(got, isotonic_regression(height).x, rtol=0, atol=1e-10)


def test_on_small_trees_it_is_the_least_squares_answer():
    rng = np.random.default_rng(2)
    for _ in range(60):
        n = int(rng.integers(2, 14))
        receiver = random_tree(n, rng, roots=int(rng.integers(1, 3)))
        height = rng.normal(0, 10, n)
        # heights as sums of increments down to the outlet: those of outlets free, the others not negative
        path = np.zeros((n, n))
        for node in range(n):
            below = node
            while below >= 0:
                path[node, below] = 1.0
                below = receiver[below]
        lowest = np.where(receiver < 0, -np.inf, 0.0)
        best = lsq_linear(path, height, bounds=(lowest, np.inf), method="bvls", tol=1e-14)
        np.testing.assert_allclose(fall_downstream(receiver, height), path @ best.x, atol=1e-6)


@pytest.mark.parametrize("spread", [1, 3, 200, 20_000])
def test_on_large_trees_the_optimality_conditions_hold(spread):
    rng = np.random.default_rng(3)
    n = 20_000
    receiver = random_tree(n, rng, roots=5, spread=spread)
    height = rng.normal(0, 30, n)
    for node in range(n):
        if receiver[node] >= 0:
            height[node] += 0.9 * height[receiver[node]] + 1
    got = fall_downstream(receiver, height)
    inner = receiver >= 0
    step = got[inner] - got[receiver[inner]]
    assert (step >= 0).all()
    # multiplier of an edge: total change upstream of it; not negative, and zero where the step is not
    force = got - height
    for node in range(n - 1, -1, -1):
        if receiver[node] >= 0:
            force[receiver[node]] += force[node]
    assert np.abs(force[~inner]).max() < 1e-6
    assert force[inner].min() > -1e-6
    assert np.abs(force[inner] * step).max() < 1e-4
    assert (step == 0).sum() > 1000


def test_heights_that_fall_already_come_back_bit_by_bit():
    rng = np.random.default_rng(4)
    receiver = random_tree(300, rng)
    height = np.zeros(300)
    for node in range(1, 300):
        height[node] = (height[receiver[node]] if receiver[node] >= 0 else 0) + rng.choice([0.0, rng.random()])
    before = height.copy()
    np.testing.assert_array_equal(fall_downstream(receiver, height), height)
    height[150:] += np.where(np.arange(150, 300) == 299, -500, 0)
    fall_downstream(receiver, height)
    np.testing.assert_array_equal(height[:299], before[:299])  # the input is left alone
