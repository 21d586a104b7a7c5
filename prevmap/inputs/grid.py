"""Grid: square cells over the region, each unit's share of every cell, and the people in each share."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from numpy.typing import NDArray
from rasterio.transform import Affine

from prevmap.errors import InputError
from prevmap.inputs.coverage import Bounds, cell_shares, cut
from prevmap.inputs.findings import findings_frame
from prevmap.inputs.people import count_people

if TYPE_CHECKING:
    from prevmap.inputs.population import Population
    from prevmap.inputs.region import Region

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

DEFAULT_CELLS = 5_000
MOST_CELLS = 20_000_000  # of the bounding rectangle
LEAST_SHARE = 1e-9  # of a cell; less is rounding


@dataclass(frozen=True, slots=True, eq=False)
class Grid:
    """Square cells in the working coordinate system, aligned to multiples of their size.

    Attributes
    ----------
    region : Region
    cell_m : float
        Edge of a cell in metres.
    shape : (rows, cols)
        Of the rectangle round the region; row 0 is in the north.
    origin_m : (left, top)
        Outer corner of the first cell.
    cell : (n,) int
        Cells with any land inside the boundary, as flat index row * cols + col, ascending.
    xy_km : (n, 2) float
        Where a cell is predicted: its centre where that is inside the boundary, else a point of its land.
    coverage : (n,) float in (0, 1]
        Share of the cell inside the boundary.
    people : (n,) float or None
        People on the cell's land.
    pair_cell : (k,) int
        For every piece (cell within unit): position of its cell in `cell`.
    pair_unit : (k,) int
        Row of ``region.units``; pieces are sorted by unit, then cell.
    pair_coverage : (k,) float
        Share of the cell inside the unit and outside excluded land.
    pair_people : (k,) float or None
        People in the piece.
    population : Population or None
    people_known : (n_units,) float or None
        Share of each unit's land on which the population raster has a value.
    people_unassigned : float
        People who belong to a unit but to no cell: on excluded land, or in an official total of a unit
        where the raster shows nobody.
    findings : DataFrame
    """

    region: Region
    cell_m: float
    shape: tuple[int, int]
    origin_m: tuple[float, float]
    cell: Integers
    xy_km: Floats
    coverage: Floats
    people: Floats | None
    pair_cell: Integers
    pair_unit: Integers
    pair_coverage: Floats
    pair_people: Floats | None
    population: Population | None
    people_unassigned: float
    findings: pd.DataFrame
    people_known: Floats | None = None

    @property
    def cell_km(self) -> float:
        """Edge of a cell in km."""
        return self.cell_m / 1000.0

    @property
    def bounds_m(self) -> Bounds:
        """Left, bottom, right and top of the rectangle of cells, in metres."""
        return _bounds(self.origin_m, self.shape, self.cell_m)

    @property
    def transform(self) -> Affine:
        """Affine transform from column and row to metres, for rasterio."""
        return Affine(self.cell_m, 0.0, self.origin_m[0], 0.0, -self.cell_m, self.origin_m[1])

    def __len__(self) -> int:
        return len(self.cell)

    def frame_points(self, start: int = 0, stop: int | None = None) -> gpd.GeoDataFrame:
        """Return where cells `start` to `stop` are predicted, as points in metres, in the order of `cell`."""
        xy = 1000.0 * self.xy_km[start:stop]
        index = pd.RangeIndex(start, start + len(xy))
        return gpd.GeoDataFrame(
            index=index, geometry=gpd.points_from_xy(xy[:, 0], xy[:, 1]), crs=self.region.crs
        )

    def to_raster(self, values: NDArray[Any], fill: float = np.nan) -> Floats:
        """Return (n,) values of the cells as (rows, cols), row 0 in the north, `fill` elsewhere."""
        values = np.asarray(values, dtype=float)
        if values.shape != self.cell.shape:
            raise InputError(
                f"{values.shape} values for {len(self.cell)} cells; one value per cell is expected."
            )
        flat = np.full(self.shape[0] * self.shape[1], fill)
        flat[self.cell] = values
        return flat.reshape(self.shape)

    def __repr__(self) -> str:
        people = "no population" if self.people is None else f"{self.people.sum():,.0f} people"
        return (
            f"Grid({len(self.cell):,} cells of {self.cell_km:.4g} km, {self.shape[0]} x {self.shape[1]}, "
            f"{len(self.region.units)} units, {len(self.pair_cell):,} pieces, {people})"
        )


def build_grid(
    region: Region,
    cell_km: float | None = None,
    *,
    cells: int | None = None,
    population: Population | None = None,
    progress: bool = False,
) -> Grid:
    """Return the grid of a region (see `Region.grid`)."""
    edge = _edge_m(region, cell_km, cells)
    origin, shape = _frame(region.boundary.bounds, edge)
    bounds = _bounds(origin, shape, edge)
    cell, coverage = _land(region.boundary, shape, bounds)
    xy = _prediction_points(region, cell, coverage, shape, origin, edge)
    pair_cell, pair_unit, pair_coverage, land = _pieces(region, cell, shape, bounds)
    grid = Grid(
        region, edge, shape, origin, cell, xy / 1000.0, coverage, None, pair_cell, pair_unit, pair_coverage,
        None, population, 0.0, findings_frame([]),
    )  # fmt: skip
    return grid if population is None else count_people(grid, population, land, progress)


def cell_boxes(
    cell: Integers, shape: tuple[int, int], origin: tuple[float, float], edge: float
) -> NDArray[Any]:
    """Return (k,) squares in metres for flat cell indices."""
    row, col = np.divmod(cell, shape[1])
    left, top = origin
    return np.atleast_1d(
        shapely.box(left + col * edge, top - (row + 1) * edge, left + (col + 1) * edge, top - row * edge)
    )


def _edge_m(region: Region, cell_km: float | None, cells: int | None) -> float:
    if cell_km is not None and cells is not None:
        raise InputError(f"cell_km={cell_km!r} and cells={cells!r}: give one of them.")
    left, bottom, right, top = region.boundary.bounds
    if cell_km is not None:
        if isinstance(cell_km, bool) or not (np.isfinite(cell_km) and cell_km > 0.0):
            raise InputError(f"cell_km={cell_km!r}: a positive number of km is expected.")
        edge = 1000.0 * float(cell_km)
    else:
        wanted = DEFAULT_CELLS if cells is None else cells
        if isinstance(wanted, bool) or not (np.isfinite(wanted) and wanted >= 1):
            raise InputError(f"cells={cells!r}: a number of cells, 1 or more, is expected.")
        edge = math.sqrt(region.boundary.area / float(wanted))
    rectangle = ((right - left) / edge + 1.0) * ((top - bottom) / edge + 1.0)
    if rectangle > MOST_CELLS:
        fits = _three_digits(1.02 * math.sqrt((right - left) * (top - bottom) / MOST_CELLS), up=True)
        raise InputError(
            f"cells of {edge / 1000.0:.3g} km make {rectangle:,.0f} of them over the region; at most "
            f"{MOST_CELLS:,} fit. An edge of cell_km={fits / 1000.0:g} fits."
        )
    if cell_km is not None:
        return edge
    # Cells cut by the outline make more of them than area alone says: correct the edge by counting.
    best, least = edge, np.inf
    for _ in range(4):
        edge = _three_digits(min(edge, max(right - left, top - bottom)))
        origin, shape = _frame(region.boundary.bounds, edge)
        found = len(_land(region.boundary, shape, _bounds(origin, shape, edge))[0])
        off = abs(math.log(found / float(wanted)))
        if off < least:
            best, least = edge, off
        if off < 0.01:
            break
        edge *= math.sqrt(found / float(wanted))
    return best


def _three_digits(value: float, *, up: bool = False) -> float:
    step = 10.0 ** (math.floor(math.log10(value)) - 2)
    return (math.ceil(value / step) if up else round(value / step)) * step


def _frame(bounds: Bounds, edge: float) -> tuple[tuple[float, float], tuple[int, int]]:
    first_col, last_col = math.floor(bounds[0] / edge), math.ceil(bounds[2] / edge)
    first_row, last_row = math.floor(bounds[1] / edge), math.ceil(bounds[3] / edge)
    shape = (max(last_row - first_row, 1), max(last_col - first_col, 1))
    return (first_col * edge, (first_row + shape[0]) * edge), shape


def _bounds(origin: tuple[float, float], shape: tuple[int, int], edge: float) -> Bounds:
    return origin[0], origin[1] - shape[0] * edge, origin[0] + shape[1] * edge, origin[1]


def _land(boundary: Any, shape: tuple[int, int], bounds: Bounds) -> tuple[Integers, Floats]:
    cell, share = cell_shares(boundary, shape, bounds)
    kept = share >= LEAST_SHARE
    return cell[kept], np.minimum(share[kept], 1.0)


def _prediction_points(
    region: Region,
    cell: Integers,
    coverage: Floats,
    shape: tuple[int, int],
    origin: tuple[float, float],
    edge: float,
) -> Floats:
    row, col = np.divmod(cell, shape[1])
    xy = np.column_stack([origin[0] + (col + 0.5) * edge, origin[1] - (row + 0.5) * edge])
    partial = np.flatnonzero(coverage < 1.0)
    if not len(partial):
        return xy
    shapely.prepare(region.boundary)
    dry = shapely.intersects_xy(region.boundary, xy[partial, 0], xy[partial, 1])
    away = partial[~dry]
    if len(away):
        land = cut(region.boundary, cell_boxes(cell[away], shape, origin, edge))
        points = shapely.point_on_surface(land)
        lost = np.flatnonzero(shapely.is_empty(points))
        if len(lost):
            # Slivers thinner than rounding leave no polygon: the nearest land is theirs.
            links = shapely.shortest_line(region.boundary, shapely.points(xy[away[lost]]))
            points[lost] = shapely.get_point(links, 0)
        xy[away] = shapely.get_coordinates(points)
    return xy


def _pieces(
    region: Region, cell: Integers, shape: tuple[int, int], bounds: Bounds
) -> tuple[Integers, Integers, Floats, NDArray[Any]]:
    land = region.land() if region.has_units else np.empty(0, dtype=object)
    cells, units, shares = [], [], []
    for place, piece in enumerate(land):
        flat, share = cell_shares(piece, shape, bounds)
        kept = share >= LEAST_SHARE
        flat, share = flat[kept], np.minimum(share[kept], 1.0)
        position = np.searchsorted(cell, flat)
        # A unit's sliver at the outline may lie in a cell whose land as a whole is below the least share.
        known = position < len(cell)
        known[known] = cell[position[known]] == flat[known]
        cells.append(position[known])
        shares.append(share[known])
        units.append(np.full(int(known.sum()), place, dtype=np.int64))
    if not len(land):
        return np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64), np.empty(0), land
    return np.concatenate(cells), np.concatenate(units), np.concatenate(shares), land
