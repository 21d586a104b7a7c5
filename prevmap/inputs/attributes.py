"""Attributes: what a region's file knows of its units, under names that our own columns leave free."""

from __future__ import annotations

from collections.abc import Iterable

import pandas as pd

from prevmap.inputs.findings import Finding

SUFFIX = "_in_region"

# Columns of the tables and layers of units that are written; GeoPackage compares names without case.
OWN_COLUMNS = frozenset(
    """unit code parent sites examined positive direct_estimate direct_lower95 direct_upper95 mean sd lower95
    median upper95 population infected_mean infected_lower95 infected_upper95 nearest_site_km
    share_extrapolated share_without_prediction basis monte_carlo_error decision reason p_wrong certainty fid
    geom geometry""".split()
)
OWN_PREFIXES = ("p_class_", "exceedance_")


def is_own_column(name: str) -> bool:
    """Return whether a name is one of our own columns of units, whatever its case.

    Examples
    --------
    >>> is_own_column("Population"), is_own_column("p_class_1"), is_own_column("zone")
    (True, True, False)
    """
    folded = name.strip().casefold()
    return folded in OWN_COLUMNS or folded.startswith(OWN_PREFIXES)


def free_names(names: Iterable[object]) -> tuple[list[str], list[Finding]]:
    """Return names for a file's attributes that differ from our columns and from each other by more than case.

    Parameters
    ----------
    names : iterable
        Columns of the file, in its order.

    Returns
    -------
    free : list of str
        In the same order.
    findings : list of Finding
        A note for each name that was changed.
    """
    given = [str(name) for name in names]
    taken = {name.strip().casefold() for name in given}
    seen: set[str] = set()
    free, findings = [], []
    for name in given:
        kept = name
        if is_own_column(name):
            kept = _unused(name.strip() + SUFFIX, taken)
            what = f"the file's column {name!r} has the name of a column of the results"
            findings.append(Finding(None, None, name, "note", what, f"kept as {kept!r}"))
        elif name.strip().casefold() in seen:
            kept = _unused(f"{name.strip()}_2", taken)
            what = f"the file's column {name!r} differs from another only by case"
            findings.append(Finding(None, None, name, "note", what, f"kept as {kept!r}"))
        seen.add(name.strip().casefold())
        taken.add(kept.casefold())
        free.append(kept)
    return free, findings


def attribute(units: pd.DataFrame, name: str) -> pd.Series | None:
    """Return an attribute of the units by the name it has in the file, None where there is none."""
    if is_own_column(name) and name + SUFFIX in units.columns:
        return units[name + SUFFIX]
    return units[name] if name in units.columns else None


def _unused(wanted: str, taken: set[str]) -> str:
    name, number = wanted, 2
    while name.casefold() in taken:
        name, number = f"{wanted}_{number}", number + 1
    return name
