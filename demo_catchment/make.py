"""Grow the demo's invented island again and write its DEM and its true uplift history beside this file."""

from pathlib import Path

import numpy as np
import rasterio
from affine import Affine

from fluvinv.landscape import DEMO_NAME, demo_island

FOLDER = Path(__file__).parent
#: Any metric CRS would do: the island lies nowhere. These coordinates fall on open ocean.
CRS = "EPSG:32710"


def write(folder: Path = FOLDER) -> None:
    """Write `ondrimar.tif` (heights, m) and `true_uplift.tif` (mm/yr, one band per age)."""
    demo = demo_island()
    land = demo.landscape
    common = {"driver": "GTiff", "crs": CRS, "compress": "deflate", "dtype": "float32"}
    shape = {"height": land.height.shape[0], "width": land.height.shape[1]}
    corner = Affine(land.cell_m, 0, land.x[0] - land.cell_m / 2, 0, -land.cell_m, land.y[0] + land.cell_m / 2)
    heights = np.round(land.height, 1).astype(np.float32)
    with rasterio.open(
        folder / "ondrimar.tif", "w", count=1, transform=corner, predictor=3, nodata=-9999.0, **shape, **common
    ) as file:
        file.write(heights, 1)
        file.update_tags(title=f"{DEMO_NAME}, an invented island", unit="m")
    spacing = demo.x_nodes[1] - demo.x_nodes[0]
    corner = Affine(spacing, 0, demo.x_nodes[0] - spacing / 2, 0, -spacing, demo.y_nodes[0] + spacing / 2)
    rate = (demo.rate * 1e3).astype(np.float32)
    with rasterio.open(
        folder / "true_uplift.tif", "w", count=rate.shape[0], height=rate.shape[1], width=rate.shape[2],
        transform=corner, **common,
    ) as file:  # fmt: skip
        file.write(rate)
        for band, age in enumerate(demo.ages_yr / 1e6, start=1):
            file.update_tags(band, age_ma=f"{age:g}")
            file.set_band_description(band, f"true uplift rate at {age:g} Ma (mm/yr)")


if __name__ == "__main__":
    write()
