"""The study file and the chain it runs, stage by stage.

A study file is read and checked in ``schema``; ``chain`` runs it, ``inspection`` checks its inputs without a
fit, ``outputs`` writes what comes out, ``record`` keeps what is needed to reach the same numbers again.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

from prevmap.study.schema import Study, read_study

if TYPE_CHECKING:
    from prevmap.study.chain import StudyResult

__all__ = ["Study", "StudyResult", "read_study"]


def __getattr__(name: str) -> Any:
    # The chain needs every room; reading a study file needs none of them.
    if name == "StudyResult":
        return importlib.import_module("prevmap.study.chain").StudyResult
    raise AttributeError(f"module 'prevmap.study' has no attribute {name!r}")
