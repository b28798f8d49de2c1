"""Histories are recovered from landscapes grown by the independent maker."""

import numpy as np
import pyproj
import pytest

from fluvinv.inversion import (
    InversionOptions,
    age_nodes,
    compare,
    history_at_nodes,
    invert,
    make_grid,
    suggest_duration,
    suggest_ranges,
    suggest_spacing,
    suggest_step,
)
from fluvinv.landscape import grow_landscape, island_mask, sample_history, steady, tilt_with_step, two_domes
from fluvinv.landscape._kernels import incise
from fluvinv.streampower import travel_time
from fluvinv.terrain import build_network
from fluvinv.terrain import make_grid as make_dem

K, M, DURATION, SHAPE = 1.8e-6, 0.45, 16e6, (90, 120)
DOMES = two_domes((38e3, 48e3), (84e3, 38e3), radius_m=24e3, duration_yr=14e6)
TILT = tilt_with_step(15e3, 105e3, duration_yr=14e6)


def grow(uplift, seed, **options):
    return grow_landscape(
        island_mask(*SHAPE, seed), 1000.0, uplift, erodibility=K, area_exponent=M, duration_yr=DURATION, seed=seed,
        spin_up_yr=4e7, **options,
    )  # fmt: skip


def rivers_of(landscape):
    dem = make_dem(landscape.height.astype(np.float32), landscape.x, landscape.y, pyproj.CRS(32631))
    return build_network(dem, channel_area=4e6)[0]


def known_at(grid, uplift):
    x, y = np.arange(0, 121e3, 4e3), np.arange(90e3, -1, -3e3)
    ages = np.arange(0, DURATION + 1, 5e5)
    return history_at_nodes(x, y, ages, sample_history(uplift, x, y, ages), grid.place_xy, grid.ages)


def stationary_heights(network, tau, uplift, step=2e4):
    """Heights that a history leaves on a network that never changes, by the maker's implicit solver in time."""
    receiver = np.where(network.receiver < 0, network.n_nodes, network.receiver).astype(np.int64)
    below = np.append(tau, 0.0)[receiver]
    crossing = np.append(tau - below, 1.0)
    order = np.arange(network.n_nodes, dtype=np.int64)
    height = np.zeros(network.n_nodes + 1)
    ages = np.arange(DURATION + 4e7, 0, -step) - step
    for age in ages:
        rate = np.append(uplift(network.x, network.y, min(age, DURATION)), 0.0)
        incise(order, np.append(receiver, -1), crossing, rate * step, step, height)
    return height[:-1]


@pytest.fixture(scope="module")
def island():
    """A river network to grow stationary histories on."""
    return rivers_of(grow(steady(1.5e-4), 4))


@pytest.mark.parametrize("uplift", [DOMES, TILT], ids=["domes", "tilt with a step"])
def test_skill_on_stationary_drainage_with_numbers_given(island, uplift):
    """Drainage as it is today for all time, range, spread and noise given: skill at least 0.9."""
    network = island
    tau = travel_time(network, K, M)
    noise = 5.0
    heights = stationary_heights(network, tau, uplift) + noise * np.random.default_rng(3).standard_normal(tau.size)
    object.__setattr__(network, "height", heights)
    object.__setattr__(network, "base_level", np.zeros(network.n_basins))
    grid = make_grid(network, 8e3, age_nodes(8e5, tau.max()))
    known = known_at(grid, uplift)
    options = InversionOptions(50e3, 6e6, "fixed", float(np.nanstd(known)), noise)
    found = compare(invert(network, tau, grid, options), known)
    assert found.skill >= 0.9
    assert found.correlation > 0.95


@pytest.mark.parametrize(("uplift", "seed"), [(DOMES, 5), (TILT, 6)], ids=["domes", "tilt with a step"])
def test_correlation_on_free_drainage_with_nothing_given(uplift, seed):
    """Drainage free to move, DEM noise, L-curve and defaults alone: correlation above 0.80, honest intervals."""
    network = rivers_of(grow(uplift, seed, noise_m=5.0))
    tau = travel_time(network, K, M)
    spacing = suggest_spacing(float(network.area[network.outlet].sum()))
    duration = suggest_duration(tau)
    grid = make_grid(network, spacing, age_nodes(suggest_step(duration), duration))
    result = invert(network, tau, grid, InversionOptions(*suggest_ranges(network, tau)))
    found = compare(result, known_at(grid, uplift))
    assert found.correlation > 0.80
    assert found.skill > 0.7
    assert found.cover >= 0.85
    assert result.curve.clear
