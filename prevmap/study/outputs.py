"""The output folder: refused before any work where it cannot hold results; safe cells; stable bytes."""

from __future__ import annotations

import contextlib
import hashlib
import sqlite3
import tempfile
from pathlib import Path

import pandas as pd

from prevmap.errors import InputError
from prevmap.study.replacement import PARTS, RECORD, clear_abandoned, recorded_outputs

_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


def check_output(folder: Path, inputs: dict[str, Path]) -> None:
    """Refuse an output folder that results may not be moved into, before any work is done.

    What a killed run left in the folder is removed, so that it is not taken for anything else.

    Parameters
    ----------
    folder : Path
        The output folder; it need not exist.
    inputs : dict of str to Path
        Input files by the key that names them.

    Raises
    ------
    InputError
        The folder is a file, cannot be written to, holds a share or internal folder from elsewhere, or
        holds an input file where results would go.
    """
    if folder.exists() and not folder.is_dir():
        raise InputError(f"output folder {folder}: found a file; accepted: a folder or a new name")
    for key, path in inputs.items():
        for part in PARTS:
            if path.is_relative_to((folder / part).resolve()):
                raise InputError(
                    f'{key}: {path} lies in the output folder\'s "{part}", which a run replaces; accepted: '
                    "another output folder, or the input kept elsewhere"
                )
    _probe(folder)
    clear_abandoned(folder)
    held = [part for part in PARTS if (folder / part).exists()]
    if held and recorded_outputs(folder) is None:
        raise InputError(
            f'output folder {folder}: found "{held[0]}" in it, but no {RECORD.as_posix()} of an earlier '
            "run, so it will not be replaced; accepted: a new folder, or the folder of an earlier run"
        )


def _probe(folder: Path) -> None:
    """Make a folder with a file where results would be made, as permissions alone do not tell."""
    standing = next(parent for parent in (folder, *folder.parents) if parent.exists())
    try:
        with tempfile.TemporaryDirectory(prefix=".probe-", dir=standing) as probe:
            (Path(probe) / "file").write_bytes(bytes(4096))
    except OSError as error:
        raise InputError(
            f"output folder {folder}: {standing} may not be written to ({error.strerror}); accepted: a "
            "folder of your own with room for the results"
        ) from error


def neutral(cell: object) -> object:
    """Return a text that a spreadsheet would run as a formula with an apostrophe before it.

    Examples
    --------
    >>> neutral("=1+1"), neutral("Ombari"), neutral(-0.5)
    ("'=1+1", 'Ombari', -0.5)
    """
    if isinstance(cell, str) and cell.startswith(_FORMULA_STARTS):
        return f"'{cell}"
    return cell


def write_csv(frame: pd.DataFrame, path: Path) -> None:
    """Write a table as UTF-8 CSV: numbers in full precision, no cell or heading that acts as a formula."""
    safe = frame.copy()
    for name in safe.columns:
        if not pd.api.types.is_numeric_dtype(safe[name]):
            # As objects: whole numbers beside missing ones would else become 10.0.
            safe[name] = pd.Series([neutral(cell) for cell in safe[name]], index=safe.index, dtype=object)
    safe.columns = [neutral(str(name)) for name in safe.columns]
    safe.to_csv(path, index=False, lineterminator="\n", encoding="utf-8")


def settle_geopackage(path: Path) -> None:
    """Set the time of writing inside a GeoPackage to a fixed one, so that equal content is equal bytes."""
    with contextlib.closing(sqlite3.connect(path)) as connection:
        connection.execute("UPDATE gpkg_contents SET last_change = '1970-01-01T00:00:00.000Z'")
        connection.commit()
        connection.execute("VACUUM")


def sha256(path: Path) -> str:
    """Return the SHA-256 of a file as hexadecimal text."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
