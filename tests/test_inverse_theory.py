"""The spectral solver against published and closed-form problems of inverse theory."""

import numpy as np
import pytest
from scipy.optimize import lsq_linear
from scipy.sparse.linalg import lsmr, lsqr
from scipy.stats import truncnorm

from fluvinv.inversion.choose import curvature, l_curve
from fluvinv.inversion.nonnegative import interval_above_zero, nonnegative_least_squares
from fluvinv.inversion.prior import FieldPrior
from fluvinv.inversion.solve import Spectrum


def plain(A, b) -> Spectrum:
    """Problem min |A x - b|^2 + d^2 |x|^2 in the solver's terms: unit prior, no background."""
    A, b = np.asarray(A, float), np.asarray(b, float)
    values, vectors = np.linalg.eigh(A.T @ A)
    n = A.shape[1]
    return Spectrum(
        prior=FieldPrior(np.eye(n), np.eye(1), np.eye(n), np.eye(1), np.arange(n)),
        values=np.maximum(values[::-1], 0),
        vectors=vectors[:, ::-1],
        loads=vectors[:, ::-1].T @ (A.T @ b),
        background_row=np.zeros(n),
        background_rate=0.0,
        tau_squared=1.0,
        y_squared=float(b @ b),
        n_rows=b.size,
        method="dense",
    )


SMALL_A, SMALL_B = [[1, 0], [1, 1], [0, 1]], [1, 3, 2]


def test_small_tikhonov_by_hand():
    """Check value 4.2 (identity): x = (7/8, 11/8), trace of the resolution 5/4."""
    problem = plain(SMALL_A, SMALL_B)
    x, _ = problem.solution(1.0)
    np.testing.assert_allclose(x, [7 / 8, 11 / 8], rtol=1e-14)
    assert problem.effective_parameters(1.0) - 1 == pytest.approx(5 / 4, rel=1e-14)
    residual = np.asarray(SMALL_A) @ x - SMALL_B
    assert problem.misfit(1.0) == pytest.approx(residual @ residual, rel=1e-13)


@pytest.mark.parametrize("damp", [1e-2, 0.3, 4.0])
def test_damped_equals_augmented_least_squares(damp):
    """Check value 4.1 (Paige & Saunders 1982; SciPy's documentation; seen): damp is d, not d^2."""
    rng = np.random.default_rng(3)
    A, b = rng.standard_normal((30, 12)), rng.standard_normal(30)
    x, _ = plain(A, b).solution(damp)
    augmented = np.linalg.lstsq(np.vstack([A, damp * np.eye(12)]), np.r_[b, np.zeros(12)], rcond=None)[0]
    np.testing.assert_allclose(x, augmented, rtol=1e-10)
    for solver in (lsqr(A, b, damp=damp, atol=1e-14, btol=1e-14)[0], lsmr(A, b, damp=damp, atol=1e-14, btol=1e-14)[0]):
        np.testing.assert_allclose(x, solver, rtol=1e-8)


def test_filter_factors_and_effective_parameters():
    """Check value 4.3 (Hansen 1998; Hastie & Tibshirani; seen): s = (2, 1, 0.5), d = 0.5."""
    problem = plain(np.diag([2.0, 1.0, 0.5]), np.ones(3))
    np.testing.assert_allclose(problem.filter(0.5), [16 / 17, 4 / 5, 1 / 2], rtol=1e-14)
    assert problem.effective_parameters(0.5) - 1 == pytest.approx(2.2411764706, abs=1e-10)


def test_limits_of_the_resolution():
    """Check value 4.4 (Menke; Aster et al.; from memory): identity without damping, nothing with much of it."""
    rng = np.random.default_rng(0)
    problem = plain(rng.standard_normal((20, 6)), rng.standard_normal(20))
    np.testing.assert_allclose(problem.filter(1e-9), np.ones(6), rtol=1e-12)
    assert problem.filter(1e9).max() < 1e-12
    deficient = plain(np.outer([1.0, 2.0, 3.0], [1.0, 1.0]), [1.0, 2.0, 3.0])
    resolution = deficient.vectors * deficient.filter(1e-5) @ deficient.vectors.T
    np.testing.assert_allclose(resolution, np.full((2, 2), 0.5), atol=1e-9)  # the projector V V'


def test_curvature_equals_finite_differences():
    """Check value 4.7 (Hansen 1992; Hansen & O'Leary 1993; from memory)."""
    A, b = shaw(20)[:2]
    problem = plain(A, b + 1e-3 * np.random.default_rng(4).standard_normal(20))
    for weight in (1e-3, 1e-2, 0.3):
        h = 1e-2
        logs = np.log(weight) + h * np.arange(-1, 2)
        px = 0.5 * np.log([problem.misfit(w) for w in np.exp(logs)])
        py = 0.5 * np.log([problem.roughness(w) for w in np.exp(logs)])
        dx, dy = (px[2] - px[0]) / (2 * h), (py[2] - py[0]) / (2 * h)
        ddx, ddy = (px[2] - 2 * px[1] + px[0]) / h**2, (py[2] - 2 * py[1] + py[0]) / h**2
        expected = (dx * ddy - ddx * dy) / (dx**2 + dy**2) ** 1.5
        assert curvature(problem, weight) == pytest.approx(expected, rel=5e-3)


def shaw(n):
    """Shaw's (1972) image problem by the midpoint rule, constants as Hansen (1994) gives them."""
    s = (np.arange(n) + 0.5) * np.pi / n - np.pi / 2
    u = np.pi * (np.sin(s)[:, None] + np.sin(s)[None, :])
    A = np.pi / n * (np.cos(s)[:, None] + np.cos(s)[None, :]) ** 2 * np.sinc(u / np.pi) ** 2
    x = 2 * np.exp(-6 * (s - 0.8) ** 2) + np.exp(-2 * (s + 0.5) ** 2)
    return A, A @ x, x


def test_shaw_singular_values_and_recovery():
    """Check value 4.8 (Shaw 1972; from memory; identity)."""
    A, b, x = shaw(20)
    sigma = np.linalg.svd(A, compute_uv=False)
    expected = [2.99336588, 1.85689824, 1.03431452, 0.39368382, 0.05895182, 0.03463914]
    np.testing.assert_allclose(sigma[:6], expected, rtol=1e-7)
    assert np.linalg.norm(x) == pytest.approx(4.46419414, rel=1e-8)
    problem = plain(A, b + 1e-3 * np.random.default_rng(1).standard_normal(20))
    np.testing.assert_allclose(np.sqrt(problem.values[:6]), expected, rtol=1e-6)
    found, _ = problem.solution(l_curve(problem).corner)
    assert np.linalg.norm(found - x) / np.linalg.norm(x) < 0.2
    noisy = b + 1e-3 * np.random.default_rng(1).standard_normal(20)
    assert np.linalg.norm(np.linalg.solve(A, noisy) - x) / np.linalg.norm(x) > 1e3


def phillips(n):
    """Phillips's (1962) problem, Galerkin-free: midpoint rule on [-6, 6]."""
    h = 12 / n
    s = -6 + h * (np.arange(n) + 0.5)

    def bump(t):
        return np.where(np.abs(t) < 3, 1 + np.cos(np.pi * t / 3), 0.0)

    t = np.abs(s)
    right = (6 - t) * (1 + 0.5 * np.cos(np.pi * s / 3)) + 9 / (2 * np.pi) * np.sin(np.pi * t / 3)
    return h * bump(s[:, None] - s[None, :]), right, bump(s)


def test_phillips_quadrature_and_recovery():
    """Check value 4.9 (Phillips 1962; from memory; self-checking): quadrature of K f equals the right side."""
    errors = [np.abs(A @ f - g).max() for A, g, f in (phillips(60), phillips(120))]
    assert errors[0] / errors[1] > 3.5  # O(h^2)
    A, g, f = phillips(120)
    problem = plain(A, g + 0.01 * np.random.default_rng(2).standard_normal(120))
    found, _ = problem.solution(l_curve(problem).corner)
    assert np.linalg.norm(found - f) / np.linalg.norm(f) < 0.2


def test_non_negative_least_squares_worked_example():
    """Check value 4.16 (algorithm of Lawson & Hanson 1974, ch. 23; widely reprinted example; seen)."""
    C = np.array([[0.0372, 0.2868], [0.6861, 0.7071], [0.6233, 0.6245], [0.6344, 0.6170]])
    d = np.array([0.8587, 0.1781, 0.0747, 0.8405])
    x = nonnegative_least_squares(C.T @ C, C.T @ d)
    np.testing.assert_allclose(x, [0.0, 0.6929], atol=1e-4)
    assert np.linalg.norm(C @ x - d) == pytest.approx(0.9119, abs=1e-4)


@pytest.mark.parametrize("seed", range(8))
def test_non_negative_least_squares_against_a_library(seed):
    """Optimality conditions hold, and SciPy's bounded solver finds the same point."""
    rng = np.random.default_rng(seed)
    A, b = rng.standard_normal((40, 25)), rng.standard_normal(40)
    x = nonnegative_least_squares(A.T @ A, A.T @ b)
    pull = A.T @ (A @ x - b)
    assert x.min() >= 0
    assert pull.min() > -1e-9
    assert abs(x @ pull) < 1e-9
    np.testing.assert_allclose(x, lsq_linear(A, b, bounds=(0, np.inf), method="bvls", tol=1e-14).x, atol=1e-8)


@pytest.mark.parametrize("rate", [0.0, 0.3, 1.0, 1.9, 2.5, 40.0])
def test_interval_above_zero_holds_its_share(rate):
    """Against SciPy's truncated normal: 95 % inside, ends of equal density, the rate between them."""
    low, high = (float(end) for end in interval_above_zero(np.array(rate), np.array(1.0)))
    cut = truncnorm(-rate, np.inf, loc=rate)
    assert cut.cdf(high) - cut.cdf(low) == pytest.approx(0.95, abs=1e-9)
    assert 0 <= low <= rate < high
    assert low == 0 or cut.pdf(low) == pytest.approx(cut.pdf(high), rel=1e-6)
