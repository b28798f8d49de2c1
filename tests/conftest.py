"""Shared by all tests."""

import sys
from pathlib import Path

import numpy as np
import pytest
import rasterio
from affine import Affine

sys.path.insert(0, str(Path(__file__).parent))


def _write_raster(path, heights, *, crs="EPSG:32631", cell=1000.0, transform=None, **profile):
    bands = np.atleast_3d(heights) if heights.ndim == 2 else heights.transpose(1, 2, 0)
    corner = Affine(cell, 0, 500_000, 0, -cell, 4_000_000) if transform is None else transform
    size = {"height": bands.shape[0], "width": bands.shape[1], "count": bands.shape[2], "dtype": bands.dtype}
    with rasterio.open(path, "w", driver="GTiff", crs=crs, transform=corner, **size, **profile) as file:
        file.write(bands.transpose(2, 0, 1))
    return path


@pytest.fixture(scope="session")
def write_raster():
    """Write heights, (n_rows, n_cols) or (n_bands, n_rows, n_cols), as a GeoTIFF; return its path."""
    return _write_raster


@pytest.fixture(scope="session")
def islet():
    """(32, 32) float32 array, m: an invented cone in a sea at -10 m, rough enough to hold rivers."""
    along = np.linspace(-1, 1, 32)
    off_centre = np.hypot(*np.meshgrid(along, along))
    rough = 20 * np.random.default_rng(3).standard_normal(off_centre.shape)
    return np.where(off_centre > 0.85, -10, 5 + 900 * (0.85 - off_centre) + np.abs(rough)).astype(np.float32)
