"""New results in place of earlier ones: made under a hidden name, moved in whole or not at all."""

from __future__ import annotations

import contextlib
import json
import logging
import shutil
import sys
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import IO

from prevmap.errors import InputError

if sys.platform != "win32":
    import fcntl

log = logging.getLogger("prevmap")

PARTS = ("share", "internal")
RECORD = Path("internal") / "record.json"
_PARTIAL = ".partial-"
_LOCK = "lock"  # held for as long as the process lives
_SWAPPING = "swapping"  # stands while parts are being renamed


def recorded_outputs(folder: Path) -> set[str] | None:
    """Return the files that the record in an output folder lists, the record included; None without one."""
    try:
        record = json.loads((folder / RECORD).read_text(encoding="utf-8"))
        return {*record["outputs"], RECORD.as_posix()}
    except (OSError, ValueError, TypeError, KeyError):
        return None


@contextlib.contextmanager
def replacing(folder: Path) -> Iterator[Path]:
    """Yield an empty hidden folder inside `folder`; move its parts into place when the block ends well.

    Whatever ends the block otherwise, an interruption included, leaves `folder` as it was and removes the
    hidden folder. Files of the user's own stay: those in `folder`, and those in its parts that the record
    of the earlier run does not list, which move along.

    Raises
    ------
    InputError
        The disk is full, or the folder cannot be written to.
    """
    made = [parent for parent in (folder, *folder.parents) if not parent.exists()]
    try:
        folder.mkdir(parents=True, exist_ok=True)
        partial = Path(tempfile.mkdtemp(prefix=_PARTIAL, dir=folder))
        try:
            with _held(partial / _LOCK):
                (partial / "new").mkdir()
                yield partial / "new"
                _keep(folder, partial)
                _swap(folder, partial)
        finally:
            if not (partial / _SWAPPING).exists():  # else it holds results that the next run puts back
                shutil.rmtree(partial, ignore_errors=True)
    except OSError as error:
        raise InputError(f"output folder {folder}: the results cannot be written: {error}") from error
    finally:
        with contextlib.suppress(OSError):  # a folder that holds something stays
            for parent in made:
                parent.rmdir()


@contextlib.contextmanager
def _held(lock: Path) -> Iterator[IO[bytes]]:
    """Hold a lock on a new file; the system lets go of it when the process ends, however that happens."""
    with lock.open("wb") as stream:
        if sys.platform != "win32":
            with contextlib.suppress(OSError):  # some network drives have no locks: then nothing is cleared
                fcntl.flock(stream, fcntl.LOCK_EX | fcntl.LOCK_NB)
        yield stream


def _abandoned(partial: Path) -> bool:
    """Whether the process that made a partial folder is gone."""
    lock = partial / _LOCK
    try:
        if sys.platform == "win32":
            lock.unlink()  # refused while a process has it open
        else:
            with lock.open("rb") as stream:
                fcntl.flock(stream, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError:
        return False
    return True


def clear_abandoned(folder: Path) -> None:
    """Remove what a killed run left in an output folder; put earlier results back that it had moved."""
    for partial in sorted(folder.glob(f"{_PARTIAL}*")):
        if not _abandoned(partial):
            continue
        if (partial / _SWAPPING).exists() and (partial / "new" / PARTS[-1]).exists():
            _restore(folder, partial)
        shutil.rmtree(partial, ignore_errors=True)
        log.warning("removed %s, which a run that was killed had left", partial)


def _keep(folder: Path, partial: Path) -> None:
    """Copy the files in the old parts that no run wrote into the new ones."""
    outputs = recorded_outputs(folder) or set()
    for part in PARTS:
        for path in sorted((folder / part).rglob("*")):
            name = path.relative_to(folder)
            if name.as_posix() in outputs or (path.is_dir() and not path.is_symlink()):
                continue
            target = partial / "new" / name
            while target.exists() or target.is_symlink():
                target = target.with_name(f"{target.stem}_kept{target.suffix}")
            target.parent.mkdir(parents=True, exist_ok=True)
            shutil.copy2(path, target, follow_symlinks=False)
            if target.name != name.name:
                log.warning("%s was no result of an earlier run: kept as %s", folder / name, target.name)


def _swap(folder: Path, partial: Path) -> None:
    """Swap the new parts in; put the old ones back should any rename fail."""
    for part in PARTS:
        (partial / "new" / part).stat()  # both must be there before either is moved
    (partial / "retired").mkdir()
    (partial / _SWAPPING).touch()
    try:
        for part in PARTS:
            if (folder / part).exists():
                (folder / part).rename(partial / "retired" / part)
            (partial / "new" / part).rename(folder / part)
    except BaseException:
        _restore(folder, partial)
        (partial / _SWAPPING).unlink()
        raise
    (partial / _SWAPPING).unlink()


def _restore(folder: Path, partial: Path) -> None:
    """Undo a swap that was not completed, by renames only: one that is cut short can be taken up again."""
    for part in PARTS:
        new, retired = partial / "new" / part, partial / "retired" / part
        if (folder / part).exists() and not new.exists():
            (folder / part).rename(new)
        if retired.exists():
            retired.rename(folder / part)
