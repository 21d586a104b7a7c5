"""People in every cell and every piece of a unit, summed from the population raster block by block."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import shapely
from numpy.typing import NDArray
from pyproj import Transformer
from tqdm.auto import tqdm

from prevmap.errors import InputError
from prevmap.inputs.coverage import areal, cut
from prevmap.inputs.findings import Finding, findings_frame, listed
from prevmap.inputs.layer import nearest
from prevmap.inputs.population import PIXELS_AT_ONCE, Population
from prevmap.inputs.raster import describe_bounds

if TYPE_CHECKING:
    from prevmap.inputs.grid import Grid

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

CELLS_AT_ONCE = 20_000  # polygons of cells held at once, some 20 MB
POORLY_KNOWN = 0.05  # share of a unit's land with a population value, below which it is not known
PARTLY_KNOWN = 0.5  # and below which it is worth a warning
POORLY_COVERED = 0.05  # share of the land without a population value that is worth a warning


def count_people(grid: Grid, population: Population, land: NDArray[Any], progress: bool = False) -> Grid:
    """Return the grid with the people of every cell and piece.

    Parameters
    ----------
    grid : Grid
        Without people.
    population : Population
    land : (n_units,) array of polygons
        Each unit without excluded land, in metres.
    progress : bool
        Show a progress bar.

    Returns
    -------
    Grid
        The sum over a unit's pieces is the sum of the raster over the unit's land.

    Raises
    ------
    InputError
        If the raster does not meet the region or names a unit that is not there.

    Notes
    -----
    Cells and units are taken to the raster's coordinates corner by corner and cut there, so that the pieces
    of a unit tile it without gaps, whatever the two coordinate systems.
    """
    counter = _Counter(grid, population)
    findings: list[Finding] = []
    people: Floats
    if grid.region.has_units:
        pairs = (grid.pair_cell, grid.pair_unit, grid.pair_coverage)
        pair_people, covered, whole = counter.pieces(*pairs, land, progress)
        people = _per_cell(grid, pair_people)
    else:
        all_cells = np.arange(len(grid))
        boundary = np.asarray([grid.region.boundary], dtype=object)
        nowhere = np.zeros(len(grid), dtype=np.int64)
        people, covered, whole = counter.pieces(all_cells, nowhere, grid.coverage, boundary, progress)
        pair_people = np.empty(0)
    if covered.sum() == 0.0:
        raise InputError(_no_overlap(grid, population))
    findings += _coverage_findings(population, float(covered.sum()), float(whole.sum()))
    known = np.divide(covered, whole, out=np.zeros_like(covered), where=whole > 0.0)
    if grid.region.has_units:
        findings += _unit_findings(grid, population, known)
    unassigned = _on_excluded_land(grid, population, counter) if grid.region.exclude is not None else 0.0
    if unassigned >= 0.5:
        what = f"{unassigned:,.0f} people of the raster live on excluded land"
        findings.append(Finding(None, None, "population", "note", what, "in no cell and no unit's number"))
    people = _once_where_units_overlap(grid, people, counter)
    if population.unit_total is not None:
        pair_people, people, missing, said = _rescaled(grid, population, pair_people, people)
        unassigned += missing
        findings += said
    if people.sum() == 0.0:
        what = f"{population.path.name} shows no people in the region"
        findings.append(Finding(None, None, "population", "warning", what, "every cell is blank"))
    return replace(
        grid,
        people=people,
        pair_people=pair_people,
        people_unassigned=float(unassigned),
        people_known=np.minimum(known, 1.0) if grid.region.has_units else None,
        findings=findings_frame(findings),
    )


class _Counter:
    """Cell polygons and units in the raster's coordinates, and the sums over their pieces."""

    def __init__(self, grid: Grid, population: Population) -> None:
        self.grid = grid
        self.population = population
        left, bottom, right, top = grid.bounds_m
        centre = (0.5 * (left + right), 0.5 * (bottom + top))
        self.to_raster = population.raster.from_crs(grid.region.crs, centre)
        x, y = self.to_raster(
            np.array([centre[0] - 0.5 * grid.cell_m, centre[0] + 0.5 * grid.cell_m]),
            np.array([centre[1] - 0.5 * grid.cell_m, centre[1] + 0.5 * grid.cell_m]),
        )
        pixel = population.raster.width * population.raster.height
        pixels_per_cell = max(float(abs(np.ptp(x) * np.ptp(y))) / pixel, 1e-9)
        self.block = max(int(np.sqrt(min(CELLS_AT_ONCE, PIXELS_AT_ONCE / pixels_per_cell))), 1)

    def outlines(self, shapes: NDArray[Any]) -> NDArray[Any]:
        """Return polygons of the working system in the raster's coordinates, corner by corner."""
        moved = shapely.transform(shapes, lambda xy: np.column_stack(self.to_raster(xy[:, 0], xy[:, 1])))
        bad = ~shapely.is_valid(moved)
        if bad.any():
            moved[bad] = [areal(each) for each in shapely.make_valid(moved[bad])]
        return moved

    def cells(self, cell: Integers) -> NDArray[Any]:
        """Return (k,) cell quadrilaterals in the raster's coordinates; neighbours share their corners."""
        grid = self.grid
        row, col = np.divmod(cell, grid.shape[1])
        rows = np.stack([row, row, row + 1, row + 1], axis=1)
        cols = np.stack([col, col + 1, col + 1, col], axis=1)
        x, y = self.to_raster(
            (grid.origin_m[0] + cols * grid.cell_m).ravel(), (grid.origin_m[1] - rows * grid.cell_m).ravel()
        )
        corners = np.stack([np.reshape(x, rows.shape), np.reshape(y, rows.shape)], axis=-1)
        return np.atleast_1d(shapely.polygons(corners))

    def pieces(
        self, cells: Integers, shape_of: Integers, shares: Floats, shapes: NDArray[Any], progress: bool
    ) -> tuple[Floats, Floats, Floats]:
        """Return people of each (cell, shape) piece; pixels with a value, and in all, of each shape."""
        people = np.zeros(len(cells))
        covered, whole = np.zeros(len(shapes)), np.zeros(len(shapes))
        outlines = self.outlines(shapes)
        flat = self.grid.cell[cells]
        row, col = np.divmod(flat, self.grid.shape[1])
        block = (row // self.block) * (self.grid.shape[1] // self.block + 1) + col // self.block
        # Blocks of neighbouring cells, and within a block one shape after the other.
        order = np.lexsort((shape_of, block))
        starts = (
            np.flatnonzero(np.r_[True, np.diff(block[order]) != 0]) if len(order) else np.empty(0, np.int64)
        )
        pixel = self.population.raster.width * self.population.raster.height
        groups = np.split(order, starts[1:]) if len(order) else []
        for group in tqdm(groups, desc="people", unit="block", disable=not progress):
            parts = self.cells(flat[group])
            cut_up = np.flatnonzero(shares[group] < 1.0)
            for shape in np.unique(shape_of[group[cut_up]]):
                some = cut_up[shape_of[group[cut_up]] == shape]
                parts[some] = cut(outlines[shape], parts[some])
            people[group], pixels = self.population.people_in(parts)
            covered += np.bincount(shape_of[group], weights=pixels, minlength=len(shapes))
            area = shapely.area(parts) / pixel
            whole += np.bincount(shape_of[group], weights=area, minlength=len(shapes))
        return people, covered, whole


def _per_cell(grid: Grid, of_pieces: Floats) -> Floats:
    return np.asarray(np.bincount(grid.pair_cell, weights=of_pieces, minlength=len(grid)), dtype=np.float64)


def _no_overlap(grid: Grid, population: Population) -> str:
    raster = population.raster
    to_raster = Transformer.from_crs(grid.region.crs, raster.crs, always_xy=True)
    region = to_raster.transform_bounds(*grid.region.boundary.bounds)
    return (
        f"{population.path}: the population raster has no value in the region. In {raster.crs.name}, the "
        f"raster covers {describe_bounds(raster.bounds)}, the region {describe_bounds(region)}."
    )


def _coverage_findings(population: Population, covered: float, whole: float) -> list[Finding]:
    missing = 1.0 - covered / whole
    if missing < 0.001:
        return []
    severity = "warning" if missing > POORLY_COVERED else "note"
    what = f"{population.path.name} has no value on {100.0 * missing:.2g} % of the region's land"
    return [Finding(None, None, "population", severity, what, "counted as nobody living there")]  # type: ignore[arg-type]


def _unit_findings(grid: Grid, population: Population, known: Floats) -> list[Finding]:
    names = np.asarray(grid.region.units["unit"], dtype=object)
    findings = []
    unknown = known < POORLY_KNOWN
    if unknown.any():
        what = f"{population.path.name} has (almost) no value in {listed(repr(n) for n in names[unknown])}"
        action = "their population is taken as not known; they are weighted by area"
        findings.append(Finding(None, None, "population", "warning", what, action))
    partly = ~unknown & (known < PARTLY_KNOWN)
    if partly.any():
        shares = (f"{n!r} ({100.0 * k:.0f} %)" for n, k in zip(names[partly], known[partly], strict=True))
        what = f"{population.path.name} has a value on part of the land only in {listed(shares)}"
        action = "their population counts the people on that part"
        findings.append(Finding(None, None, "population", "warning", what, action))
    return findings


def _on_excluded_land(grid: Grid, population: Population, counter: _Counter) -> float:
    region = grid.region
    whole = shapely.union_all(region.units.geometry.array)
    wet = areal(shapely.intersection(whole, region.exclude))
    if wet.is_empty:
        return 0.0
    return float(population.people_in(counter.outlines(shapely.get_parts(wet)))[0].sum())


def _once_where_units_overlap(grid: Grid, people: Floats, counter: _Counter) -> Floats:
    """Return people per cell with land shared by overlapping units counted once."""
    if not len(grid.pair_cell):
        return people
    claimed = _per_cell(grid, grid.pair_coverage)
    twice = np.flatnonzero(claimed > grid.coverage + 1e-6)
    if not len(twice):
        return people
    boundary = np.asarray([grid.region.boundary], dtype=object)
    nowhere = np.zeros(len(twice), dtype=np.int64)
    people = people.copy()
    people[twice] = counter.pieces(twice, nowhere, grid.coverage[twice], boundary, False)[0]
    return people


def _rescaled(
    grid: Grid, population: Population, pair_people: Floats, people: Floats
) -> tuple[Floats, Floats, float, list[Finding]]:
    """Return piece and cell people scaled to official totals, people that cannot be placed, and findings."""
    names = grid.region.units["unit"].tolist()
    totals = population.unit_total or {}
    unknown = [unit for unit in totals if unit not in names]
    if unknown:
        near = nearest(unknown[0], names)
        hint = f" (did you mean {near}?)" if near else ""
        raise InputError(
            f"unit_total: no unit {listed(repr(unit) for unit in unknown)} in the region{hint}. "
            f"Units: {listed(names)}."
        )
    before = np.bincount(grid.pair_unit, weights=pair_people, minlength=len(names))
    factor = np.ones(len(names))
    unplaced = 0.0
    findings = []
    for place, unit in enumerate(names):
        if unit not in totals:
            continue
        if before[place] > 0.0:
            factor[place] = totals[unit] / before[place]
            what = f"unit {unit!r}: {before[place]:,.0f} people in the raster, {totals[unit]:,.0f} officially"
            action = f"its people are multiplied by {factor[place]:.4g}"
            findings.append(Finding(None, None, "unit_total", "note", what, action))
        elif totals[unit] > 0.0:
            unplaced += totals[unit]
            what = f"unit {unit!r}: nobody in the raster, {totals[unit]:,.0f} people officially"
            action = "they cannot be placed in cells and are in no number"
            findings.append(Finding(None, None, "unit_total", "warning", what, action))
    left = [unit for unit in names if unit not in totals]
    if left:
        what = f"no official total for {len(left)} units: {listed(left)}"
        findings.append(Finding(None, None, "unit_total", "note", what, "people there as in the raster"))
    scaled = pair_people * factor[grid.pair_unit]
    raw = _per_cell(grid, pair_people)
    new = _per_cell(grid, scaled)
    ratio = np.divide(new, raw, out=np.ones_like(new), where=raw > 0.0)
    return scaled, people * ratio, unplaced, findings
