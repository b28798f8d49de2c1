"""Rasters: the DEM in, stacks of maps out (cloud-optimised GeoTIFF)."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyproj
import rasterio
import rasterio.shutil
from affine import Affine
from rasterio.errors import NotGeoreferencedWarning, RasterioError, RasterioIOError
from rasterio.io import MemoryFile

from fluvinv import __version__
from fluvinv.errors import InputError, OutputError
from fluvinv.files.cautions import CAUTIONS
from fluvinv.inversion import UpliftGrid
from fluvinv.terrain import Grid, make_grid
from fluvinv.units import yr_to_myr

#: Heights on Earth, with the ocean floor (m).
LEAST_HEIGHT, MOST_HEIGHT = -12_000, 9_000
#: A lowest height that lies this far (m) below all others is a fill value: no cliff is that high.
FILL_GAP = 2_000


@dataclass(frozen=True, slots=True)
class History:
    """An uplift history read from a stack.

    Attributes
    ----------
    ages : (n_ages,) float array, yr, ascending
    x, y : (n_cols,) and (n_rows,) float arrays, m
        Map nodes, y from north to south.
    rate : (n_ages, n_rows, n_cols) float array, m/yr
    crs : pyproj.CRS
    """

    ages: np.ndarray
    x: np.ndarray
    y: np.ndarray
    rate: np.ndarray
    crs: pyproj.CRS


def _open(path: Path):
    try:
        if not path.exists():
            raise InputError(f"{path}: no such file.")
        if path.is_dir():
            raise InputError(f"{path}: a folder, and a raster file is expected.")
        return rasterio.open(path)
    except (RasterioIOError, NotGeoreferencedWarning) as error:
        raise InputError(f"{path}: cannot be read as a raster (GeoTIFF or another format that GDAL knows).") from error
    except OSError as error:
        raise InputError(f"{path}: cannot be read: {error.strerror}.") from error


def read_dem(path: Path) -> Grid:
    """Read a DEM of one band of heights in m on a regular grid that is not rotated.

    Parameters
    ----------
    path : Path

    Returns
    -------
    Grid
        Row 0 is the northernmost, whatever the file's order.

    Raises
    ------
    InputError
        If the file is missing, no raster, has no CRS, several bands, a rotated grid or values that are no heights;
        and as `make_grid` says.
    """
    with rasterio.Env(), _open(path) as source:
        if source.count != 1:
            raise InputError(f"{path}: has {source.count} bands, and a DEM of one band is expected.")
        if source.crs is None:
            raise InputError(
                f"{path}: has no coordinate reference system. Assign the one it was made in, then try again."
            )
        transform = source.transform
        if transform.b or transform.d:
            raise InputError(f"{path}: the grid is rotated. Warp it to one that runs north-south, then try again.")
        if transform.is_identity:
            raise InputError(f"{path}: has no georeference (cell size and position).")
        try:
            masked = source.read(1, masked=True)
            crs = pyproj.CRS.from_user_input(source.crs.to_wkt())
        except (RasterioError, pyproj.exceptions.CRSError) as error:
            raise InputError(f"{path}: damaged, the heights or their CRS cannot be read.") from error
    _check_heights(path, masked)
    height = np.ma.filled(masked.astype(np.float32), np.nan)
    x = transform.c + transform.a * (np.arange(height.shape[1]) + 0.5)
    y = transform.f + transform.e * (np.arange(height.shape[0]) + 0.5)
    return make_grid(height, x, y, crs)


def _check_heights(path: Path, masked: np.ma.MaskedArray) -> None:
    """Refuse values that are no heights in m: infinite, beyond any on Earth, or fill values that nobody declared."""
    if np.iscomplexobj(masked):
        raise InputError(f"{path}: holds complex numbers, and heights in m are expected.")
    values = masked.compressed()
    values = values[~np.isnan(values)]
    infinite = int(np.count_nonzero(np.isinf(values)))
    if infinite:
        raise InputError(f"{path}: holds {infinite:,} infinite heights. Declare them as nodata.")
    if not values.size:
        return
    lowest, highest = values.min(), values.max()
    if lowest < LEAST_HEIGHT or highest > MOST_HEIGHT:
        outside = int(np.count_nonzero((values < LEAST_HEIGHT) | (values > MOST_HEIGHT)))
        raise InputError(
            f"{path}: {outside:,} cells lie outside the {LEAST_HEIGHT:,} to {MOST_HEIGHT:,} m of the Earth's relief"
            f" (lowest {lowest:g}, highest {highest:g}). Declare fill values as nodata, or convert heights to metres."
        )
    above = values[values > lowest]
    if above.size and above.min() - float(lowest) > FILL_GAP:
        raise InputError(
            f"{path}: {values.size - above.size:,} cells hold exactly {lowest:g}, and the next height is"
            f" {above.min():g} m: a fill value, it seems. Declare it as nodata."
        )


def read_history(path: Path) -> History:
    """Read a stack of uplift rates: one band per age, the age (Ma) in each band's tag `age_ma`.

    Raises
    ------
    InputError
        If the file cannot be read, has no CRS, or its bands do not tell their ages in ascending order.
    """
    with rasterio.Env(), _open(path) as source:
        tags = [source.tags(band).get("age_ma") for band in source.indexes]
        try:
            ages = np.array([float(tag) for tag in tags]) * 1e6
        except (TypeError, ValueError) as error:
            raise InputError(f"{path}: every band needs a tag age_ma with its age in Ma; found {tags[:3]}.") from error
        if source.crs is None or np.any(np.diff(ages) <= 0):
            raise InputError(f"{path}: an uplift stack needs a CRS and bands of ascending age.")
        transform = source.transform
        if transform.b or transform.d or transform.e > 0:
            raise InputError(f"{path}: an uplift stack runs north-south, its first row in the north.")
        rate = np.ma.filled(source.read(masked=True).astype(float), np.nan) * 1e-3
        crs = pyproj.CRS.from_user_input(source.crs.to_wkt())
    x = transform.c + transform.a * (np.arange(rate.shape[2]) + 0.5)
    y = transform.f + transform.e * (np.arange(rate.shape[1]) + 0.5)
    return History(ages, x, y, rate, crs)


def write_stack(
    path: Path, maps: np.ndarray, grid: UpliftGrid, crs: pyproj.CRS, quantity: str, unit: str, dtype: str = "float32"
) -> None:
    """Write one band per age, youngest first, as a cloud-optimised GeoTIFF.

    Parameters
    ----------
    path : Path
    maps : (n_ages, n_rows, n_cols) array
        NaN (float32) or 255 (uint8) where there is nothing.
    grid : UpliftGrid
        Cell centres are its map nodes.
    crs : pyproj.CRS
    quantity, unit : str
        For band descriptions and tags; an empty unit for shares and flags.
    dtype : str
        "float32" or "uint8".

    Raises
    ------
    OutputError
        If the file cannot be written.
    """
    half = 0.5 * grid.spacing
    profile = {
        "driver": "GTiff",
        "dtype": dtype,
        "count": maps.shape[0],
        "height": grid.n_rows,
        "width": grid.n_cols,
        "crs": crs.to_wkt(),
        "transform": Affine(grid.spacing, 0, grid.west - half, 0, -grid.spacing, grid.north + half),
        "nodata": 255 if dtype == "uint8" else np.nan,
    }
    try:
        with rasterio.Env(), MemoryFile() as memory:
            with memory.open(**profile) as target:
                target.write(maps.astype(dtype))
                target.update_tags(
                    quantity=quantity, unit=unit, software=f"fluvinv {__version__}", cautions=" ".join(CAUTIONS)
                )
                for band, age in enumerate(yr_to_myr(grid.ages), start=1):
                    target.update_tags(band, age_ma=f"{age:.10g}", quantity=quantity, unit=unit)
                    suffix = f" ({unit})" if unit else ""
                    target.set_band_description(band, f"{quantity} at {age:.6g} Ma{suffix}")
                    target.set_band_unit(band, unit)
            with memory.open() as source:
                means = "MODE" if dtype == "uint8" else "AVERAGE"
                rasterio.shutil.copy(
                    source, path, driver="COG", compress="DEFLATE", blocksize=256, overview_resampling=means
                )
    except RasterioError as error:
        raise OutputError(f"{path}: cannot be written: {error}.") from error
