"""Verify a record: run its study again and name every number that differs."""

from __future__ import annotations

import tempfile
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from prevmap.errors import InputError
from prevmap.study.outputs import sha256
from prevmap.study.record import environment, input_hashes, read_record
from prevmap.study.schema import Study, read_study

# Other versions or processors may round otherwise; the optimiser stops at a relative 1e-6.
OTHER_ENVIRONMENT_TOLERANCE = 1e-5
_SAME_BYTES = ("share/units.csv", "share/prevalence.tif")


@dataclass(frozen=True, slots=True)
class Difference:
    """One thing that is not as recorded: its name, the value recorded and the value found now."""

    name: str
    recorded: Any
    now: Any

    def __str__(self) -> str:
        return f"{self.name}: recorded {self.recorded}, now {self.now}"


@dataclass(frozen=True, slots=True)
class Verification:
    """What a second run found.

    Parameters
    ----------
    differences : tuple of Difference
        Input files, settings and numbers that are not as recorded; empty where all agree.
    environment : tuple of Difference
        Versions and platform that are not as recorded; not differences of the result.
    compared : int
        How many numbers were compared.
    tolerance : float
        Largest relative difference that counts as equal; 0 compares exactly.
    """

    differences: tuple[Difference, ...]
    environment: tuple[Difference, ...]
    compared: int
    tolerance: float


def verify_record(
    path: str | Path, *, progress: bool = False, tolerance: float | None = None
) -> Verification:
    """Run the study of a record again and compare every number.

    Parameters
    ----------
    path : path
        The ``record.json`` of an earlier run; it names its study file relative to itself.
    progress : bool
        Show the stages on standard error.
    tolerance : float, optional
        Largest relative difference that counts as equal. Default: 0 (exactly equal) where Python, the
        packages and the platform are as recorded, else ``OTHER_ENVIRONMENT_TOLERANCE``.

    Raises
    ------
    InputError
        The record, or the study file or an input it names, is missing or wrong.
    FitError
        The model could not be fitted again.
    """
    path = Path(path).resolve()
    record = read_record(path)
    study_file = (path.parent / record["study"]).resolve()
    if not study_file.is_file():
        raise InputError(f"{path}: its study file {study_file} is not there; put it back, with its inputs")
    study = read_study(study_file)
    surroundings = tuple(_unequal(_flat(record["environment"]), _flat(environment()), 0.0))
    if tolerance is None:
        tolerance = OTHER_ENVIRONMENT_TOLERANCE if surroundings else 0.0
    differences = [*_changed_inputs(record, study), *_altered_outputs(record, path.parent.parent)]
    settings = {
        **study.settings(),
        "output": record["settings"].get("output"),
    }  # where it was written is no matter
    differences += _unequal(_flat(record["settings"], "settings"), _flat(settings, "settings"), 0.0)
    with tempfile.TemporaryDirectory(prefix="prevmap-verify-") as scratch:
        again = study.run(progress=progress, output=Path(scratch) / "results").record
    differences += _unequal(record["numbers"], again["numbers"], tolerance)
    if tolerance == 0:
        for name in _SAME_BYTES:
            was, now = record["outputs"].get(name), again["outputs"].get(name)
            if was != now:
                differences.append(Difference(f"bytes of {name}", was, now))
    return Verification(tuple(differences), surroundings, len(record["numbers"]), tolerance)


def _changed_inputs(record: Mapping[str, Any], study: Study) -> Iterator[Difference]:
    was = {f"input {key} ({entry['file']})": entry["sha256"] for key, entry in record["inputs"].items()}
    now = {f"input {key} ({entry['file']})": entry["sha256"] for key, entry in input_hashes(study).items()}
    yield from _unequal(was, now, 0.0)


def _altered_outputs(record: Mapping[str, Any], folder: Path) -> Iterator[Difference]:
    """Name result files that stand beside the record and are not the ones it lists."""
    for name, recorded in record["outputs"].items():
        if (folder / name).is_file() and (now := sha256(folder / name)) != recorded:
            yield Difference(f"file {name}", recorded, now)


def _flat(value: Any, name: str = "") -> dict[str, Any]:
    if isinstance(value, Mapping):
        pairs = [(f"{name}.{key}" if name else str(key), item) for key, item in value.items()]
    elif isinstance(value, list):
        pairs = [(f"{name}[{index}]", item) for index, item in enumerate(value, start=1)]
    else:
        return {name: value}
    return {key: leaf for part, item in pairs for key, leaf in _flat(item, part).items()}


def _unequal(recorded: Mapping[str, Any], now: Mapping[str, Any], tolerance: float) -> Iterator[Difference]:
    """Yield every name whose two values differ, in the recorded order, new names last."""
    for name in [*recorded, *(name for name in now if name not in recorded)]:
        was, found = recorded.get(name, "absent"), now.get(name, "absent")
        if not _equal(was, found, tolerance):
            yield Difference(name, was, found)


def _equal(was: Any, now: Any, tolerance: float) -> bool:
    both_numbers = all(isinstance(value, int | float) and not isinstance(value, bool) for value in (was, now))
    if not both_numbers:
        return bool(was == now)
    return bool(was == now or abs(was - now) <= tolerance * max(abs(was), abs(now)))
