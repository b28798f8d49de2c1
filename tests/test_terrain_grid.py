"""Cell areas, step lengths and map CRS against published geodesy."""

import numpy as np
import pytest
from pyproj import CRS, Geod, Transformer

from fluvinv.errors import InputError, SettingsError
from fluvinv.terrain import make_grid
from fluvinv.terrain.grid import areal_scale, choose_map_crs, to_map

WGS84 = CRS.from_epsg(4326)
UTM33 = CRS.from_epsg(32633)
SECOND = 1 / 3600


def geographic_grid(latitudes, step, crs=WGS84):
    """Grid of 3 columns whose rows are centred on the latitudes."""
    y = np.asarray(latitudes, dtype=float)
    return make_grid(np.zeros((y.size, 3)), np.arange(3) * step, y, crs)


@pytest.mark.parametrize(
    ("south_edge", "area_km2"),
    [(0, 12308.463894), (45, 8686.494957), (50, 7892.218858), (60, 6123.140879), (89, 108.866682)],
)
def test_one_degree_cells_have_the_published_area(south_edge, area_km2):
    # Snyder 1987, USGS PP 1395, eq. 3-12 (seen); numbers from check value 6.4
    grid = geographic_grid(np.arange(south_edge + 0.5, south_edge - 2, -1), 1.0)
    # 1e-9, or the last digit printed
    assert grid.cell_area_by_row()[0] / 1e6 == pytest.approx(area_km2, rel=1e-9, abs=5e-7)


@pytest.mark.parametrize(("latitude", "area_km2"), [(0, 0.854796671), (47, 0.587167314), (50, 0.553795247)])
def test_thirty_second_cells_have_the_published_area(latitude, area_km2):
    grid = geographic_grid(latitude + np.array([1, 0, -1]) * 30 * SECOND, 30 * SECOND)
    assert grid.cell_area_by_row()[1] / 1e6 == pytest.approx(area_km2, rel=1e-9)


def test_cells_of_the_whole_earth_add_up_to_its_surface():
    # 5.10065621724e14 m2: NIMA TR8350.2 (seen)
    areas = geographic_grid(np.arange(89.75, -90, -0.5), 0.5).cell_area_by_row()
    assert areas.sum() * 720 == pytest.approx(510065621.724e6, rel=1e-9)
    assert areas == pytest.approx(areas[::-1], rel=1e-9)


def test_constants_of_the_ellipsoids():
    # NIMA TR8350.2; Moritz 2000 (seen; memory, number recomputed)
    for epsg, flattening, e2 in (
        (4326, 298.257223563, 0.0066943799901413),
        (4258, 298.257222101, 0.0066943800229008),
    ):
        geod = CRS.from_epsg(epsg).get_geod()
        assert geod.a == 6378137
        assert 1 / geod.f == pytest.approx(flattening, rel=1e-9)
        assert geod.es == pytest.approx(e2, rel=1e-9)


def test_spherical_areas_are_told_apart_from_ellipsoidal_ones():
    # between 46 N and 52 N a sphere of 6371 km is 0.32 % low (check value 6.5)
    latitudes = np.arange(51.5, 46, -1)
    sphere = CRS.from_proj4("+proj=longlat +R=6371000 +no_defs")
    low = geographic_grid(latitudes, 1.0, sphere).cell_area_by_row().sum()
    high = geographic_grid(latitudes, 1.0).cell_area_by_row().sum()
    assert 1 - low / high == pytest.approx(0.0032, abs=1e-4)


@pytest.mark.parametrize(
    ("latitude", "north", "east"),
    [
        (0, 110574.28, 111319.49),
        (15, 110648.70, 107550.49),
        (30, 110852.44, 96486.28),
        (48, 111190.32, 74625.35),
        (60, 111412.29, 55800.00),
        (75, 111618.38, 28902.01),
    ],
)
def test_steps_agree_with_metres_per_degree(latitude, north, east):
    # radii of curvature M and N (seen), and the series of the NGA (seen): check values 6.2, 6.3
    step = 6 * SECOND
    steps = geographic_grid(latitude + np.array([1, 0, -1]) * step, step).step_lengths()
    assert steps.east[1] / step == pytest.approx(east, abs=0.01)
    assert steps.south.mean() / step == pytest.approx(north, abs=0.01)
    p = np.deg2rad(latitude)
    series = 111132.92 - 559.82 * np.cos(2 * p) + 1.175 * np.cos(4 * p) - 0.0023 * np.cos(6 * p)
    assert steps.south.mean() / step == pytest.approx(series, abs=0.06)  # 0.058 at 75 degrees
    assert steps.diagonal == pytest.approx(np.hypot(steps.south, steps.east[:2]), rel=1e-4)


def test_a_step_is_a_geodesic_not_an_arc_of_the_parallel():
    steps = geographic_grid([61, 60, 59], 5.0).step_lengths()
    assert steps.east[1] == pytest.approx(Geod(ellps="WGS84").line_length([0, 5], [60, 60]), rel=1e-12)
    assert steps.east[1] < 5 * 55800.00 - 50


def test_feet_become_metres():
    feet = CRS.from_epsg(2225)  # US survey feet: 1200/3937 m exactly
    grid = make_grid(np.zeros((3, 4)), np.arange(4) * 3937.0, -np.arange(3) * 7874.0, feet)
    assert grid.cell_area_by_row() == pytest.approx(np.full(3, 1200.0 * 2400.0), rel=1e-12)
    steps = grid.step_lengths()
    assert steps.east == pytest.approx(np.full(3, 1200.0), rel=1e-12)
    assert steps.south == pytest.approx(np.full(2, 2400.0), rel=1e-12)
    assert steps.diagonal == pytest.approx(np.full(2, np.hypot(1200.0, 2400.0)), rel=1e-12)


def test_lengths_between_cells_use_the_rows_they_cross():
    steps = geographic_grid([61, 60, 59], 1.0).step_lengths()
    cell, neighbour = np.array([4, 4, 4, 4, 4]), np.array([5, 1, 7, 2, 6])
    expected = [steps.east[1], steps.south[0], steps.south[1], steps.diagonal[0], steps.diagonal[1]]
    assert steps.between(cell, neighbour, 3).tolist() == expected
    assert steps.between(neighbour, cell, 3).tolist() == expected
    assert steps.between(np.array([8]), np.array([7]), 3)[0] == steps.east[2]


def test_rows_and_columns_are_turned_north_up():
    height = np.arange(12.0).reshape(3, 4)
    height[0, 1] = np.nan
    x, y = np.arange(4) * 10.0, np.array([20.0, 10.0, 0.0])
    north_up = make_grid(height, x, y, UTM33)
    for grid in (
        make_grid(height[::-1], x, y[::-1], UTM33),
        make_grid(height[:, ::-1], x[::-1], y, UTM33),
    ):
        np.testing.assert_array_equal(grid.height, north_up.height)
        np.testing.assert_array_equal(grid.void, north_up.void)
        np.testing.assert_array_equal(grid.x, x)
        np.testing.assert_array_equal(grid.y, y)
    assert north_up.void.sum() == 1
    assert north_up.void[0, 1]


def test_a_grid_that_cannot_be_measured_is_refused():
    height = np.zeros((3, 3))
    with pytest.raises(InputError, match="rows are not evenly spaced"):
        make_grid(height, np.arange(3), [2.0, 1.1, 0.0], UTM33)
    with pytest.raises(InputError, match="neither geographic nor projected"):
        make_grid(height, np.arange(3), np.arange(3), CRS.from_epsg(4978))
    with pytest.raises(InputError, match="shape"):
        make_grid(height, np.arange(4), np.arange(3), UTM33)


def test_map_crs_is_the_dem_s_own_when_it_is_in_metres():
    x, y = np.array([4.0e5, 4.1e5]), np.array([5.0e6, 5.1e6])
    assert choose_map_crs(UTM33, x, y) == UTM33
    np.testing.assert_array_equal(to_map(UTM33, UTM33, x, y), (x, y))


def test_map_crs_of_degrees_is_equal_area_in_the_middle_of_the_rivers():
    x, y = np.array([10.01, 10.93]), np.array([44.02, 45.1])
    crs = choose_map_crs(WGS84, x, y)
    parameters = {p.name: p.value for p in crs.coordinate_operation.params}
    assert parameters["Latitude of natural origin"] == 44.6
    assert parameters["Longitude of natural origin"] == 10.5
    assert to_map(WGS84, crs, np.array([10.5]), np.array([44.6])) == (pytest.approx(0), pytest.approx(0))
    # a degree cell on the map has the area it has on the ellipsoid: 45 to 46 N (check value 6.4)
    along = np.linspace(0, 1, 200)
    lon = 10 + np.concatenate([along, np.ones(200), along[::-1], np.zeros(200)])
    lat = 45 + np.concatenate([np.zeros(200), along, np.ones(200), along[::-1]])
    px, py = to_map(WGS84, crs, lon, lat)
    area = 0.5 * np.sum(px * np.roll(py, -1) - np.roll(px, -1) * py)
    assert area == pytest.approx(8686.494957e6, rel=1e-6)


def test_map_crs_of_longitudes_beyond_180_and_of_feet():
    crs = choose_map_crs(WGS84, np.array([234.0, 238.0]), np.array([48.0, 50.0]))
    assert {p.name: p.value for p in crs.coordinate_operation.params}["Longitude of natural origin"] == -124
    feet = choose_map_crs(CRS.from_epsg(2225), np.array([6e6, 6.1e6]), np.array([2e6, 2.1e6]))
    assert feet.axis_info[0].unit_conversion_factor == 1


def test_laea_worked_example():
    # IOGP Guidance Note 7-2, method 9820 (seen)
    x, y = to_map(WGS84, choose_map_crs(WGS84, *np.zeros((2, 1)), "EPSG:3035"), np.array([5.0]), np.array([50.0]))
    assert x[0] == pytest.approx(3962799.45, abs=0.01)
    assert y[0] == pytest.approx(2999718.85, abs=0.01)


@pytest.mark.parametrize("projection", ["EPSG:999999", "EPSG:4326", "EPSG:2225"])
def test_a_projection_without_metres_is_refused(projection):
    with pytest.raises(SettingsError, match=r"catchment\.projection"):
        choose_map_crs(WGS84, np.zeros(1), np.zeros(1), projection)


def test_a_projection_of_elsewhere_is_refused():
    south_pole = CRS.from_proj4("+proj=gnom +lat_0=90 +datum=WGS84")
    with pytest.raises(SettingsError, match="domain"):
        to_map(WGS84, south_pole, np.array([0.0]), np.array([-45.0]))


def test_areal_scale_of_known_projections():
    """Spherical Mercator stretches areas by about sec^2 of the latitude: 4 at 60 degrees (common practice, no source).

    A Lambert azimuthal equal-area CRS stretches them by 1 everywhere (IOGP 373-7-2, method 9820; seen).
    """
    x, y = Transformer.from_crs(4326, 3857, always_xy=True).transform(10.0, 60.0)
    assert areal_scale(CRS(3857), x, y) == pytest.approx(4.0, rel=0.01)
    assert areal_scale(CRS(3035), 4321000.0, 2500000.0) == pytest.approx(1.0, rel=1e-6)
    assert areal_scale(CRS(4326), 10.0, 60.0) == 1.0
