"""A real DEM, cut on all sides, from the first look to the uplift history.

The sheet is the sample data `jacksboro_fault_dem.npz` of matplotlib: 344 x 403 heights, 236 to 1076 m, on a grid of
3 seconds of arc, row 0 in the north (its `ymin` is the larger of the two).
"""

import hashlib
import json
from pathlib import Path

import geopandas as gpd
import jsonschema
import matplotlib as mpl
import numpy as np
import pandas as pd
import pytest
import rasterio
from affine import Affine

from fluvinv import cli
from fluvinv.files.record import schema

pytestmark = pytest.mark.filterwarnings("error")


@pytest.fixture(scope="module")
def sheet():
    path = Path(mpl.get_data_path()) / "sample_data" / "jacksboro_fault_dem.npz"
    digest = hashlib.sha256(path.read_bytes()).hexdigest()
    assert digest.startswith("d493f50a")
    assert digest.endswith("b637")
    with np.load(path) as arrays:
        return dict(arrays)


@pytest.fixture(scope="module")
def folder(sheet, tmp_path_factory):
    """The working folder after start, check, network and run, each of which must succeed."""
    folder = tmp_path_factory.mktemp("sheet")
    heights = sheet["elevation"]
    corner = Affine(float(sheet["dx"]), 0, float(sheet["xmin"]), 0, -float(sheet["dy"]), float(sheet["ymin"]))
    shape = {"height": heights.shape[0], "width": heights.shape[1], "count": 1, "dtype": heights.dtype}
    with rasterio.open(folder / "sheet.tif", "w", driver="GTiff", crs="EPSG:4326", transform=corner, **shape) as file:
        file.write(heights, 1)
    settings, results = str(folder / "sheet.yml"), ["--output", str(folder / "results")]
    assert cli.main(["start", str(folder / "sheet.tif"), "--output", str(folder), "-q"]) == 0
    assert "incomplete: keep\n" in (folder / "sheet.yml").read_text()
    assert cli.main(["check", settings, *results, "-q"]) == 0
    assert not (folder / "results").exists()
    assert cli.main(["network", settings, *results, "-q"]) == 0
    record = json.loads((folder / "results/run.json").read_text())
    assert (record["stage"], record["fit"]) == ("network", None)
    assert cli.main(["run", settings, *results, "-q"]) == 0
    return folder


@pytest.fixture(scope="module")
def record(folder):
    return json.loads((folder / "results/run.json").read_text())


@pytest.fixture(scope="module")
def profiles(folder):
    return pd.read_csv(folder / "results/profiles.csv")


def test_the_sheet_is_the_one_described(sheet):
    heights = sheet["elevation"]  # check value 8.1 (seen)
    assert (heights.shape, heights.dtype) == ((344, 403), np.int16)
    assert (heights.min(), heights.max(), round(heights.mean(), 3)) == (236, 1076, 531.031)
    assert np.unravel_index(heights.argmax(), heights.shape) == (297, 219)
    assert np.unravel_index(heights.argmin(), heights.shape) == (288, 347)


def test_nothing_is_left_beside_the_results(folder):
    assert sorted(path.name for path in folder.iterdir()) == ["results", "sheet.tif", "sheet.yml"]


def test_profiles_agree_with_the_sheet(sheet, profiles):
    heights = sheet["elevation"]
    row = np.rint((float(sheet["ymin"]) - profiles.y) / sheet["dy"] - 0.5).astype(int)
    col = np.rint((profiles.x - float(sheet["xmin"])) / sheet["dx"] - 0.5).astype(int)
    np.testing.assert_array_equal(profiles.elevation_m, heights[row, col])


def test_rivers_fall_grow_and_are_neighbours(profiles):
    upper = profiles[profiles.receiver_id >= 0]
    lower = profiles.loc[upper.receiver_id]
    assert (upper.node_id.to_numpy() > lower.node_id.to_numpy()).all()
    assert (upper.corrected_m.to_numpy() >= lower.corrected_m.to_numpy()).all()
    assert profiles.corrected_m.between(236, 1076).all()
    # least change on an uncarved sheet of whole metres: a few m
    assert np.sqrt(np.mean((profiles.corrected_m - profiles.elevation_m) ** 2)) < 5
    for column in ("distance_m", "travel_time_yr", "chi_m"):
        assert (upper[column].to_numpy() > lower[column].to_numpy()).all()
    # a step is 74 m east, 92.5 m north or 119 m across: 3 seconds on the ellipsoid at 36.6 north
    step = upper.distance_m.to_numpy() - lower.distance_m.to_numpy()
    assert 74 < step.min() < 75
    assert 118 < step.max() < 120
    # what drains into a node is no more than what drains through it, and the difference is the slopes between
    through = np.bincount(upper.receiver_id, upper.area_m2, minlength=len(profiles))
    assert (through < profiles.area_m2).all()


def test_areas_are_conserved(sheet, profiles, record):
    latitude = np.deg2rad((float(sheet["ymin"]) + float(sheet["ymax"])) / 2)
    # radii of curvature on WGS 84 in the middle of the sheet: rectangle of 28.67' by 20.15'
    a, e2 = 6_378_137.0, 0.006_694_379_990_14
    bend = 1 - e2 * np.sin(latitude) ** 2
    across = (sheet["xmax"] - sheet["xmin"]) * np.pi / 180 * a / np.sqrt(bend) * np.cos(latitude)
    along = (sheet["ymin"] - sheet["ymax"]) * np.pi / 180 * a * (1 - e2) / bend**1.5
    assert record["network"]["land_km2"] == pytest.approx(across * along / 1e6, rel=1e-5)
    outlets = profiles[profiles.receiver_id < 0]
    assert outlets.area_m2.sum() / 1e6 == pytest.approx(record["network"]["network_km2"])
    assert 0.9 < record["network"]["network_km2"] / record["network"]["land_km2"] <= 1


def test_every_outlet_inland_is_its_own_base(profiles):
    outlets = profiles[profiles.receiver_id < 0]
    assert (outlets[["distance_m", "travel_time_yr", "chi_m"]] == 0).all(axis=None)
    np.testing.assert_allclose(outlets.fitted_m, outlets.elevation_m, atol=1e-6)
    assert outlets.basin_id.is_unique


def test_the_fit_is_one(profiles, record):
    assert not profiles.drop(columns="held_out_residual_m").isna().any(axis=None)
    np.testing.assert_allclose(profiles.fitted_m + profiles.residual_m, profiles.elevation_m, atol=1e-6)
    rms = np.sqrt(np.mean(profiles.residual_m**2))
    assert record["fit"]["rms_m"] == pytest.approx(rms, rel=1e-6)
    # far below the spread of the heights, and not below what 3-second heights can tell
    assert 3 < rms < 0.3 * profiles.elevation_m.std()


def test_the_record_tells_what_is_wrong_with_the_sheet(record):
    jsonschema.validate(record, schema())
    assert record["stage"] == "run"
    assert record["network"]["dropped"] == {
        "upstream_touches_edge": 0, "upstream_touches_void": 0, "downstream_incomplete": 0
    }  # fmt: skip
    assert any("100% of the river nodes" in warning for warning in record["warnings"])
    assert record["inputs"][0]["path"] == "sheet.tif"


def test_rates_are_relative_to_base_level_and_of_a_sane_size(folder, profiles):
    with rasterio.open(folder / "results/uplift_rate.tif") as file:
        rate = file.read(masked=True)
        assert file.crs.is_projected
        ages = [float(file.tags(band)["age_ma"]) for band in file.indexes]
    with rasterio.open(folder / "results/uplift_rate_sd.tif") as file:
        sd = file.read(masked=True)
    with rasterio.open(folder / "results/cumulative_uplift.tif") as file:
        total = file.read(masked=True)
    assert ages[0] == 0
    assert rate.count() == sd.count() == total.count() > 0
    assert np.isfinite(rate.compressed()).all()
    assert (sd.compressed() > 0).all()
    # all that rose since the longest travel time is relief above the outlets, not height above the sea
    relief = profiles.elevation_m.max() - profiles.elevation_m.min()
    assert 0 < np.median(total[-1].compressed()) < relief
    assert np.quantile(np.abs(rate.compressed()), 0.9) < 10 * relief / profiles.travel_time_yr.max() * 1e3


def test_the_network_goes_into_a_gis(folder, record, profiles):
    channels = gpd.read_file(folder / "results/network.gpkg", layer="channels")
    outlets = gpd.read_file(folder / "results/network.gpkg", layer="outlets")
    assert channels.crs == outlets.crs == "EPSG:4326"
    assert len(outlets) == record["network"]["n_basins"] == profiles.basin_id.nunique()
    upper = profiles[profiles.receiver_id >= 0]
    assert set(channels.river_id) == set(upper.river_id)
    assert profiles.river_id.nunique() == record["network"]["n_rivers"]
    steps = upper.distance_m.to_numpy() - profiles.distance_m.to_numpy()[upper.receiver_id]
    assert channels.length_km.sum() == pytest.approx(steps.sum() / 1e3)
    assert (channels.steepness >= 0).all()
