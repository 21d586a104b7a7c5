"""Sentinel: a number that usually stands for "no data", in a raster that does not say so."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from rasterio.enums import Resampling
from rasterio.errors import RasterioError
from rasterio.windows import Window

from prevmap.errors import InputError
from prevmap.inputs.coverage import Bounds
from prevmap.inputs.raster import Raster

# Common practice, no source.
SENTINELS = (
    -999.0, -999.9, -9999.0, -9999.9, -99999.0, 999.0, 9999.0, 99999.0, 32767.0, -32768.0, 65535.0,
    2147483647.0, -2147483648.0, 4294967295.0,
)  # fmt: skip
BYTE_SENTINEL = 255.0  # in rasters of whole numbers from 0 to 255 only
HUGE = 1e19  # no covariate is as large: 1e20, 9.97e36, 3.4e38

FAR = 0.5  # how far outside the other values a sentinel lies, as a share of their range
MOST_PIXELS = 4_000_000  # of a larger window every k-th row and column is looked at
MOST_KINDS = 20  # different suspects that are looked at


@dataclass(frozen=True, slots=True)
class Sentinel:
    """A suspected mark of missing data.

    Attributes
    ----------
    value : float
        As stored in the file.
    share : float
        Of the pixels with a value that were looked at.
    lower, upper : float
        Range of the other values, with the scale and offset of the file.
    """

    value: float
    share: float
    lower: float
    upper: float


def find_sentinels(raster: Raster, bounds: Bounds) -> list[Sentinel]:
    """Return the usual marks of missing data that a raster holds as if they were values.

    Parameters
    ----------
    raster : Raster
    bounds : (left, bottom, right, top)
        Where to look, in the raster's coordinates.

    Returns
    -------
    list of Sentinel
        Numbers of `SENTINELS`, or beyond `HUGE`, that lie outside all other values by more than half of
        their range. Pixels that the file itself marks as missing are left aside.

    Raises
    ------
    InputError
        If the raster cannot be read.
    """
    stored, scale, offset = _stored(raster, bounds)
    stored = stored[~np.isnan(stored)]
    suspected = np.isin(stored, _listed(stored)) | (np.abs(stored) >= HUGE)
    found: list[Sentinel] = []
    # From the outermost inwards, because a nearer one is judged without those beyond it.
    for value in sorted(set(stored[suspected].tolist()), key=abs, reverse=True)[:MOST_KINDS]:
        others = stored[~np.isin(stored, [value, *(each.value for each in found)])]
        if not len(others):
            break
        least, most = float(others.min()), float(others.max())
        beyond = max(least - value, value - most)
        if beyond > FAR * (most - least) and beyond > 0.0:
            share = float(np.mean(stored == value))
            lower, upper = sorted((least * scale + offset, most * scale + offset))
            found.append(Sentinel(value, share, lower, upper))
    return found


def _listed(stored: NDArray[np.float64]) -> NDArray[np.float64]:
    listed = np.asarray(SENTINELS)
    whole = len(stored) > 0 and stored.min() >= 0.0 and stored.max() <= BYTE_SENTINEL
    if whole and np.array_equal(stored, np.rint(stored)):
        listed = np.append(listed, BYTE_SENTINEL)
    # As a 32-bit raster holds them: -9999.9 is -9999.900390625 there.
    return np.concatenate([listed, listed.astype(np.float32).astype(float)])


def _stored(raster: Raster, bounds: Bounds) -> tuple[NDArray[np.float64], float, float]:
    row, col, rows, cols = raster.block(bounds)
    if not rows or not cols:
        return np.empty(0), 1.0, 0.0
    step = max(1, math.ceil(math.sqrt(rows * cols / MOST_PIXELS)))
    shape = (math.ceil(rows / step), math.ceil(cols / step))
    first = raster.rows - row - rows if raster.south_up else row
    with raster.opened() as source:
        try:
            values = source.read(
                raster.band,
                window=Window(col, first, cols, rows),
                out_shape=shape,
                resampling=Resampling.nearest,
                masked=True,
            )
        except RasterioError as error:
            raise InputError(f"{raster.path}: the raster cannot be read ({error}).") from error
        scale, offset = source.scales[raster.band - 1], source.offsets[raster.band - 1]
    return np.asarray(values.compressed(), dtype=float), float(scale), float(offset)
