"""Ledger: which rows of a table a survey uses, which it does not, and why."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import geopandas as gpd
import numpy as np
import pandas as pd
from numpy.typing import NDArray
from pyproj import CRS

from prevmap.errors import InputError
from prevmap.inputs.coordinates import Positions, crs_from, geometry_crs, geometry_positions, read_positions
from prevmap.inputs.counts import read_counts, totals_rows
from prevmap.inputs.findings import Finding, Remark, findings_frame
from prevmap.inputs.notes import SurveyNotes
from prevmap.inputs.positions import position_remarks, stated_crs_remarks
from prevmap.inputs.reading import cell_text, read_number
from prevmap.inputs.table import Table, converted

# Columns that a survey gives a meaning of its own; others of the same name step aside.
RESERVED = ("row", "site", "examined", "positive", "unit", "weight", "geometry")
CRS_COLUMNS = frozenset(
    ("crs", "epsg", "srid", "datum", "coordinate_system", "coordinate system", "utm_zone")
)


@dataclass(frozen=True, slots=True)
class Ledger:
    """A table after every row was judged.

    Parameters
    ----------
    frame : GeoDataFrame
        Accepted rows: site, examined, positive, [unit], [weight], the other columns, geometry; index "row".
    unplaced : DataFrame
        Rows with a unit and valid counts, without a position.
    findings : tuple of Finding
        About rows of the table, in their order; about the whole table first.
    rows_read : int
    note_columns : mapping of str to tuple of str
        Notes that are columns of `frame`.
    """

    frame: gpd.GeoDataFrame
    unplaced: pd.DataFrame
    findings: tuple[Finding, ...]
    rows_read: int
    note_columns: Mapping[str, tuple[str, ...]]


def roles_of(**given: str | None) -> dict[str, str]:
    """Return the columns by role after checking that they go together.

    Raises
    ------
    InputError
        Where a name is not text, one column has two roles, or only half of a pair of coordinates is given.
        A column may be site and unit at once: a survey of whole units has one site in each.
    """
    roles: dict[str, str] = {}
    for role, name in given.items():
        if name is None:
            continue
        if not isinstance(name, str) or not name.strip():
            raise InputError(f"{role}={name!r}: the name of a column is expected.")
        for other, taken in roles.items():
            if taken == name and {role, other} != {"site", "unit"}:
                raise InputError(f"{other}= and {role}= are the same column {name!r}.")
        roles[role] = name
    for first, second in (("lon", "lat"), ("x", "y")):
        if (first in roles) != (second in roles):
            have, lack = (first, second) if first in roles else (second, first)
            raise InputError(f"{have}={roles[have]!r} is given without {lack}=: both are needed.")
    if "lon" in roles and "x" in roles:
        raise InputError("lon= and lat= are given as well as x= and y=: give one pair.")
    return roles


def judged(
    table: Table, roles: Mapping[str, str], *, crs: Any, about: SurveyNotes, decimal: str | None
) -> Ledger:
    """Judge every row of a table.

    Parameters
    ----------
    table : Table
    roles : mapping of str to str
        Columns by role, from `roles_of`.
    crs : optional
        Coordinate system of x and y, or of a geometry that names none.
    about : SurveyNotes
    decimal : {".", ","} or None

    Raises
    ------
    InputError
        Where a column is missing, the coordinate system is unknown or unsuited, or no row can be used.
    """
    if decimal not in (None, ".", ","):
        raise InputError(f"decimal={decimal!r}: '.' or ',' is expected.")
    names = [str(name) for name in table.cells.columns]
    # Headers of files are trimmed, so an argument copied from one with its blanks has to be trimmed too.
    roles = {role: " ".join(name.split()) if table.typed else name for role, name in roles.items()}
    for role, name in roles.items():
        if name not in names:
            raise table.missing_column(name, role)
    if isinstance(about.ages, tuple):
        for age in about.ages:
            if isinstance(age, str) and age not in names:
                raise table.missing_column(age, "ages")
    system, positions, fields = _positions(table, roles, crs, decimal)
    n = len(table.rows)
    columns = {role: list(table.cells[name]) for role, name in roles.items()}
    site, unit = (
        [cell_text(cell) for cell in columns[role]] if role in columns else [None] * n
        for role in ("site", "unit")
    )
    counts = read_counts(
        columns["examined"],
        columns["positive"],
        names=(roles["examined"], roles["positive"]),
        decimal=positions.decimal,
    )
    remarks = [*positions.remarks, *position_remarks(positions.xy, system, fields), *counts.remarks]
    for name in names:
        if name.strip().casefold() in CRS_COLUMNS:
            remarks += stated_crs_remarks(name, list(table.cells[name]), system)
    called = [site[at] or unit[at] or _first_text(table, at) for at in range(n)]
    totals = totals_rows(counts, positions.absent, called)
    remarks += totals
    weights, weight_remarks = _weights(columns.get("weight"), n, positions.decimal)
    remarks += weight_remarks
    bad = np.zeros(n, dtype=bool)
    bad[[remark.at for remark in remarks if remark.at is not None and remark.severity == "error"]] = True
    usable = counts.usable & ~bad
    total = np.zeros(n, dtype=bool)
    total[[remark.at for remark in totals if remark.at is not None]] = True
    lost = positions.absent & ~total
    unplaced = usable & lost & np.array([name is not None for name in unit], dtype=bool)
    remarks += _absent_remarks(lost, unplaced, unit, "unit" in roles)
    accepted = usable & ~positions.absent
    if "site" in roles:
        empty = [at for at in np.flatnonzero(accepted) if site[at] is None]
        remarks += [
            Remark(int(at), "site", "warning", "the site has no name", "named by its position")
            for at in empty
        ]
    named = _site_names(site, positions.xy, accepted)
    others, renamed, rename_remarks = _other_columns(table, roles, positions)
    remarks += rename_remarks
    findings = (*table.findings, *_labelled(remarks, table.rows, named))
    rows_read = n + sum(finding.severity == "error" for finding in table.findings)
    if not accepted.any():
        raise _nothing_left(table.label, rows_read, int(unplaced.sum()), findings)
    judged_columns: dict[str, Any] = {
        "site": [name or f"row {row}" for name, row in zip(named, table.rows, strict=True)],
        "examined": counts.examined,
        "positive": counts.positive,
    }
    if "unit" in roles:
        judged_columns["unit"] = pd.Series(unit, dtype=object)
    if "weight" in roles:
        judged_columns["weight"] = weights
    everything = pd.concat([pd.DataFrame(judged_columns), others], axis=1)
    everything["site"] = everything["site"].astype(object)
    everything.index = pd.Index(table.rows, name="row")
    points = gpd.points_from_xy(positions.xy[accepted, 0], positions.xy[accepted, 1])
    frame = gpd.GeoDataFrame(everything[accepted], geometry=points, crs=system)
    note_columns = {
        note: tuple(renamed.get(name, name) for name in found)
        for note, found in about.columns(set(names) - set(roles.values())).items()
    }
    return Ledger(frame, everything[unplaced].copy(), findings, rows_read, note_columns)


def in_row_order(findings: Sequence[Finding]) -> tuple[Finding, ...]:
    """Return findings about the whole input first, the others by row, for rows that are numbers."""
    return tuple(
        sorted(
            findings, key=lambda each: (each.row is not None, each.row if isinstance(each.row, int) else 0)
        )
    )


def _positions(
    table: Table, roles: Mapping[str, str], crs: Any, decimal: str | None
) -> tuple[CRS, Positions, tuple[str, str]]:
    for fields in (("lon", "lat"), ("x", "y")):
        if fields[0] not in roles:
            continue
        if crs is None and fields == ("x", "y"):
            raise InputError(f"{table.label}: x= and y= need the coordinate system: crs=, e.g. 'EPSG:32736'.")
        system = crs_from("EPSG:4326" if crs is None else crs)
        if fields == ("lon", "lat") and not system.is_geographic:
            raise InputError(
                f"crs={crs!r} is in {system.axis_info[0].unit_name}, but lon= and lat= are degrees: "
                "give the columns as x= and y=."
            )
        cells = [list(table.cells[roles[field]]) for field in fields]
        read = read_positions(*cells, fields=fields, decimal=decimal, degrees=system.is_geographic)
        read.remarks.extend(_exchanged_names(roles, fields))
        if table.geometry is not None:
            what = f"positions are taken from columns {roles[fields[0]]!r} and {roles[fields[1]]!r}"
            read.remarks.append(
                Remark(None, "position", "note", what, "the geometry of the layer is not used")
            )
        return system, read, fields
    if table.geometry is None:
        raise InputError(
            f"{table.label}: name the columns of coordinates: lon= and lat=, or x=, y= and crs=."
        )
    system = geometry_crs(table.geometry, crs, table.label)
    fields = ("lon", "lat") if system.is_geographic else ("x", "y")
    return system, geometry_positions(table.geometry, decimal or "."), fields


def _exchanged_names(roles: Mapping[str, str], fields: tuple[str, str]) -> list[Remark]:
    """Warn where the column called latitude was given as longitude."""
    first, second = (roles[field].casefold() for field in fields)
    words = ("lat", "lon") if fields == ("lon", "lat") else ("north", "east")
    if words[0] in first and words[1] in second and words[1] not in first and words[0] not in second:
        what = f"{fields[0]} is column {roles[fields[0]]!r} and {fields[1]} is column {roles[fields[1]]!r}"
        action = f"used as given; check that {fields[0]} and {fields[1]} are not exchanged"
        return [Remark(None, "position", "warning", what, action)]
    return []


def _first_text(table: Table, at: int) -> str | None:
    return next(
        (cell_text(cell) for cell in table.cells.iloc[at] if isinstance(cell, str) and cell_text(cell)), None
    )


def _weights(
    cells: Sequence[object] | None, n: int, decimal: str
) -> tuple[NDArray[np.float64], list[Remark]]:
    weights = np.ones(n)
    remarks: list[Remark] = []
    for at, cell in enumerate(cells or ()):
        reading = read_number(cell, decimal)
        if reading.value is not None and reading.value > 0:
            weights[at] = reading.value
            continue
        found = reading.problem or (
            "weight is missing" if reading.value is None else f"weight is {reading.value:g}"
        )
        remarks.append(
            Remark(at, "weight", "error", f"{found}; a number above 0 is expected", "row not used")
        )
    return weights, remarks


def _absent_remarks(
    lost: NDArray[np.bool_], unplaced: NDArray[np.bool_], unit: Sequence[str | None], has_units: bool
) -> list[Remark]:
    remarks: list[Remark] = []
    for at in map(int, np.flatnonzero(lost)):
        if unplaced[at]:
            what = f"has no coordinates, but the unit {unit[at]!r}"
            remarks.append(Remark(at, "position", "note", what, "used only in the unit's direct estimate"))
        elif unit[at] is None:
            what = "has no coordinates and no unit" if has_units else "has no coordinates"
            remarks.append(Remark(at, "position", "error", what, "row not used: no position"))
    return remarks


def _site_names(
    site: Sequence[str | None], xy: NDArray[np.float64], accepted: NDArray[np.bool_]
) -> list[str | None]:
    """Return the site of each row; accepted rows without a name are numbered by position, west to east."""
    names = list(site)
    stem = "unnamed site" if any(site) else "site"
    nameless = [at for at in map(int, np.flatnonzero(accepted)) if site[at] is None]
    places = sorted({(xy[at, 0], xy[at, 1]) for at in nameless})
    taken = {name for name in site if name}
    free = (number for number in range(1, len(places) + len(taken) + 1) if f"{stem} {number}" not in taken)
    numbers = dict(zip(places, free, strict=False))
    for at in nameless:
        names[at] = f"{stem} {numbers[(xy[at, 0], xy[at, 1])]}"
    return names


def _other_columns(
    table: Table, roles: Mapping[str, str], positions: Positions
) -> tuple[pd.DataFrame, dict[str, str], list[Remark]]:
    served = {roles[role] for role in ("site", "examined", "positive", "unit", "weight") if role in roles}
    located = {
        roles[role]: k
        for pair in (("lon", "lat"), ("x", "y"))
        for k, role in enumerate(pair)
        if role in roles
    }
    names = [str(name) for name in table.cells.columns]
    columns: dict[str, Any] = {}
    renamed: dict[str, str] = {}
    remarks: list[Remark] = []
    for name in names:
        if name in served:
            continue
        kept = name
        while kept in RESERVED or (kept != name and kept in names):
            kept += "_in_table"
        if kept != name:
            renamed[name] = kept
            what = f"the table has a column {name!r} that is not given as {name}="
            remarks.append(Remark(None, name, "note", what, f"kept as {kept!r}"))
        if name in located:
            columns[kept] = positions.xy[:, located[name]]
        else:
            cells = table.cells[name]
            columns[kept] = converted(cells, positions.decimal) if table.typed else cells
    return pd.DataFrame(columns, index=table.cells.index), renamed, remarks


def _labelled(
    remarks: Sequence[Remark], rows: Sequence[int | str], sites: Sequence[str | None]
) -> tuple[Finding, ...]:
    whole = [Finding(None, None, *remark[1:]) for remark in remarks if remark.at is None]
    single = [remark for remark in remarks if remark.at is not None]
    single.sort(key=lambda remark: remark.at or 0)
    return (
        *whole,
        *(Finding(rows[at], sites[at], *remark[1:]) for remark in single for at in [remark.at or 0]),
    )


def _nothing_left(label: str, rows_read: int, unplaced: int, findings: Sequence[Finding]) -> InputError:
    errors = [finding for finding in findings if finding.severity != "note"]
    lines = [f"{label}: none of the {rows_read} rows can be used."]
    if unplaced:
        lines = [f"{label}: no row has a usable position; {unplaced} of {rows_read} have a unit only."]
    lines += [f"  {finding}" for finding in errors[:5]]
    if len(errors) > 5:
        table = findings_frame(errors[5:])
        counted = ", ".join(
            f"{count} about {field}" for field, count in table["field"].value_counts().items()
        )
        lines.append(f"  and {len(errors) - 5} more ({counted})")
    return InputError("\n".join(lines), tuple(findings))
