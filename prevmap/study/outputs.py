"""The output folder: written beside its place and moved there whole; safe cells; no exact positions."""

from __future__ import annotations

import contextlib
import hashlib
import os
import shutil
import sqlite3
import tempfile
from collections.abc import Iterator
from pathlib import Path

import pandas as pd

from prevmap.errors import InputError

PARTS = ("share", "internal")
_RECORD = Path("internal") / "record.json"
_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


def check_output(folder: Path, inputs: dict[str, Path]) -> None:
    """Refuse an output folder that results may not be moved into, before any work is done.

    Parameters
    ----------
    folder : Path
        The output folder; it need not exist.
    inputs : dict of str to Path
        Input files by the key that names them.

    Raises
    ------
    InputError
        The folder is a file, may not be written to, holds a share or internal folder from elsewhere, or
        holds an input file where results would go.
    """
    if folder.exists() and not folder.is_dir():
        raise InputError(f"output folder {folder}: found a file; accepted: a folder or a new name")
    standing = next(parent for parent in (folder, *folder.parents) if parent.exists())
    if not standing.is_dir() or not os.access(standing, os.W_OK):
        raise InputError(
            f"output folder {folder}: {standing} may not be written to; accepted: a folder of your own"
        )
    held = [part for part in PARTS if (folder / part).exists()]
    if held and not (folder / _RECORD).is_file():
        raise InputError(
            f'output folder {folder}: found "{held[0]}" in it, but no {_RECORD.as_posix()} of an earlier '
            "run, so it will not be replaced; accepted: a new folder, or the folder of an earlier run"
        )
    for key, path in inputs.items():
        for part in PARTS:
            if path.is_relative_to((folder / part).resolve()):
                raise InputError(
                    f'{key}: {path} lies in the output folder\'s "{part}", which a run replaces; accepted: '
                    "another output folder, or the input kept elsewhere"
                )


@contextlib.contextmanager
def replacing(folder: Path) -> Iterator[Path]:
    """Yield an empty folder beside `folder`; move its parts into `folder` when the block ends well.

    Whatever ends the block otherwise, an interruption included, leaves `folder` as it was and removes the
    new folder. Files of the user's own in `folder` stay.
    """
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        fresh = Path(tempfile.mkdtemp(prefix=f".{folder.name}.partial-", dir=folder.parent))
    except OSError as error:
        raise InputError(f"output folder {folder}: it cannot be made: {error.strerror}") from error
    try:
        yield fresh
        _move_parts(fresh, folder)
    finally:
        shutil.rmtree(fresh, ignore_errors=True)


def _move_parts(fresh: Path, folder: Path) -> None:
    """Swap the new parts in; put the old ones back should any rename fail."""
    folder.mkdir(exist_ok=True)
    retired = fresh / "retired"
    retired.mkdir()
    done: list[str] = []
    try:
        for part in PARTS:
            if (folder / part).exists():
                (folder / part).rename(retired / part)
            done.append(part)
            (fresh / part).rename(folder / part)
    except BaseException:
        for part in done:
            if (retired / part).exists():
                shutil.rmtree(folder / part, ignore_errors=True)
                (retired / part).rename(folder / part)
        raise


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
            safe[name] = safe[name].map(neutral)
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
