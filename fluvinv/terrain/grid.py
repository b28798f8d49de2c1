"""The DEM as a grid: cell areas, step lengths and the CRS that maps are made in."""

from dataclasses import dataclass

import numpy as np
from pyproj import CRS, Proj, Transformer
from pyproj.crs import ProjectedCRS
from pyproj.crs.coordinate_operation import LambertAzimuthalEqualAreaConversion
from pyproj.exceptions import CRSError, ProjError

from fluvinv.errors import InputError, SettingsError

#: Cell centres may stray from even spacing by this share of a cell (single-precision coordinates do).
SPACING_TOLERANCE = 1e-2


@dataclass(frozen=True, slots=True)
class StepLengths:
    """Lengths of the steps between neighbouring cells, in m.

    Attributes
    ----------
    east : (n_rows,) float array, m
        Between neighbours of one row.
    south : (n_rows - 1,) float array, m
        Between a cell of row i and the one below it in row i + 1.
    diagonal : (n_rows - 1,) float array, m
        Between a cell of row i and its diagonal neighbours in row i + 1.
    """

    east: np.ndarray
    south: np.ndarray
    diagonal: np.ndarray

    def between(self, cell: np.ndarray, neighbour: np.ndarray, n_cols: int) -> np.ndarray:
        """Lengths of the steps from cells to one of their eight neighbours each (flat indices), in m."""
        row, col = np.divmod(cell, n_cols)
        other_row, other_col = np.divmod(neighbour, n_cols)
        upper = np.minimum(np.minimum(row, other_row), self.south.size - 1)
        across = np.where(col == other_col, self.south[upper], self.diagonal[upper])
        return np.where(row == other_row, self.east[row], across)


@dataclass(frozen=True, slots=True)
class Grid:
    """Heights on a regular grid, north up: row 0 is the northernmost, column 0 the westernmost.

    Built by `make_grid`, which checks and orders the arrays.

    Attributes
    ----------
    height : (n_rows, n_cols) float32 array, m
        Heights; what stands in void cells has no meaning.
    void : (n_rows, n_cols) bool array
        True where the DEM has no value.
    x : (n_cols,) float array
        Cell centres in the DEM's CRS, ascending.
    y : (n_rows,) float array
        Cell centres in the DEM's CRS, descending.
    crs : pyproj.CRS
        A geographic or projected CRS.
    """

    height: np.ndarray
    void: np.ndarray
    x: np.ndarray
    y: np.ndarray
    crs: CRS

    @property
    def n_rows(self) -> int:
        """Number of rows."""
        return self.height.shape[0]

    @property
    def n_cols(self) -> int:
        """Number of columns."""
        return self.height.shape[1]

    def cell_area_by_row(self) -> np.ndarray:
        r"""Area of one cell in each row.

        On a geographic grid it is the exact area on the ellipsoid between two parallels and two meridians,

        .. math:: \Delta\lambda \frac{a^2}{2} (q_2 - q_1), \quad q = (1 - e^2) \left[
            \frac{\sin\phi}{1 - e^2 \sin^2\phi} - \frac{1}{2e} \ln\frac{1 - e\sin\phi}{1 + e\sin\phi} \right]

        (Snyder 1987, USGS Professional Paper 1395, eq. 3-12). On a projected grid it is the area on the plane,
        in m2 whatever the CRS's unit; the distortion of the projection is not corrected.

        Returns
        -------
        (n_rows,) float array, m2
        """
        upper, lower, width = self._half_edges()
        unit = _unit(self.crs)
        if self.crs.is_projected:
            return (upper - lower) * width * unit**2
        geod = self.crs.get_geod()
        pole = np.pi / 2
        q_upper, q_lower = (_authalic_q(np.clip(edge * unit, -pole, pole), geod.es) for edge in (upper, lower))
        return width * unit * geod.a**2 / 2 * (q_upper - q_lower)

    def step_lengths(self) -> StepLengths:
        """Lengths of the steps between neighbouring cell centres.

        Geodesics on the ellipsoid of a geographic CRS; straight lines on the plane of a projected one, in m
        whatever its unit.

        Returns
        -------
        StepLengths
        """
        width = self._half_edges()[2]
        unit = _unit(self.crs)
        if self.crs.is_projected:
            south = -np.diff(self.y) * unit
            return StepLengths(np.full(self.n_rows, width * unit), south, np.hypot(width * unit, south))
        lat, step = np.rad2deg(self.y * unit), np.rad2deg(width * unit)
        geod = self.crs.get_geod()

        def geodesic(lat_from, lat_to, lon_to):
            zero = np.zeros_like(lat_from)
            return geod.inv(zero, lat_from, zero + lon_to, lat_to)[2]

        return StepLengths(
            geodesic(lat, lat, step), geodesic(lat[:-1], lat[1:], 0.0), geodesic(lat[:-1], lat[1:], step)
        )

    def _half_edges(self) -> tuple[np.ndarray, np.ndarray, float]:
        """Upper and lower edge of every row and the width of a column, in the CRS's units."""
        half = (self.y[0] - self.y[-1]) / (self.n_rows - 1) / 2
        return self.y + half, self.y - half, (self.x[-1] - self.x[0]) / (self.n_cols - 1)


def make_grid(height, x, y, crs, void=None) -> Grid:
    """Check heights and coordinates, and turn the rows and columns so that north is up and east is right.

    Parameters
    ----------
    height : (n_rows, n_cols) array, m
    x : (n_cols,) array
        Evenly spaced cell centres in the units of the CRS, ascending or descending.
    y : (n_rows,) array
        The same for the rows.
    crs : pyproj.CRS or anything that it accepts
    void : (n_rows, n_cols) bool array, optional
        Cells without a value; cells whose height is not finite count as well.

    Returns
    -------
    Grid
        Its arrays are views of the input where that is possible.

    Raises
    ------
    InputError
        If the CRS is neither geographic nor projected, the grid is too small, too large or uneven, or its
        latitudes are none.
    """
    crs = CRS.from_user_input(crs)
    if not (crs.is_geographic or crs.is_projected):
        raise InputError(
            f"catchment.dem: its CRS '{crs.name}' is neither geographic nor projected, so cells have no "
            "known size. Give the file a geographic or projected CRS."
        )
    height = np.asarray(height, dtype=np.float32)
    x, y = np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
    if height.shape != (y.size, x.size) or min(height.shape) < 2 or height.size >= 2**31:
        raise InputError(
            f"catchment.dem: heights of shape {height.shape} with {y.size} rows and {x.size} columns of "
            "coordinates; expected at least 2 by 2 and fewer than 2^31 cells."
        )
    void = ~np.isfinite(height) if void is None else np.asarray(void, dtype=bool) | ~np.isfinite(height)
    along_x = slice(None, None, -1) if _spacing(x, "columns") < 0 else slice(None)
    along_y = slice(None, None, -1) if _spacing(y, "rows") > 0 else slice(None)
    if crs.is_geographic and np.abs(y * _unit(crs)).max() >= np.pi / 2:
        raise InputError(
            f"catchment.dem: its rows run from {y.min():g} to {y.max():g}, which are no latitudes between the poles, "
            f"but its CRS '{crs.name}' is geographic. Give the file the CRS that it was made in."
        )
    height, void = (np.ascontiguousarray(a[along_y, along_x]) for a in (height, void))
    return Grid(height, void, x[along_x], y[along_y], crs)


def _spacing(centres: np.ndarray, name: str) -> float:
    """Step of evenly spaced centres, negative where they descend."""
    step = (centres[-1] - centres[0]) / (centres.size - 1)
    off = np.abs(np.diff(centres) - step).max()
    if not off <= SPACING_TOLERANCE * abs(step) or step == 0:
        raise InputError(
            f"catchment.dem: the {name} are not evenly spaced (mean step {step:.6g}, off by up to {off:.3g}); "
            "expected a regular grid."
        )
    return step


def _unit(crs: CRS) -> float:
    """Metres per unit of a projected CRS, or radians per unit of a geographic one."""
    return crs.axis_info[0].unit_conversion_factor


def _authalic_q(latitude: np.ndarray, e2: float) -> np.ndarray:
    """Snyder's q of latitudes in radians (his eq. 3-12; twice the sine on a sphere)."""
    sine = np.sin(latitude)
    if e2 == 0:
        return 2 * sine
    e = np.sqrt(e2)
    return (1 - e2) * (sine / (1 - e2 * sine**2) + np.arctanh(e * sine) / e)


def choose_map_crs(crs: CRS, x: np.ndarray, y: np.ndarray, projection: str = "auto") -> CRS:
    """The CRS of the uplift grid, in metres.

    Parameters
    ----------
    crs : pyproj.CRS
        CRS of the DEM.
    x, y : (n_nodes,) float arrays
        Channel nodes in that CRS.
    projection : str
        "auto" takes the DEM's own CRS if it is projected and in metres, and otherwise a Lambert azimuthal
        equal-area CRS centred on the middle of the nodes' extent, rounded to 0.1 degree. Anything else names
        a CRS in a form that pyproj reads (such as EPSG:3035).

    Returns
    -------
    pyproj.CRS

    Raises
    ------
    SettingsError
        If the projection is unknown, not projected or not in metres.
    """
    if projection != "auto":
        return _named_crs(projection)
    if _in_metres(crs):
        return crs
    geographic = crs.geodetic_crs
    to_degrees = Transformer.from_crs(crs, CRS.from_epsg(4326), always_xy=True)
    lon, lat = to_degrees.transform([x.min(), x.max()], [y.min(), y.max()])
    lon_0 = (round(float(np.mean(lon)), 1) + 180) % 360 - 180
    return ProjectedCRS(
        LambertAzimuthalEqualAreaConversion(round(float(np.mean(lat)), 1), round(lon_0, 1)),
        name="equal-area map centred on the catchments",
        geodetic_crs=geographic,
    )


def _named_crs(projection: str) -> CRS:
    try:
        crs = CRS.from_user_input(projection)
    except CRSError:
        raise SettingsError(
            f"catchment.projection: '{projection}' is not a known CRS. Write 'auto' or a code such as EPSG:3035."
        ) from None
    if not _in_metres(crs):
        raise SettingsError(
            f"catchment.projection: '{projection}' ({crs.name}) is not a projected CRS in metres. "
            "Write 'auto' or a projected CRS in metres."
        )
    return crs


def _in_metres(crs: CRS) -> bool:
    return crs.is_projected and all(axis.unit_conversion_factor == 1 for axis in crs.axis_info[:2])


def areal_scale(crs: CRS, x: float, y: float) -> float:
    """How many times too large a projected CRS draws areas at a place; 1 for a geographic or a local CRS.

    Parameters
    ----------
    crs : pyproj.CRS
    x, y : float
        A place in that CRS.
    """
    if not crs.is_projected or crs.geodetic_crs is None:
        return 1.0
    lon, lat = Transformer.from_crs(crs, crs.geodetic_crs, always_xy=True).transform(x, y)
    try:
        return float(Proj(crs).get_factors(lon, lat).areal_scale)
    except ProjError:
        return 1.0


def to_map(crs: CRS, map_crs: CRS, x: np.ndarray, y: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Coordinates in the DEM's CRS to the map CRS, in m.

    Parameters
    ----------
    crs, map_crs : pyproj.CRS
    x, y : float arrays
        Easting and northing, or longitude and latitude, in the DEM's CRS.

    Returns
    -------
    map_x, map_y : float arrays, m

    Raises
    ------
    SettingsError
        If a point has no image in the map CRS.
    """
    if crs == map_crs:
        return np.array(x, dtype=np.float64), np.array(y, dtype=np.float64)
    # as lists: pyproj takes an array of one point for a number, which numpy before 2.4 deprecates
    there = Transformer.from_crs(crs, map_crs, always_xy=True).transform(np.asarray(x).tolist(), np.asarray(y).tolist())
    map_x, map_y = (np.asarray(values) for values in there)
    if not (np.isfinite(map_x).all() and np.isfinite(map_y).all()):
        raise SettingsError(
            f"catchment.projection: the DEM's rivers do not lie within the domain of '{map_crs.name}'. "
            "Write 'auto' or a CRS that covers the DEM."
        )
    return map_x, map_y
