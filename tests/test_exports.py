"""The results folder of a run, read back: GeoTIFFs byte by byte without GDAL, tables, the network and the record."""

import json
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import jsonschema
import numpy as np
import pandas as pd
import pyogrio
import pytest
import rasterio
from affine import Affine
from tiff_bytes import Tiff

from fluvinv import pipeline
from fluvinv.cli import main
from fluvinv.files.cautions import CAUTIONS
from fluvinv.files.record import schema
from fluvinv.landscape import grow_landscape, island_mask, two_domes

FLOAT_STACKS = {  # file: quantity at the head of each band's description, unit
    "uplift_rate": ("uplift rate", "mm/yr"),
    "uplift_rate_sd": ("standard deviation of the uplift rate", "mm/yr"),
    "uplift_rate_p025": ("lower end of the 95 % interval of the uplift rate", "mm/yr"),
    "uplift_rate_p975": ("upper end of the 95 % interval of the uplift rate", "mm/yr"),
    "sampled": ("time that all paths spend at the node", "Myr"),
    "cumulative_uplift": ("uplift since this age", "m"),
    "cumulative_uplift_sd": ("standard deviation of the uplift since this age", "m"),
}
STACKS = (*FLOAT_STACKS, "resolved")
PROFILE_COLUMNS = (
    "node_id,receiver_id,basin_id,river_id,x,y,distance_m,elevation_m,corrected_m,area_m2,chi_m,travel_time_yr,"
    "fitted_m,residual_m,held_out_residual_m"
)
SPACING_M, STEP_MYR = 10e3, 1.25
SETTINGS = """
catchment: {name: isle, dem: isle.tif}
terrain: {channel_area_km2: 4}
stream_power: {erodibility: 2e-6, area_exponent: 0.45}
uplift_grid: {spacing_km: 10, step_myr: 1.25}
inversion:
  noise: {height_m: 5}
  damping: {choose: fixed, range_km: 60, range_myr: 4, spread_mm_per_yr: 0.1}
"""


def write_island(folder: Path) -> Path:
    """An invented island and settings for it; any metric CRS would do, the island lies nowhere."""
    uplift = two_domes((320e3, 4130e3), (350e3, 4120e3), radius_m=20e3, duration_yr=6e6)
    land = grow_landscape(
        island_mask(60, 80, 5), 1000.0, uplift, erodibility=2e-6, area_exponent=0.45, duration_yr=6e6,
        step_yr=2e5, spin_up_yr=1e7, noise_m=3.0, seed=5, origin_m=(300e3, 4100e3),
    )  # fmt: skip
    corner = Affine(1000, 0, land.x[0] - 500, 0, -1000, land.y[0] + 500)
    with rasterio.open(
        folder / "isle.tif", "w", driver="GTiff", height=60, width=80, count=1, dtype="float32", crs="EPSG:32631",
        transform=corner, nodata=-9999.0,
    ) as file:  # fmt: skip
        file.write(land.height.astype(np.float32), 1)
    settings = folder / "isle.yml"
    settings.write_text(SETTINGS)
    return settings


@dataclass(frozen=True)
class Results:
    """A finished run."""

    settings: Path
    folder: Path

    @property
    def profiles(self) -> pd.DataFrame:
        return pd.read_csv(self.folder / "profiles.csv")

    @property
    def record(self) -> dict:
        return json.loads((self.folder / "run.json").read_text(encoding="utf-8"), parse_constant=pytest.fail)

    def maps(self, name: str) -> np.ndarray:
        with rasterio.open(self.folder / f"{name}.tif") as file:
            return file.read()


@pytest.fixture(scope="module")
def results(tmp_path_factory) -> Results:
    folder = tmp_path_factory.mktemp("exports")
    settings = write_island(folder)
    pipeline.run(settings, folder / "isle_uplift")
    return Results(settings, folder / "isle_uplift")


@pytest.fixture(params=STACKS)
def tiff(results, request) -> Tiff:
    return Tiff((results.folder / f"{request.param}.tif").read_bytes())


def test_every_file_of_the_promise_is_there(results):
    files = {path.name for path in results.folder.iterdir()}
    assert files == {f"{name}.tif" for name in STACKS} | {
        "network.gpkg", "profiles.csv", "spectra.csv", "run.json", "figures",
    }  # fmt: skip
    assert all(path.read_bytes().startswith(b"\x89PNG") for path in (results.folder / "figures").iterdir())
    assert [path.name for path in results.folder.parent.iterdir() if ".partial" in path.name] == []


def test_geotiff_tags(tiff):
    """Byte order, magic, ascending tags, scale and tiepoint (check value 6.9; OGC 19-008r4, GeoTIFF 1.1; seen)."""
    assert tiff.magic == 42
    for directory in tiff.directories:
        order = [tag for tag, *_ in tiff.entries(directory)]
        assert all(a < b for a, b in pairwise(order))
    kinds = {tag: (kind, count) for tag, kind, count, _ in tiff.entries(tiff.directories[0])}
    assert kinds[33550] == (12, 3)
    assert kinds[33922] == (12, 6)
    assert kinds[34735][0] == 3
    assert 34264 not in kinds  # a transformation beside scale and tiepoint would contradict them


def test_geokeys(tiff):
    """Directory header, ascending keys, PixelIsArea, a projected CRS (check values 6.10 and 6.11; the same; seen).

    Version 1, revision 1, minor 0 or 1; keys at locations 0, 34735, 34736 or 34737; 1025 = 1; 1024 = 1 (projected),
    3072 is the code of the projected CRS.
    """
    directory = tiff.tags[34735]
    version, revision, minor, n_keys = directory[:4]
    assert (version, revision) == (1, 1)
    assert minor in (0, 1)
    assert len(directory) == 4 * (n_keys + 1)
    keys = [directory[at : at + 4] for at in range(4, len(directory), 4)]
    assert all(a[0] < b[0] for a, b in pairwise(keys))
    assert {key[1] for key in keys} <= {0, 34735, 34736, 34737}
    value = {key: value for key, location, _, value in keys if location == 0}
    assert value[1025] == 1
    assert value[1024] == 1
    assert value[3072] == 32631


def test_cloud_optimised_layout(tiff):
    """Header, directory, then tiles in ascending order (check value 6.12; COG specification, OGC 21-026; seen).

    The maps are small and have no overviews, so there is one directory, and all of it stands before the first tile.
    """
    (directory,) = tiff.directories
    tags = tiff.tags
    assert tags[322] == tags[323] == (256,)
    offsets, sizes = tags[324], tags[325]
    ends = [offset + size for offset, size in zip(offsets, sizes, strict=True)]
    assert all(a < b for a, b in pairwise(offsets))
    assert directory < min(offsets)
    assert max(ends) <= len(tiff.data)
    assert tiff.end_of_directory(directory) <= min(offsets)


def test_cell_centres_are_map_nodes(tiff):
    """The centre of every cell lies on a multiple of the spacing (PixelIsArea: the tiepoint is a corner)."""
    tags = tiff.tags
    assert tags[33550][:2] == (SPACING_M, SPACING_M)
    column, row, _, x, y, _ = tags[33922]
    assert (column, row) == (0.0, 0.0)
    assert (x + SPACING_M / 2) % SPACING_M == 0.0
    assert (y - SPACING_M / 2) % SPACING_M == 0.0


@pytest.mark.parametrize("name", FLOAT_STACKS)
def test_bands_tell_their_ages(results, name):
    """Youngest first; ages are dates and carry Ma, durations Myr (check value 6.14; Aubry et al. 2009; seen)."""
    tiff = Tiff((results.folder / f"{name}.tif").read_bytes())
    quantity, unit = FLOAT_STACKS[name]
    n_bands = tiff.tags[277][0]
    assert n_bands == results.record["uplift_grid"]["n_ages"] > 3
    metadata = tiff.metadata
    for band in range(n_bands):
        age = STEP_MYR * band
        assert float(metadata["age_ma", band]) == age
        assert metadata["description", band] == f"{quantity} at {age:g} Ma ({unit})"
        assert metadata["unittype", band] == unit
    assert metadata["unit", None] == unit
    assert metadata["description", 1].endswith(f" at 1.25 Ma ({unit})")


def test_cautions_travel_with_every_raster(tiff):
    text = tiff.metadata["cautions", None]
    assert all(caution in text for caution in CAUTIONS)
    assert "not a basis for siting" in text


def test_data_types_and_nodata(results):
    """32-bit floats with NaN; flags in bytes with 255 (tags 258 and 339 of TIFF 6.0, 42113 of GDAL; memory)."""
    for name in FLOAT_STACKS:
        tags = Tiff((results.folder / f"{name}.tif").read_bytes()).tags
        assert set(tags[258]) == {32}
        assert set(tags[339]) == {3}
        assert tags[42113][0].rstrip(b"\0") == b"nan"
    tags = Tiff((results.folder / "resolved.tif").read_bytes()).tags
    assert set(tags[258]) == {8}
    assert tags[42113][0].rstrip(b"\0") == b"255"
    flags, rates = results.maps("resolved"), results.maps("uplift_rate")
    assert set(np.unique(flags)) == {0, 1, 255}
    np.testing.assert_array_equal(flags == 255, np.isnan(rates))
    assert np.all(results.maps("sampled")[flags == 1] > 0)


def test_sampled_adds_up_to_all_travel_times(results):
    """Each path spends its travel time somewhere (row sums of G are tau, whatever G is; identity)."""
    total = np.nansum(results.maps("sampled"), dtype=float)
    assert total == pytest.approx(results.profiles.travel_time_yr.sum() / 1e6, rel=1e-6)


def test_interval_is_rate_and_standard_deviation(results):
    rate, sd = results.maps("uplift_rate"), results.maps("uplift_rate_sd")
    assert np.nanmin(sd) > 0
    np.testing.assert_allclose(results.maps("uplift_rate_p025"), rate - 1.96 * sd, rtol=0, atol=1e-4 * np.nanmax(sd))
    np.testing.assert_allclose(results.maps("uplift_rate_p975"), rate + 1.96 * sd, rtol=0, atol=1e-4 * np.nanmax(sd))


def test_cumulative_uplift_is_the_integral_of_the_rates(results):
    """Trapezoids of mm/yr (= km/Myr, check value 6.15) over Myr; rates are linear between ages."""
    rate = results.maps("uplift_rate").astype(float)
    expected = np.zeros_like(rate)
    expected[1:] = np.cumsum(500.0 * STEP_MYR * (rate[1:] + rate[:-1]), axis=0)
    expected[0][np.isnan(rate[0])] = np.nan
    found = results.maps("cumulative_uplift")
    np.testing.assert_allclose(found, expected, rtol=1e-5, atol=1e-5 * np.nanmax(expected))
    sd = results.maps("cumulative_uplift_sd")
    assert np.nanmax(sd[0]) == 0.0
    rate_sd = results.maps("uplift_rate_sd").astype(float)
    most = 500.0 * STEP_MYR * np.cumsum(rate_sd[1:] + rate_sd[:-1], axis=0)
    assert np.all((sd[1:] > 0) & (sd[1:] <= most * (1 + 1e-5)) | np.isnan(most))  # sd is a norm: triangle inequality


def test_profiles_table(results):
    text = (results.folder / "profiles.csv").read_text(encoding="utf-8")
    assert text.split("\n", 1)[0] == PROFILE_COLUMNS
    table = results.profiles
    assert len(table) == results.record["network"]["n_nodes"]
    np.testing.assert_array_equal(table.node_id, np.arange(len(table)))
    assert (table.receiver_id < table.node_id).all()
    np.testing.assert_allclose(table.residual_m, table.elevation_m - table.fitted_m, rtol=0, atol=1e-8)
    assert table.held_out_residual_m.isna().all()
    assert not table.drop(columns="held_out_residual_m").isna().any(axis=None)
    assert "nan" not in text.lower()
    with rasterio.open(results.settings.parent / "isle.tif") as dem:
        heights = np.array([value[0] for value in dem.sample(zip(table.x, table.y, strict=True))])
    np.testing.assert_allclose(table.elevation_m, heights, rtol=1e-7)
    below = table.receiver_id[table.receiver_id >= 0].to_numpy()
    upper = table[table.receiver_id >= 0]
    for column in ("distance_m", "travel_time_yr", "chi_m"):
        assert (upper[column].to_numpy() > table[column].to_numpy()[below]).all()
    assert (upper.area_m2.to_numpy() < table.area_m2.to_numpy()[below]).all()
    assert (upper.corrected_m.to_numpy() >= table.corrected_m.to_numpy()[below]).all()
    assert (table.river_id.max(), table.basin_id.max()) == (
        results.record["network"]["n_rivers"], results.record["network"]["n_basins"],
    )  # fmt: skip
    rms = np.sqrt(np.mean(table.residual_m**2))
    assert results.record["fit"]["rms_m"] == pytest.approx(rms, rel=1e-9)


def test_travel_time_and_chi_of_the_table_agree(results):
    """With n = 1, chi (A0 = 1 m2) = K tau (check value 1.11, identity)."""
    table = results.profiles
    np.testing.assert_allclose(table.chi_m, 2e-6 * table.travel_time_yr, rtol=1e-10)


def test_spectra_table_has_its_header(results):
    text = (results.folder / "spectra.csv").read_text(encoding="utf-8")
    assert text == "series,wavelength_km,power,low,high,expected\n"


def test_network_layers(results):
    path = results.folder / "network.gpkg"
    assert sorted(name for name, _ in pyogrio.list_layers(path)) == ["channels", "outlets"]
    channels, outlets = (pyogrio.read_dataframe(path, layer=name) for name in ("channels", "outlets"))
    assert channels.crs.to_epsg() == outlets.crs.to_epsg() == 32631
    assert {"river_id", "basin_id", "strahler_order", "length_km", "steepness"} <= set(channels.columns)
    assert set(channels.geom_type) == {"LineString"}
    table = results.profiles
    assert len(outlets) == (table.receiver_id < 0).sum()
    mouths = table[table.receiver_id < 0]
    np.testing.assert_allclose(outlets.geometry.x, mouths.x)
    np.testing.assert_allclose(outlets.geometry.y, mouths.y)


def test_channel_lines_cover_every_edge_once(results):
    channels = pyogrio.read_dataframe(results.folder / "network.gpkg", layer="channels")
    drawn = [pair for line in channels.geometry for pair in pairwise(line.coords)]
    table = results.profiles
    upper = table[table.receiver_id >= 0]
    lower = table.iloc[upper.receiver_id]
    edges = list(
        zip(
            zip(upper.x, upper.y, strict=True),
            zip(lower.x, lower.y, strict=True),
            strict=True,
        )
    )
    assert len(drawn) == len(edges)
    assert set(drawn) == set(edges)
    length = (upper.distance_m.to_numpy() - lower.distance_m.to_numpy()).sum()
    assert channels.length_km.sum() == pytest.approx(length / 1e3, rel=1e-9)


def test_steepness_of_a_channel_is_its_gain_per_chi(results):
    channels = pyogrio.read_dataframe(results.folder / "network.gpkg", layer="channels")
    table = results.profiles.set_index(["x", "y"])
    for _, channel in channels.iloc[:: max(1, len(channels) // 10)].iterrows():
        top, end = (table.loc[channel.geometry.coords[k]] for k in (0, -1))
        expected = (top.corrected_m - end.corrected_m) / (top.chi_m - end.chi_m)
        assert channel.steepness == pytest.approx(expected, rel=1e-8)
        assert (channel.river_id, channel.basin_id) == (top.river_id, top.basin_id)


def test_record_obeys_its_schema(results):
    """The schema that ships in the package holds for the record, in which nothing is NaN or infinite."""
    jsonschema.Draft202012Validator.check_schema(schema())
    jsonschema.validate(results.record, schema())
    record = results.record
    assert record["stage"] == "run"
    assert record["inputs"][0]["path"] == "isle.tif"
    assert record["spectra"] is None
    assert record["fit"]["held_out_rms_m"] is None
    assert str(results.folder.parent) not in json.dumps(record)  # no path of this machine


def test_same_input_gives_the_same_bytes(results, tmp_path):
    """Two runs, two places: equal bytes in every numeric output; the record differs in its timings at most."""
    settings = write_island(tmp_path)
    again = Results(settings, tmp_path / "isle_uplift")
    pipeline.run(settings, again.folder)
    names = [path.name for path in results.folder.iterdir() if path.suffix in (".tif", ".csv", ".gpkg")]
    assert len(names) == len(STACKS) + 3
    for name in names:
        assert (results.folder / name).read_bytes() == (again.folder / name).read_bytes(), name
    assert {**results.record, "timings_s": None} == {**again.record, "timings_s": None}


def test_finished_folders(tmp_path, capsys):
    """The same again is done already (0); other settings are refused (5) unless they may overwrite (0)."""
    settings, folder = write_island(tmp_path), tmp_path / "isle_uplift"
    command = ["run", str(settings), "--output", str(folder)]
    assert main([*command, "-q"]) == 0
    before = {path: path.stat().st_mtime_ns for path in folder.rglob("*")}
    capsys.readouterr()
    assert main(command) == 0
    assert "already holds the result of the same inputs and settings" in capsys.readouterr().out
    settings.write_text(SETTINGS.replace("spread_mm_per_yr: 0.1", "spread_mm_per_yr: 0.2"))
    assert main(command) == 5
    message = capsys.readouterr().err
    assert message.count("\n") == 1
    assert "--overwrite" in message
    assert before == {path: path.stat().st_mtime_ns for path in folder.rglob("*")}
    assert main([*command, "-q", "--overwrite"]) == 0
    assert Results(settings, folder).record["damping"]["spread_mm_per_yr"] == pytest.approx(0.2, rel=1e-12)
    assert sorted(path.name for path in tmp_path.iterdir()) == ["isle.tif", "isle.yml", "isle_uplift"]
