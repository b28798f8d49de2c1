"""The landscape maker against closed forms, published laws and brute force."""

import numpy as np
import pytest

from fluvinv.errors import InputError, NumericalError, SettingsError
from fluvinv.landscape import _kernels as kernels
from fluvinv.landscape import (
    demo_island,
    grow_landscape,
    island_mask,
    sample_history,
    steady,
    tilt_with_step,
    two_domes,
)

K, M = 2e-6, 0.45
CELL = 1000.0


def small_island(uplift=None, n=48, **changes):
    options = {
        "erodibility": K,
        "area_exponent": M,
        "duration_yr": 1e7,
        "step_yr": 1e5,
        "seed": 3,
        "spin_up_yr": 1.2e7,
    }
    return grow_landscape(island_mask(n, n + 6, 5), CELL, uplift or steady(2e-4), **(options | changes))


def neighbours(n_cols):
    step = np.array([1, -1, n_cols, -n_cols, n_cols + 1, n_cols - 1, -n_cols + 1, -n_cols - 1])
    return step, CELL * np.array([1.0] * 4 + [np.sqrt(2.0)] * 4)


def land_drop(land):
    """Height lost along each land cell's edge; the sea counts as 0 m."""
    height = np.maximum(land.height, 0.0).ravel()
    cells = np.flatnonzero(land.island)
    return cells, height[cells] - height[land.receiver.ravel()[cells]]


def flooded(height, is_land):
    n_cells = height.size
    level, entry = np.full(n_cells, np.nan), np.full(n_cells, -1)
    order = np.full(np.count_nonzero(is_land), -1)
    kernels.flood(
        height.ravel(), is_land.ravel(), neighbours(height.shape[1])[0],
        np.empty(n_cells, dtype=np.int64), np.full(n_cells, -1), level, entry, order,
    )  # fmt: skip
    return level, entry, order


@pytest.mark.parametrize("seed", range(8))
def test_flood_is_the_lowest_pass_on_any_way_to_the_sea(seed):
    # Unique result of priority flooding: Barnes, Lehman & Mulla 2014 (memory; identity), check value 3.7.
    rng = np.random.default_rng(seed)
    height = rng.integers(1, 12, size=(17, 21)).astype(float)
    is_land = np.pad(rng.uniform(size=(15, 19)) < 0.93, 1)
    level, entry, order = flooded(height, is_land)

    brute = np.where(is_land, np.inf, 0.0)
    for _ in range(brute.size):
        around = np.min(
            [np.roll(brute, (i, j), (0, 1)) for i in (-1, 0, 1) for j in (-1, 0, 1) if (i, j) != (0, 0)], axis=0
        )
        brute = np.where(is_land, np.minimum(brute, np.maximum(height, around)), 0.0)
    land = is_land.ravel()
    assert np.array_equal(level[land], brute.ravel()[land])
    assert np.array_equal(np.sort(order), np.flatnonzero(land))
    turn = np.full(land.size, -1)
    turn[order] = np.arange(order.size)
    assert (turn[entry[land]] < turn[land]).all()
    assert (np.diff(level[order]) >= 0).all()


@pytest.mark.parametrize(("south_east", "expected_k"), [(8.7, 0), (8.5, 4)])
def test_steepest_descent_is_drop_over_distance(south_east, expected_k):
    # Jenson & Domingue 1988 (memory), check value 3.3: 10 to E 9 and SE 8.7 goes E, SE 8.5 goes SE.
    level = np.full(9, 20.0)
    level[[4, 5, 8]] = 10.0, 9.0, south_east
    step, reach = neighbours(3)
    receiver, edge = np.full(9, -1), np.zeros(9)
    kernels.descend(level, np.full(9, 4), np.array([4]), step, reach, receiver, edge)
    assert receiver[4] == 4 + step[expected_k]
    assert edge[4] == reach[expected_k]


def test_lake_floor_is_lifted_but_neither_cut_nor_filled():
    receiver = np.array([-1, 0, 1, 2])
    height = np.array([0.0, 50.0, 20.0, 20.0])  # sea, sill, lake floor, a slope at the lake's level
    crossing_time = np.full(4, 1e6)
    kernels.incise(np.array([1, 2, 3]), receiver, crossing_time, np.full(4, 10.0), 1e6, height)
    # The sill falls to half of 60 m; the floor at 30 m is then level with it and stays, like what drains there.
    assert np.array_equal(height, [0.0, 30.0, 30.0, 30.0])
    height = np.array([0.0, 500.0, 20.0, 20.0])
    kernels.incise(np.array([1, 2, 3]), receiver, crossing_time, np.full(4, 10.0), 1e6, height)
    assert np.array_equal(height, [0.0, 255.0, 30.0, 30.0])


@pytest.mark.parametrize("free_drainage", [True, False])
def test_steady_slope_area_law_with_a_rock_boundary(free_drainage):
    # S = (U/K) A^-m: Howard & Kerby 1983 (memory), check value 1.1. Across a change of rock the slopes are
    # as 1/K at equal area: Kirby & Whipple 2012 (memory), check value 1.17.
    factor = np.ones((48, 54))
    factor[:, 27:] = 0.5
    land = small_island(
        steady(2e-4), duration_yr=1e8, spin_up_yr=0.0, erodibility_factor=factor, free_drainage=free_drainage
    )
    cells, drop = land_drop(land)
    slope = drop / land.edge_m.ravel()[cells]
    law = 2e-4 / (K * factor.ravel()[cells]) * land.area_m2.ravel()[cells] ** -M
    assert np.abs(slope / law - 1).max() < 1e-6
    height, time = land.height.ravel()[cells], land.travel_time_yr.ravel()[cells]
    assert height == pytest.approx(2e-4 * time, rel=1e-6)


def test_step_in_uplift_stands_at_one_height_in_all_tributaries():
    # Knickpoint at height U2 t above the outlet whatever the area: Niemann et al. 2001 (memory; identity),
    # check value 1.11. Above it z = U2 t + U1 (tau - t), below it z = U2 tau.
    older, newer, since = 1e-4, 3e-4, 2.5e6
    land = small_island(
        lambda x, _y, age: np.full(x.shape, newer if age < since else older),
        n=70, free_drainage=False, duration_yr=1.2e7, step_yr=2e4, erodibility=7e-5, area_exponent=0.2,
    )  # fmt: skip
    height, time, spread = (a[land.island] for a in (land.height, land.travel_time_yr, land.spread_yr))
    above = time > since + 3 * spread
    assert above.sum() > 100
    knickpoint = newer * (height[above] - older * time[above]) / (newer - older)
    assert knickpoint == pytest.approx(newer * since, rel=1e-4)
    # The scheme smooths over times of mean tau and standard deviation s. A broken line, steeper below, smoothed
    # so comes out lower (Jensen), by no more than (U2 - U1) s / 2; a bell would give (U2 - U1) s / sqrt(2 pi).
    sharp = np.where(time < since, newer * time, newer * since + older * (time - since))
    short = (sharp - height) / ((newer - older) * spread)
    assert short.min() > -1e-9
    assert 0.3 < short.max() < 0.5


def path_integral(land, uplift, cell, n_parts=400):
    """Uplift gathered on the way up to a cell by a dense quadrature along its path."""
    path = [cell]
    while land.island.ravel()[path[-1]]:
        path.append(land.receiver.ravel()[path[-1]])
    path = path[::-1]
    row, col = np.unravel_index(path, land.height.shape)
    time = land.travel_time_yr.ravel()[path]
    at = (np.arange(n_parts) + 0.5) / n_parts * time[-1]
    x, y = np.interp(at, time, land.x[col]), np.interp(at, time, land.y[row])
    rates = [uplift(np.array([a]), np.array([b]), time[-1] - s)[0] for a, b, s in zip(x, y, at, strict=True)]
    return np.mean(rates) * time[-1]


def test_heights_are_path_integrals_of_the_history_when_drainage_is_frozen():
    # z(x) is the integral of U along the way of the signal: Pritchard et al. 2009; Goren, Fox & Willett 2014
    # (memory; identity), check value 1.12.
    uplift = two_domes((15e3, 35e3), (40e3, 20e3), radius_m=12e3, duration_yr=1e7, background=5e-5, peak=2e-4)
    land = small_island(uplift, n=60, free_drainage=False, step_yr=5e4)
    cells = np.flatnonzero(land.island & (land.area_m2 > 3e6))[::5]
    told = np.array([path_integral(land, uplift, cell) for cell in cells])
    misfit = land.height.ravel()[cells] - told
    assert np.sqrt(np.mean(misfit**2)) < 0.04 * told.std()


def test_first_order_in_time_against_the_closed_form_of_one_cell():
    # dz/dt = a + b t - z / T, z(0) = a T: z = T (a + b t) - b T^2 + b T^2 exp(-t / T), t forward.
    island = np.zeros((3, 3), dtype=bool)
    island[1, 1] = True
    crossing = CELL / (K * (CELL**2) ** M)
    start, growth, duration = 1e-4, 5e-11, 3e6
    exact = crossing * (start + growth * duration) - growth * crossing**2 * (1 - np.exp(-duration / crossing))

    def error(step):
        land = grow_landscape(
            island, CELL, lambda x, _y, age: np.full(x.shape, start + growth * (duration - age)),
            erodibility=K, area_exponent=M, duration_yr=duration, step_yr=step, free_drainage=False,
        )  # fmt: skip
        assert land.travel_time_yr[1, 1] == pytest.approx(crossing, rel=1e-12)
        return land.height[1, 1] - exact

    errors = np.array([error(step) for step in (2e5, 1e5, 5e4, 2.5e4)])
    assert errors[:-1] / errors[1:] == pytest.approx(2.0, abs=0.1)
    assert abs(errors[-1]) < 1e-2 * exact


def test_first_order_in_time_on_an_island_and_substeps_are_steps():
    uplift = two_domes((15e3, 35e3), (40e3, 20e3), radius_m=12e3, duration_yr=1e7)

    def heights(step, n_substeps=1):
        return small_island(uplift, free_drainage=False, step_yr=step, n_substeps=n_substeps, spin_up_yr=0.0).height

    coarse, middle, fine = heights(2e5), heights(1e5), heights(5e4)
    assert np.linalg.norm(coarse - middle) / np.linalg.norm(middle - fine) == pytest.approx(2.0, abs=0.1)
    assert np.array_equal(heights(2e5, n_substeps=4), fine)


def test_same_land_for_faster_rock_faster_uplift_and_shorter_time():
    # K -> a K, U -> a U, t -> t / a leaves the heights (Buckingham; identity), check value 1.18. A factor 4 is
    # exact in binary, so that even the divides must move alike.
    slow = small_island(two_domes((15e3, 35e3), (40e3, 20e3), radius_m=12e3, duration_yr=1e7))
    fast = small_island(
        two_domes((15e3, 35e3), (40e3, 20e3), radius_m=12e3, duration_yr=2.5e6, background=4e-4, peak=5.2e-4),
        erodibility=4 * K, duration_yr=2.5e6, step_yr=2.5e4, spin_up_yr=3e6,
    )  # fmt: skip
    assert np.array_equal(slow.receiver, fast.receiver)
    assert slow.height == pytest.approx(fast.height, rel=1e-9)


@pytest.mark.parametrize("free_drainage", [True, False])
def test_all_land_drains_to_the_sea_and_no_area_is_lost(free_drainage):
    land = small_island(spin_up_yr=1e6, duration_yr=1e6, free_drainage=free_drainage)  # still full of lakes
    island, receiver = land.island.ravel(), land.receiver.ravel()
    at = np.flatnonzero(island)
    for _ in range(island.size):
        at = np.where(island[at], receiver[at], at)
    assert not island[at].any()
    assert (receiver[~island] == -1).all()
    # Conservation of area (identity), check value 3.6.
    assert land.area_m2[~land.island].sum() == np.count_nonzero(land.island) * CELL**2
    assert land.area_m2[land.island].min() == CELL**2
    row, col = np.divmod(np.arange(island.size), land.island.shape[1])
    cells = np.flatnonzero(island)
    length = CELL * np.hypot(row[cells] - row[receiver[cells]], col[cells] - col[receiver[cells]])
    assert land.edge_m.ravel()[cells] == pytest.approx(length, rel=1e-15)
    assert (land.edge_m[~land.island] == 0).all()


def test_frozen_drainage_stays_and_free_drainage_moves():
    uplift = tilt_with_step(0.0, 54e3, duration_yr=1e7, west_rate=5e-5, east_rate=4e-4)
    histories = uplift, lambda x, y, _age: uplift(x, y, 1e7)  # alike until 40 % of the duration ago
    frozen = [small_island(history, free_drainage=False) for history in histories]
    free = [small_island(history) for history in histories]
    assert np.array_equal(frozen[0].receiver, frozen[1].receiver)
    assert np.array_equal(frozen[0].area_m2, frozen[1].area_m2)
    assert not np.array_equal(frozen[0].height, frozen[1].height)
    assert not np.array_equal(free[0].receiver, free[1].receiver)


def test_seed_decides_every_byte():
    one, same, other = (small_island(noise_m=5.0, seed=s, duration_yr=2e6) for s in (1, 1, 2))
    for name in ("height", "area_m2", "receiver", "travel_time_yr", "spread_yr"):
        assert getattr(one, name).tobytes() == getattr(same, name).tobytes()
    assert not np.array_equal(one.height, other.height)
    assert not np.array_equal(one.receiver, other.receiver)


def test_dem_noise_is_white_of_the_stated_size_and_makes_no_sea():
    clean, noisy = small_island(), small_island(noise_m=8.0)
    high = clean.height > 60
    error = (noisy.height - clean.height)[high]
    n = error.size
    assert error.std() == pytest.approx(8.0, abs=4 * 8.0 / np.sqrt(2 * n))
    assert abs(error.mean()) < 4 * 8.0 / np.sqrt(n)
    side_by_side = high[:, 1:] & high[:, :-1]
    both = (noisy.height - clean.height)[:, 1:][side_by_side], (noisy.height - clean.height)[:, :-1][side_by_side]
    assert abs(np.corrcoef(*both)[0, 1]) < 4 / np.sqrt(side_by_side.sum())
    assert np.array_equal(noisy.height > 0, noisy.island)
    assert small_island(noise_m=500.0, duration_yr=1e5).height[clean.island].min() > 0


def test_sea_is_below_zero_and_deepens_offshore():
    land = small_island(duration_yr=2e6)
    assert (land.height[~land.island] <= -1).all()
    middle = land.height[land.height.shape[0] // 2]
    coast = np.flatnonzero(middle > 0)[0]
    assert (np.diff(middle[:coast]) > 0).all()


def test_diffusion_makes_a_parabola():
    # D d2z/dx2 = -U between two coasts L apart: z = U x (L - x) / (2 D) (identity), exact on a regular grid.
    # The land is lifted, then diffused: the parabola is the surface just after the lift.
    width, rate, diffusivity = 9, 1e-4, 50.0
    island = np.zeros((width + 2, 82), dtype=bool)
    island[1:-1, 1:-1] = True
    x = CELL * np.arange(1, width + 1)
    parabola = rate * x * (CELL * (width + 1) - x) / (2 * diffusivity)

    def middle(step):
        land = grow_landscape(
            island, CELL, steady(rate), erodibility=1e-30, area_exponent=M, duration_yr=4e6, step_yr=step,
            spin_up_yr=0.0, diffusivity_m2_per_yr=diffusivity,
        )  # fmt: skip
        return land.height[1:-1, 41]

    assert middle(4e3) + rate * 4e3 == pytest.approx(parabola, rel=2e-5)
    # Sixteen times the longest stable step: cut into parts, it lies between the surfaces before and after a lift.
    assert (middle(8e4) < parabola).all()
    assert (middle(8e4) > parabola - rate * 8e4).all()


@pytest.mark.parametrize("seed", range(5))
def test_outline_is_one_island_with_sea_around_it(seed):
    island = island_mask(60, 90, seed)
    inner = np.zeros_like(island)
    inner[3:-3, 3:-3] = True
    assert not island[~inner].any()
    assert 0.5 < island.mean() < 0.9
    assert np.array_equal(island, island_mask(60, 90, seed))
    assert not np.array_equal(island, island_mask(60, 90, seed + 100))
    reached = np.zeros_like(island)
    reached[30, 45] = True
    for _ in range(300):
        reached = island & np.any([np.roll(reached, s, a) for s in (-1, 0, 1) for a in (0, 1)], axis=0)
    assert np.array_equal(reached, island)


def test_two_domes_trade_places():
    uplift = two_domes((10.0, 20.0), (300.0, 40.0), radius_m=30.0, duration_yr=8e6, background=1e-4, peak=2e-4)
    at = sample_history(uplift, [10.0, 300.0], [40.0, 20.0], [0.0, 4e6, 8e6, 9e6])
    assert at.shape == (4, 2, 2)
    assert at[:, 0, 1] == pytest.approx([3e-4, 2e-4, 1e-4, 1e-4], rel=1e-12)  # grows towards the present
    assert at[:, 1, 0] == pytest.approx([1e-4, 2e-4, 3e-4, 3e-4], rel=1e-12)  # fades towards the present
    one_radius_off = sample_history(uplift, [10.0], [50.0], [8e6])
    assert one_radius_off == pytest.approx(1e-4 + 2e-4 * np.exp(-0.5), rel=1e-12)


def test_tilt_steps_at_two_fifths_of_the_duration():
    uplift = tilt_with_step(0.0, 100.0, duration_yr=1e7, west_rate=1e-4, east_rate=3e-4, earlier_share=0.5)
    at = sample_history(uplift, [-50.0, 50.0, 500.0], [0.0, 1.0], [0.0, 3.99e6, 4.01e6, 2e7])
    assert at[0] == pytest.approx(np.array([[1e-4, 2e-4, 3e-4]] * 2), rel=1e-12)
    assert np.array_equal(at[1], at[0])
    assert at[2] == pytest.approx(0.5 * at[0], rel=1e-12)
    assert np.array_equal(at[3], at[2])
    assert (sample_history(steady(2e-4), [0.0], [1.0], [0.0, 1e6]) == 2e-4).all()


def test_rates_are_asked_for_at_the_cells_places():
    seen = {}

    def uplift(x, y, age):
        seen["x"], seen["y"] = x, y
        seen.setdefault("ages", []).append(age)
        return np.full(x.shape, 1e-4)

    land = small_island(uplift, n=12, duration_yr=3e5, spin_up_yr=0.0, origin_m=(7e5, 9e5))
    assert seen["x"][0, 0] == 7e5 + 500
    assert seen["y"][-1, 0] == 9e5 + 500
    assert seen["y"][0, 0] - seen["y"][-1, 0] == 11 * CELL
    assert np.array_equal(seen["x"][3], land.x)
    assert np.array_equal(seen["y"][:, 3], land.y)
    assert seen["ages"] == pytest.approx([3e5, 2e5, 1e5, 0.0], abs=1e-6)


@pytest.mark.parametrize(
    ("changes", "error", "word"),
    [
        ({"erodibility": 0.0}, SettingsError, "erodibility"),
        ({"step_yr": -1.0}, SettingsError, "step_yr"),
        ({"noise_m": np.nan}, SettingsError, "noise_m"),
        ({"n_substeps": 0}, SettingsError, "n_substeps"),
        ({"erodibility_factor": np.ones((3, 3))}, InputError, "erodibility_factor"),
        ({"erodibility_factor": np.zeros((48, 54))}, InputError, "erodibility_factor"),
        ({"uplift": steady(-1e-4)}, NumericalError, "rates >= 0"),
        ({"uplift": steady(np.inf)}, NumericalError, "finite"),
        ({"uplift": lambda _x, _y, _age: np.array([1e-4])}, NumericalError, "shape"),
    ],
)
def test_unfit_arguments_are_named(changes, error, word):
    with pytest.raises(error, match=word):
        small_island(**changes)


@pytest.mark.parametrize(
    ("island", "word"),
    [
        (np.ones((5, 5), dtype=bool), "16 land cells|edge"),
        (np.zeros((5, 5), dtype=bool), "no land"),
        (np.zeros((5, 5)), "bool"),
        (np.zeros(5, dtype=bool), "2-D"),
    ],
)
def test_unfit_islands_are_named(island, word):
    with pytest.raises(InputError, match=word):
        grow_landscape(island, CELL, steady(), erodibility=K, area_exponent=M, duration_yr=1e6)


def test_an_island_needs_room():
    with pytest.raises(SettingsError, match="10 x 40"):
        island_mask(10, 40, 0)


def test_demo_is_a_region_with_a_history_to_recover():
    demo = demo_island()
    land = demo.landscape
    channel = land.island & (land.area_m2 >= 3e6)
    assert 8_000 <= channel.sum() <= 10_000
    assert 1_500 < land.height.max() < 2_500
    assert 1e7 < land.travel_time_yr[channel].max() < 1.5e7
    assert land.travel_time_yr[channel].max() < demo.ages_yr[-1]
    assert demo.rate.shape == (demo.ages_yr.size, demo.y_nodes.size, demo.x_nodes.size)
    assert 5e-5 <= demo.rate.min() < demo.rate.max() <= 4e-4
    assert demo.x_nodes[0] <= land.x.min() < land.x.max() <= demo.x_nodes[-1]
    assert demo.y_nodes[-1] <= land.y.min() < land.y.max() <= demo.y_nodes[0]
    # Free drainage, yet gentle: heights stay near the path integrals of the true history.
    cells = np.flatnonzero(channel)[::37]
    told = np.array([path_integral(land, demo.uplift, cell, n_parts=100) for cell in cells])
    misfit = land.height.ravel()[cells] - told
    assert np.sqrt(np.mean(misfit**2)) < 0.12 * told.std()
