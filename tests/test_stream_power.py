"""Travel time, chi and the closed forms under Hack's law, against published solutions (check values 1.1 to 1.13).

The numbers of set H: K = 2e-5, m = 0.5, n = 1, U = 2e-4 m/yr, A = 6.69 x^1.67 m2, L = 100 km. x is measured from the
divide.
"""

from dataclasses import replace

import numpy as np
import pytest
from trees import chain_network, network_from_tree

from fluvinv.inversion import age_nodes, make_grid, sensitivity
from fluvinv.streampower import chi, travel_time
from fluvinv.streampower.analytic import HackRiver

SET_H = HackRiver(length=1e5, area_factor=6.69, area_power=1.67, erodibility=2e-5, area_exponent=0.5)
UPLIFT = 2e-4


def hack_chain(n_edges, river=SET_H, head=1e3):
    """The river as a chain of equal edges from the outlet at x = L up to x = head; nodes' x from the divide."""
    x = river.length - (river.length - head) / n_edges * np.arange(1, n_edges + 1)
    network = chain_network(river.length - x, np.zeros(n_edges))
    return replace(network, area=river.area(x)), x


def order_of_convergence(errors):
    """Order of the error for edges halved each time."""
    return np.log2(np.abs(errors[:-1]) / np.abs(errors[1:]))


@pytest.mark.parametrize("slope_exponent", [2 / 3, 1.0, 2.0])
def test_steady_slope_against_area(slope_exponent):
    """S = (U/K)^(1/n) A^(-m/n): concavity m/n and steepness (U/K)^(1/n) from a noise-free fit.

    Check value 1.1 (Howard & Kerby 1983; Whipple & Tucker 1999; from memory). The slope is taken from the heights,
    which are integrated independently of the formula for slopes.
    """
    river = replace(SET_H, slope_exponent=slope_exponent)
    x = np.geomspace(2e3, 9e4, 40)
    step = 1e-4 * x
    slope = (river.steady_height(x - step, UPLIFT) - river.steady_height(x + step, UPLIFT)) / (2 * step)
    power, factor = np.polyfit(np.log(river.area(x)), np.log(slope), 1)
    assert -power == pytest.approx(0.5 / slope_exponent, abs=1e-6)
    assert np.exp(factor) == pytest.approx((UPLIFT / 2e-5) ** (1 / slope_exponent), rel=1e-5)
    np.testing.assert_allclose(river.steady_slope(x, UPLIFT), slope, rtol=1e-6)


def test_slope_and_area_of_the_network_give_the_concavity():
    """Steady heights U tau along a chain of river nodes: log slope on log area returns m/n (check value 1.1).

    Along an edge the clock uses the upstream node's area, so slope and area belong together exactly.
    """
    network, _ = hack_chain(200)
    height = UPLIFT * travel_time(network, 2e-5, 0.5)
    slope = np.diff(height, prepend=0.0) / network.edge_length
    power, factor = np.polyfit(np.log(network.area), np.log(slope), 1)
    assert -power == pytest.approx(0.5, abs=1e-9)
    assert np.exp(factor) == pytest.approx(UPLIFT / 2e-5, rel=1e-9)


@pytest.mark.parametrize(("x", "height"), [(9e4, 2.6989529), (5e4, 16.9244318), (1e4, 49.5007171), (1e3, 83.3548340)])
def test_steady_profile_under_hack(x, height):
    """Heights of set H (check value 1.2; Whipple & Tucker 1999, from memory, numbers recomputed)."""
    assert SET_H.steady_height(x, UPLIFT) == pytest.approx(height, rel=1e-8)


def test_steady_profile_converges_with_the_edges():
    """U tau of the network tends to the closed form, in first order of the edge (check value 1.2)."""
    exact = SET_H.steady_height(1e3, UPLIFT)
    errors = np.array([UPLIFT * travel_time(hack_chain(n)[0], 2e-5, 0.5)[-1] - exact for n in (500, 1000, 2000, 4000)])
    assert np.all(errors > 0)  # the upstream node's area is the smallest of the edge
    np.testing.assert_allclose(order_of_convergence(errors), 1.0, atol=0.1)
    assert errors[-1] < 0.005 * exact


def test_degenerate_concavity():
    """h m/n = 1: z = U/K ka^-m ln(L/x), and nothing is divided by zero (check value 1.3; identity)."""
    river = HackRiver(1e5, 6.69, 2.0, 2e-5, 0.5)
    x = np.array([1e3, 2e4, 9e4])
    exact = 10.0 * 6.69**-0.5 * np.log(1e5 / x)
    np.testing.assert_allclose(river.steady_height(x, UPLIFT), exact, rtol=1e-14)
    network, at = hack_chain(4000, river)
    height = UPLIFT * travel_time(network, 2e-5, 0.5)
    np.testing.assert_allclose(height[99::100], river.steady_height(at[99::100], UPLIFT), rtol=0.01)


@pytest.mark.parametrize("area_power", [2.0 - 1e-7, 2.0 + 1e-7])
def test_degenerate_concavity_is_the_limit(area_power):
    """Close to h m/n = 1 the general form gives the logarithm (check value 1.3; identity)."""
    near, at = (HackRiver(1e5, 6.69, h, 2e-5, 0.5) for h in (area_power, 2.0))
    assert near.steady_height(1e3, UPLIFT) == pytest.approx(float(at.steady_height(1e3, UPLIFT)), rel=1e-5)


@pytest.mark.parametrize(("x", "value"), [(5e4, 1692.44318), (1e4, 4950.07171), (1e3, 8335.48340)])
def test_chi_under_hack(x, value):
    """Chi of set H with A0 = 1 km2 (check value 1.4; Perron & Royden 2013, doi 10.1002/esp.3302; seen)."""
    assert SET_H.chi(x, reference_area=1e6) == pytest.approx(value, rel=1e-8)


def test_chi_converges_with_the_edges():
    """Chi of the network at three places tends to set H in first order (check value 1.4)."""
    places = np.array([5e4, 1e4, 1e3])
    exact = np.array([1692.44318, 4950.07171, 8335.48340])
    errors = []
    for n_edges in (990, 1980, 3960):  # edges of 100, 50 and 25 m: nodes at all three places
        network, x = hack_chain(n_edges)
        at = [int(np.argmin(np.abs(x - place))) for place in places]
        np.testing.assert_allclose(x[at], places, rtol=1e-12)
        errors.append(chi(network, 0.5, 1e6)[at] - exact)
    np.testing.assert_allclose(order_of_convergence(np.array(errors)), 1.0, atol=0.1)
    np.testing.assert_allclose(errors[-1] / exact, 0.0, atol=0.01)


def test_steady_profile_is_straight_in_chi():
    """dz/dchi = (U/(K A0^m))^(1/n) = 0.01 for set H with A0 = 1 km2 (check value 1.4; identity)."""
    network, _ = hack_chain(300)
    height = UPLIFT * travel_time(network, 2e-5, 0.5)
    np.testing.assert_allclose(height / chi(network, 0.5, 1e6), 0.01, rtol=1e-12)
    x = np.geomspace(1e3, 9e4, 9)
    np.testing.assert_allclose(SET_H.steady_height(x, UPLIFT) / SET_H.chi(x, 1e6), 0.01, rtol=1e-12)


def two_branches(step=500.0):
    """A trunk that forks into a long and a short branch of unlike areas, with the indices of both branches."""
    n_trunk, n_long, n_short = 20, 60, 25
    receiver = np.arange(n_trunk + n_long + n_short) - 1
    receiver[n_trunk + n_long] = n_trunk - 1
    x = np.concatenate([np.arange(n_trunk), np.arange(n_long) + n_trunk, np.arange(n_short) + n_trunk]) * step
    y = np.zeros(x.size)
    y[n_trunk + n_long :] = -step * np.arange(1, n_short + 1)
    area = np.concatenate(
        [np.linspace(9e8, 6e8, n_trunk), np.geomspace(4.5e8, 2e6, n_long), np.geomspace(1.2e8, 1e6, n_short)]
    )
    zero = np.zeros(x.size)
    network = network_from_tree(receiver, x, y, zero - step, zero, area)
    on_short = np.flatnonzero(network.map_y < 0)
    on_long = np.flatnonzero((network.map_y == 0) & (network.map_x >= n_trunk * step))
    return network, on_long, on_short


def test_tributaries_are_collinear_in_chi():
    """In a steady state two branches lie on one line in chi, far apart as they are in distance.

    Check value 1.4 (Perron & Royden 2013; seen). With the wrong concavity they part.
    """
    network, on_long, on_short = two_branches()
    height = 3e-4 * travel_time(network, 2e-6, 0.45)

    def gap(coordinate):
        """Largest difference in height between the branches at one value of the coordinate, over the relief."""
        inside = coordinate[on_short] < coordinate[on_long].max()
        other = np.interp(coordinate[on_short][inside], coordinate[on_long], height[on_long])
        return np.abs(other - height[on_short][inside])[1:].max() / height.max()

    assert gap(chi(network, 0.45)) < 1e-12
    assert gap(chi(network, 0.25)) > 0.05
    assert gap(network.distance) > 0.1


def test_reference_area_does_not_touch_the_profile():
    """chi A0^(-m/n) and so z(chi) are the same whatever A0 (check value 1.5; identity)."""
    network, _, _ = two_branches()
    reduced = [chi(network, 0.45, a0) * a0**-0.45 for a0 in (1.0, 1e6, 3.7e8)]
    np.testing.assert_allclose(reduced[1], reduced[0], rtol=1e-13)
    np.testing.assert_allclose(reduced[2], reduced[0], rtol=1e-13)
    closed = [SET_H.chi(2e4, a0) * a0**-0.5 for a0 in (1.0, 1e6)]
    assert closed[1] == pytest.approx(closed[0], rel=1e-14)


def test_signals_travel_at_the_kinematic_celerity():
    """dx/dt = K A^m, whatever the slope (check value 1.6; Rosenbloom & Anderson 1994, from memory).

    The speed is read off the travel times of the network and, for the closed form, off a finite difference.
    """
    network, _, _ = two_branches()
    tau = travel_time(network, 2e-6, 0.45)
    below = np.where(network.receiver >= 0, tau[network.receiver], 0.0)
    np.testing.assert_allclose(network.edge_length / (tau - below), 2e-6 * network.area**0.45, rtol=1e-10)
    x, step = np.array([2e3, 2e4, 8e4]), 1.0
    speed = 2 * step / (SET_H.travel_time(x - step) - SET_H.travel_time(x + step))
    np.testing.assert_allclose(speed, 2e-5 * SET_H.area(x) ** 0.5, rtol=1e-6)


def test_knickpoint_of_a_step_stands_at_one_height():
    """U2 t above the outlet in every tributary, where chi = K A0^m t (check value 1.11).

    Niemann et al. 2001; Whipple & Tucker 1999 (from memory; identity). Two rivers of unlike size.
    """
    before, after, since = 1e-4, 4e-4, 6e4
    for river in (SET_H, replace(SET_H, length=4e4, area_factor=2.0)):
        x = np.geomspace(200.0, 0.999 * river.length, 400_000)
        height = river.height_after_step(x, before, after, since)
        slope = -np.gradient(height, x)
        steepness = slope * river.area(x) ** 0.5
        knick = np.argmin(np.abs(steepness - 0.5 * (before + after) / 2e-5))
        assert height[knick] == pytest.approx(after * since, rel=1e-3)
        assert river.chi(x[knick]) == pytest.approx(2e-5 * since, rel=1e-3)
        np.testing.assert_allclose(steepness[knick - 20_000], before / 2e-5, rtol=1e-4)
        np.testing.assert_allclose(steepness[knick + 20_000], after / 2e-5, rtol=1e-4)


def test_step_in_time_through_the_rows():
    """The rows of a chain of Hack's law reproduce the closed form after a step (check values 1.11 and 1.12).

    The step is a ramp of 100 yr between two age nodes; the rest is the clock's first order in the edge.
    """
    network, x = hack_chain(4000)
    tau = travel_time(network, 2e-5, 0.5)
    ages = np.array([0.0, 6e4 - 50, 6e4 + 50, tau.max()])
    grid = make_grid(network, 2e4, ages)
    height = sensitivity(network, tau, grid) @ np.repeat([4e-4, 4e-4, 1e-4, 1e-4], grid.n_places)
    np.testing.assert_allclose(height, SET_H.height_after_step(x, 1e-4, 4e-4, 6e4), rtol=0.006)


@pytest.mark.parametrize(("x", "tau"), [(5e4, 84622.159), (1e4, 247503.585), (1e3, 416774.170)])
def test_travel_time_under_hack(x, tau):
    """Travel times of set H (check values 1.12 and 1.13); U tau is the steady height.

    Pritchard et al. 2009; Goren, Fox & Willett 2014 (seen; identity). The last is the response time of the channel
    (Whipple & Tucker 1999, from memory, number recomputed).
    """
    assert SET_H.travel_time(x) == pytest.approx(tau, rel=1e-8)
    assert UPLIFT * SET_H.travel_time(x) == pytest.approx(float(SET_H.steady_height(x, UPLIFT)), rel=1e-14)


def test_response_time_converges_with_the_edges():
    """The network's longest travel time tends to T of set H, 416774.170 yr, in first order (check value 1.13)."""
    errors = np.array([travel_time(hack_chain(n)[0], 2e-5, 0.5)[-1] - 416774.170 for n in (990, 1980, 3960)])
    np.testing.assert_allclose(order_of_convergence(errors), 1.0, atol=0.1)
    assert abs(errors[-1]) < 0.005 * 416774.170


def test_row_sums_are_the_travel_times_of_set_h():
    """Row sums of G equal tau to 1e-12, here with the areas of set H (check value 1.12; identity)."""
    network, _ = hack_chain(990)
    tau = travel_time(network, 2e-5, 0.5)
    grid = make_grid(network, 1.7e4, age_nodes(5e4, tau.max()))
    np.testing.assert_allclose(sensitivity(network, tau, grid).sum(axis=1), tau, rtol=1e-12)


def test_erodibility_scales_the_clock():
    """tau is inversely proportional to K, and tau = chi / (K A0^m) (check values 1.11 and 1.18; identity)."""
    network, _, _ = two_branches()
    tau = travel_time(network, 2e-6, 0.45)
    np.testing.assert_allclose(travel_time(network, 7e-6, 0.45), tau * 2e-6 / 7e-6, rtol=1e-13)
    np.testing.assert_allclose(chi(network, 0.45, 1e6) / (2e-6 * 1e6**0.45), tau, rtol=1e-13)


def test_outlet_inland_is_the_base():
    """Where the outlet is its own base point, its travel time and chi are 0 and the next node's are one edge's."""
    network = chain_network([0.0, 1000.0, 2000.0], [0.0, 0.0, 0.0], area=1e8)
    np.testing.assert_allclose(travel_time(network, 1e-5, 0.5), [0.0, 1e4, 2e4], rtol=1e-14)
    np.testing.assert_allclose(chi(network, 0.5, 1e6), [0.0, 100.0, 200.0], rtol=1e-14)


def test_closed_travel_time_needs_slope_exponent_one():
    with pytest.raises(ValueError, match="slope exponent 1"):
        replace(SET_H, slope_exponent=2.0).travel_time(1e4)
