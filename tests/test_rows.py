"""Rows of the sensitivity matrix against brute force, identities and special cases."""

from importlib import import_module
from itertools import pairwise

import numpy as np
import pytest
from trees import chain_network, network_from_tree, random_network

from fluvinv.inversion import age_nodes, make_grid, sensitivity
from fluvinv.inversion.uplift_grid import base_points
from fluvinv.streampower import travel_time

GAUSS_X, GAUSS_W = np.polynomial.legendre.leggauss(4)


def brute_force_row(network, tau, grid, node):
    """One row by quadrature along the path, edge by edge, split at every map line and age break."""
    row = np.zeros((grid.n_ages, grid.n_rows, grid.n_cols))
    base_x, base_y = base_points(network)
    i = node
    while i >= 0:
        below = network.receiver[i]
        start = (network.map_x[below], network.map_y[below]) if below >= 0 else (base_x[i], base_y[i])
        t0 = tau[below] if below >= 0 else 0.0
        u0, v0 = grid.in_grid_units(*start)
        u1, v1 = grid.in_grid_units(network.map_x[i], network.map_y[i])
        shares = [0.0, 1.0]
        for a, b in ((u0, u1), (v0, v1)):
            lines = np.arange(np.floor(min(a, b)), np.ceil(max(a, b)) + 1)
            shares += [(k - a) / (b - a) for k in lines if a != b and 0 < (k - a) / (b - a) < 1]
        if tau[i] > t0:
            cuts = (tau[node] - grid.ages - t0) / (tau[i] - t0)
            shares += [s for s in cuts if 0 < s < 1]
        shares = np.unique(shares)
        for s0, s1 in pairwise(shares):
            for g, w in zip(GAUSS_X, GAUSS_W, strict=True):
                s = 0.5 * (s0 + s1) + 0.5 * g * (s1 - s0)
                weight = 0.5 * w * (s1 - s0) * (tau[i] - t0)
                add_point(row, grid, u0 + s * (u1 - u0), v0 + s * (v1 - v0), tau[node] - t0 - s * (tau[i] - t0), weight)
        i = below
    return row[:, grid.place >= 0].ravel()


def add_point(row, grid, u, v, age, weight):
    col = min(max(int(np.floor(u)), 0), grid.n_cols - 2)
    line = min(max(int(np.floor(v)), 0), grid.n_rows - 2)
    age = min(max(age, 0.0), grid.ages[-1])
    step = min(int(np.searchsorted(grid.ages, age, side="right")) - 1, grid.n_ages - 2)
    fa = (age - grid.ages[step]) / (grid.ages[step + 1] - grid.ages[step])
    for da, wa in ((0, 1 - fa), (1, fa)):
        for dr, wr in ((0, 1 - (v - line)), (1, v - line)):
            for dc, wc in ((0, 1 - (u - col)), (1, u - col)):
                row[step + da, line + dr, col + dc] += weight * wa * wr * wc


def check_rows(network, tau, grid, nodes):
    G = sensitivity(network, tau, grid)
    assert G.shape == (network.n_nodes, grid.n_unknowns)
    assert G.data.min(initial=0.0) >= 0.0
    np.testing.assert_allclose(G.sum(axis=1), tau, rtol=1e-12, atol=0)
    for node in nodes:
        expected = brute_force_row(network, tau, grid, node)
        np.testing.assert_allclose(G[[node]].toarray().ravel(), expected, rtol=0, atol=1e-8 * tau.max())
    return G


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize(("spacing", "step", "share"), [(7e3, 2e5, 1.0), (2.3e3, 3e5, 0.4), (6e2, 5e5, 1.2)])
def test_rows_equal_brute_force(seed, spacing, step, share):
    """Age breaks, map lines, several outlets; a duration shorter than the longest travel time (share 0.4)."""
    network = random_network(250, seed)
    tau = travel_time(network, 1e-6, 0.5)
    grid = make_grid(network, spacing, age_nodes(step, share * tau.max()))
    check_rows(network, tau, grid, [0, 1, 40, 120, 200, 249])


def test_adjoint_identity():
    """<G u, w> = <u, G' w> on random vectors, G' being applied the way the solver applies it."""
    network = random_network(400, 5)
    tau = travel_time(network, 1e-6, 0.45)
    grid = make_grid(network, 5e3, age_nodes(3e5, tau.max()))
    G = sensitivity(network, tau, grid)
    rng = np.random.default_rng(1)
    u, w = rng.standard_normal(grid.n_unknowns), rng.standard_normal(network.n_nodes)
    assert (G @ u) @ w == pytest.approx(u @ (G.T @ w), rel=1e-12)


def test_node_on_a_map_line_and_edge_along_one():
    x = [500.0, 1000.0, 1000.0, 1000.0, 1500.0, 2000.0, 2500.0]
    y = [500.0, 1000.0, 1500.0, 2000.0, 2000.0, 2000.0, 2500.0]
    network = chain_network(x, y)
    tau = travel_time(network, 1e-6, 0.5)
    grid = make_grid(network, 1000.0, age_nodes(tau.max() / 3, tau.max()))
    check_rows(network, tau, grid, range(7))


def test_age_break_exactly_on_a_node():
    """Equal edges and an age step of two edges: every break of every second node falls on a node."""
    network = chain_network(np.arange(1, 13) * 700.0, np.full(12, 150.0), base=(0.0, 150.0))
    tau = travel_time(network, 1e-6, 0.5)
    grid = make_grid(network, 2000.0, 2 * tau[0] * np.arange(7))
    check_rows(network, tau, grid, range(12))


def test_path_that_leaves_a_map_cell_and_comes_back():
    x = [200.0, 900.0, 1300.0, 1300.0, 900.0, 300.0, 400.0]
    y = [200.0, 300.0, 400.0, 700.0, 800.0, 600.0, 900.0]
    network = chain_network(x, y, base=(100.0, 100.0))
    tau = travel_time(network, 1e-6, 0.5)
    grid = make_grid(network, 1000.0, age_nodes(tau.max() / 4, tau.max()))
    check_rows(network, tau, grid, range(7))


def test_edges_longer_than_map_cells():
    network = random_network(60, 3, step=5000.0)
    tau = travel_time(network, 1e-6, 0.5)
    grid = make_grid(network, 700.0, age_nodes(tau.max() / 5, tau.max()))
    check_rows(network, tau, grid, [0, 3, 30, 59])


def test_one_node_rivers_at_the_sea_and_inland():
    """A river of one node has one edge at the sea; at an outlet inland it is its own base and its row is empty."""
    network = network_from_tree([-1, -1], [1000.0, 5000.0], [0.0, 0.0], [0.0, 5000.0], [0.0, 0.0], [1e6, 1e6])
    tau = travel_time(network, 1e-6, 0.5)
    assert tau.tolist() == [1e6, 0.0]
    grid = make_grid(network, 2000.0, age_nodes(5e5, 1e6))
    G = check_rows(network, tau, grid, [0, 1])
    assert G[[1]].nnz == 0


def test_rows_are_the_same_in_chunks(monkeypatch):
    network = random_network(300, 8)
    tau = travel_time(network, 1e-6, 0.5)
    grid = make_grid(network, 4e3, age_nodes(3e5, tau.max()))
    whole = sensitivity(network, tau, grid)
    monkeypatch.setattr(import_module("fluvinv.inversion.sensitivity"), "_ROWS_AT_ONCE", 7)
    parts = sensitivity(network, tau, grid)
    assert (whole != parts).nnz == 0


def test_grid_snaps_to_multiples_of_its_spacing():
    """Grids of neighbours align: map nodes are whole multiples of the spacing."""
    network = random_network(100, 2)
    grid = make_grid(network, 3000.0, age_nodes(1e5, 1e6))
    assert np.all(grid.x % 3000.0 == 0)
    assert np.all(grid.y % 3000.0 == 0)
    assert grid.x[0] <= network.map_x.min()
    assert grid.x[-1] >= network.map_x.max()


def test_uniform_history_gives_heights_rate_times_travel_time():
    """z = U tau for a steady uniform rate (check value 1.12; Goren, Fox & Willett 2014; identity)."""
    network = random_network(300, 4)
    tau = travel_time(network, 2e-6, 0.45)
    grid = make_grid(network, 6e3, age_nodes(3e5, 0.7 * tau.max()))
    G = sensitivity(network, tau, grid)
    np.testing.assert_allclose(G @ np.full(grid.n_unknowns, 3e-4), 3e-4 * tau, rtol=1e-12)


def test_step_in_time_stands_at_one_height_in_every_tributary():
    """A knickpoint of a uniform step stands at U2 t in all tributaries, whatever their area.

    Check value 1.11 (Niemann et al. 2001; Whipple & Tucker 1999; from memory) and the profile of 1.12. The step
    is a ramp between two age nodes 1e4 yr apart.
    """
    network = random_network(400, 6)
    tau = travel_time(network, 1e-6, 0.5)
    since, width = 0.3 * tau.max(), 1e4
    ages = np.array([0.0, since - width / 2, since + width / 2, tau.max()])
    grid = make_grid(network, 5e3, ages)
    before, after = 1e-4, 4e-4
    rates = np.repeat([after, after, before, before], grid.n_places)
    z = sensitivity(network, tau, grid) @ rates
    inside = tau < since - width
    np.testing.assert_allclose(z[inside], after * tau[inside], rtol=1e-12)
    beyond = tau > since + width
    np.testing.assert_allclose(z[beyond] - before * (tau[beyond] - since), after * since, rtol=1e-9)


def test_superposition():
    """z[U1 + U2] = z[U1] + z[U2] (check value 1.19, identity)."""
    network = random_network(200, 9)
    tau = travel_time(network, 1e-6, 0.5)
    grid = make_grid(network, 5e3, age_nodes(2e5, tau.max()))
    G = sensitivity(network, tau, grid)
    u1, u2 = np.random.default_rng(0).uniform(0, 1e-3, (2, grid.n_unknowns))
    np.testing.assert_allclose(G @ (u1 + u2), G @ u1 + G @ u2, rtol=1e-12)


@pytest.mark.parametrize("a", [0.37, 4.0])
def test_erodibility_is_not_knowable_from_heights(a):
    """u_K(x, t) = a u(x, a t) with a = K/K0 fits as well, to 1e-10 (check value 1.18, Buckingham; identity)."""
    network = random_network(300, 11)
    tau0 = travel_time(network, 1e-6, 0.5)
    tau = travel_time(network, a * 1e-6, 0.5)
    ages = age_nodes(2e5, tau0.max())
    grid0, grid = make_grid(network, 5e3, ages), make_grid(network, 5e3, ages / a)
    u = np.random.default_rng(2).uniform(0, 1e-3, grid0.n_unknowns)
    heights0 = sensitivity(network, tau0, grid0) @ u
    heights = sensitivity(network, tau, grid) @ (a * u)
    np.testing.assert_allclose(heights, heights0, rtol=1e-10)


def test_stationary_rate_pattern_leaves_a_standing_break():
    """Slope ratio across a place where the rate jumps equals the ratio of rates (check value 1.17, identity).

    Royden & Perron 2013; Kirby & Whipple 2012 (from memory). Same area on both sides, uniform erodibility.
    """
    x = np.arange(1, 201) * 100.0
    network = chain_network(x, np.zeros(200))
    tau = travel_time(network, 1e-6, 0.5)
    grid = make_grid(network, 100.0, age_nodes(tau.max() / 2, tau.max()))
    east = grid.place_xy[:, 0] > 10_000.0
    rates = np.tile(np.where(east, 6e-4, 2e-4), grid.n_ages)
    z = sensitivity(network, tau, grid) @ rates
    slope = np.diff(z) / np.diff(x)
    assert slope[150] / slope[50] == pytest.approx(3.0, rel=1e-9)
