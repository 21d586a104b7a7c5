"""Raster: one band of a raster file, read window by window."""

from __future__ import annotations

import math
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
from numpy.typing import NDArray
from pyproj import CRS, Transformer
from rasterio.errors import RasterioError
from rasterio.windows import Window

from prevmap.errors import InputError
from prevmap.inputs.coverage import Bounds

Floats = NDArray[np.float64]

TILE = 1024  # pixels along one side of a tile read at once


@dataclass(frozen=True, slots=True)
class Raster:
    """One band of a raster file and where its pixels lie.

    Attributes
    ----------
    path : Path
    band : int
        From 1.
    bands : int
        Number of bands in the file.
    crs : pyproj.CRS
    rows, cols : int
    left, top : float
        Outer corner of the first pixel, in `crs`, north up.
    width, height : float
        Size of a pixel in `crs`, positive.
    south_up : bool
        Whether the file stores its rows from south to north.
    """

    path: Path
    band: int
    bands: int
    crs: CRS
    rows: int
    cols: int
    left: float
    top: float
    width: float
    height: float
    south_up: bool

    @property
    def bounds(self) -> Bounds:
        """Left, bottom, right and top edge in the raster's coordinates."""
        return self.edges(0, 0, self.rows, self.cols)

    def edges(self, row: int, col: int, rows: int, cols: int) -> Bounds:
        """Return left, bottom, right and top of a block of pixels."""
        return (
            self.left + col * self.width,
            self.top - (row + rows) * self.height,
            self.left + (col + cols) * self.width,
            self.top - row * self.height,
        )

    def block(self, bounds: Bounds) -> tuple[int, int, int, int]:
        """Return first row, first column, rows and columns of the pixels that touch `bounds`."""
        left, bottom, right, top = bounds
        first_col = min(max(math.floor((left - self.left) / self.width), 0), self.cols)
        last_col = min(max(math.ceil((right - self.left) / self.width), 0), self.cols)
        first_row = min(max(math.floor((self.top - top) / self.height), 0), self.rows)
        last_row = min(max(math.ceil((self.top - bottom) / self.height), 0), self.rows)
        return first_row, first_col, max(last_row - first_row, 0), max(last_col - first_col, 0)

    def read(self, row: int, col: int, rows: int, cols: int, source: Any) -> Floats:
        """Return (rows, cols) values of a block, north up, NaN where there is none.

        `source` is what `opened` yields; a scale and offset stored in the file are applied.
        """
        first = self.rows - row - rows if self.south_up else row
        window = Window(col, first, cols, rows)
        try:
            values = source.read(self.band, window=window, masked=True)
        except RasterioError as error:
            raise InputError(f"{self.path}: the raster cannot be read ({error}).") from error
        filled: Floats = values.astype(np.float64).filled(np.nan)
        filled = filled * source.scales[self.band - 1] + source.offsets[self.band - 1]
        return filled[::-1] if self.south_up else filled

    @contextmanager
    def opened(self) -> Iterator[Any]:
        """Open the file for reading and close it afterwards."""
        with rasterio.open(self.path) as source:
            yield source

    def from_crs(self, crs: CRS, centre: tuple[float, float]) -> Any:
        """Return a function that takes x, y in `crs` to this raster's coordinates.

        Longitudes are unwrapped round `centre` (x, y of the region's middle), so that a region beside the
        180th meridian stays in one piece.
        """
        transformer = Transformer.from_crs(crs, self.crs, always_xy=True)
        if not self.crs.is_geographic:
            return transformer.transform
        middle = self.left + 0.5 * self.cols * self.width
        region_lon = transformer.transform(*centre)[0]
        region_lon = (region_lon - middle + 180.0) % 360.0 - 180.0 + middle

        def unwrapped(x: Floats, y: Floats) -> tuple[Floats, Floats]:
            lon, lat = transformer.transform(x, y)
            return (np.asarray(lon) - region_lon + 180.0) % 360.0 - 180.0 + region_lon, np.asarray(lat)

        return unwrapped


def open_raster(path: str | Path, *, band: int = 1) -> Raster:
    """Return one band of a raster file, checked.

    Parameters
    ----------
    path : str or Path
        GeoTIFF or another format that GDAL reads.
    band : int
        Which band, from 1.

    Returns
    -------
    Raster

    Raises
    ------
    InputError
        If the file is missing or no raster, has no coordinate system, is rotated, or lacks the band.
    """
    file = Path(path)
    if not file.exists():
        raise InputError(f"{file}: there is no such file.")
    try:
        with rasterio.open(file) as source:
            count, rows, cols = source.count, source.height, source.width
            given, grid = source.crs, source.transform
            kinds = source.dtypes
    except RasterioError as error:
        raise InputError(f"{file}: cannot be read as a raster ({error}). Accepted: e.g. GeoTIFF.") from error
    if not given:
        raise InputError(f"{file}: the raster has no coordinate system. Write one into it first.")
    if not 1 <= band <= count:
        raise InputError(f"{file}: there is no band {band}; the file has bands 1 to {count}.")
    if kinds[band - 1].startswith("complex"):
        raise InputError(f"{file}: band {band} holds complex numbers; real numbers are expected.")
    if abs(grid.b) > 1e-12 * abs(grid.a) or abs(grid.d) > 1e-12 * abs(grid.e) or grid.a <= 0.0:
        raise InputError(f"{file}: the raster is rotated, sheared or mirrored. Warp it to north up first.")
    if grid.is_identity:
        raise InputError(f"{file}: the raster says nothing about where its pixels lie (no geotransform).")
    south_up = grid.e > 0.0
    top = grid.f + rows * grid.e if south_up else grid.f
    crs = CRS.from_wkt(given.to_wkt())
    return Raster(file, band, count, crs, rows, cols, grid.c, top, grid.a, abs(grid.e), south_up)


def sample(raster: Raster, x: Floats, y: Floats) -> Floats:
    """Return (n,) raster values at points given in the raster's coordinates.

    Bilinear between the four nearest pixel centres where all four have a value; else the value of the pixel
    the point lies in; else NaN.
    """
    values = np.full(len(x), np.nan)
    # Pixel units with the centre of the first pixel at 0.
    across = (x - raster.left) / raster.width - 0.5
    down = (raster.top - y) / raster.height - 0.5
    inside = np.isfinite(across) & np.isfinite(down)
    inside[inside] &= (across[inside] >= -0.5) & (across[inside] <= raster.cols - 0.5)
    inside[inside] &= (down[inside] >= -0.5) & (down[inside] <= raster.rows - 0.5)
    if not inside.any():
        return values
    at = np.flatnonzero(inside)
    tile = (down[at] // TILE).astype(np.int64) * (raster.cols // TILE + 2) + (across[at] // TILE).astype(
        np.int64
    )
    order = np.argsort(tile, kind="stable")
    starts = np.flatnonzero(np.r_[True, np.diff(tile[order]) != 0])
    with raster.opened() as source:
        for group in np.split(at[order], starts[1:]):
            values[group] = _sample_tile(raster, source, across[group], down[group])
    return values


def _sample_tile(raster: Raster, source: Any, across: Floats, down: Floats) -> Floats:
    # Fractions are taken before the tile is known, so that tiles change no bit of a value.
    col, row = np.floor(across).astype(np.int64), np.floor(down).astype(np.int64)
    right, lower = across - col, down - row
    own_col = np.clip(np.floor(across + 0.5).astype(np.int64), 0, raster.cols - 1)
    own_row = np.clip(np.floor(down + 0.5).astype(np.int64), 0, raster.rows - 1)
    first_col, first_row = max(int(col.min()), 0), max(int(row.min()), 0)
    last_col, last_row = min(int(col.max()) + 2, raster.cols), min(int(row.max()) + 2, raster.rows)
    block = raster.read(first_row, first_col, last_row - first_row, last_col - first_col, source)
    # A rim without values turns "beyond the edge" into "a neighbour has no value".
    rimmed = np.pad(block, ((1, 2), (1, 2)), constant_values=np.nan)
    col, row = col - first_col + 1, row - first_row + 1
    mixed = (1.0 - lower) * ((1.0 - right) * rimmed[row, col] + right * rimmed[row, col + 1]) + lower * (
        (1.0 - right) * rimmed[row + 1, col] + right * rimmed[row + 1, col + 1]
    )
    return np.where(np.isfinite(mixed), mixed, rimmed[own_row - first_row + 1, own_col - first_col + 1])


def describe_bounds(bounds: Bounds) -> str:
    """Return bounds as "x 33.1 to 35.9, y -17.1 to -9.4"."""
    left, bottom, right, top = bounds
    return f"x {left:.6g} to {right:.6g}, y {bottom:.6g} to {top:.6g}"
