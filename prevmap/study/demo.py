"""The demo study: where its files are, and a copy of them to run."""

from __future__ import annotations

import shutil
from pathlib import Path

import prevmap
from prevmap.errors import InputError

_NOT_COPIED = {"truth", "__pycache__", "SHA256SUMS"}


def demo_folder() -> Path:
    """Return the folder of the demo data: inside an installed package, or beside it in the repository.

    Raises
    ------
    InputError
        The demo data are in neither place.
    """
    package = Path(prevmap.__file__).parent
    for folder in (package / "demo_data", package.parent / "demo_data"):
        if (folder / "study.toml").is_file():
            return folder
    raise InputError(f"the demo data are not in {package}; accepted: prevmap installed whole")


def copy_demo(folder: Path) -> Path:
    """Copy the demo study into a folder and return the path of its study file.

    Parameters
    ----------
    folder : Path
        A new or empty folder, or one that already holds the demo files unchanged.

    Raises
    ------
    InputError
        The folder is a file, or holds other files, or demo files that were changed.
    """
    source = demo_folder()
    if folder.exists() and not folder.is_dir():
        raise InputError(f"{folder}: found a file; accepted: a new or empty folder")
    files = [
        path.relative_to(source)
        for path in sorted(source.rglob("*"))
        if path.is_file()
        and path.suffix != ".py"
        and not _NOT_COPIED.intersection(path.relative_to(source).parts)
    ]
    if folder.exists() and any(folder.iterdir()):
        for file in files:
            if not (folder / file).is_file() or (folder / file).read_bytes() != (source / file).read_bytes():
                raise InputError(
                    f"{folder}: the folder is not empty and its {file} is not the demo's; accepted: a new "
                    f"or empty folder; or run a study of your own there: prevmap run {folder / 'study.toml'}"
                )
    try:
        for file in files:
            (folder / file).parent.mkdir(parents=True, exist_ok=True)
            shutil.copyfile(source / file, folder / file)
    except OSError as error:
        raise InputError(f"{folder}: the demo cannot be copied there: {error.strerror}") from error
    return folder / "study.toml"
