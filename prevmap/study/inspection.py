"""Check every input of a study and say what a fit would do, without fitting."""

from __future__ import annotations

import textwrap
from dataclasses import dataclass

import numpy as np
import pandas as pd

from prevmap.inputs.covariates import design
from prevmap.inputs.findings import findings_frame
from prevmap.study.chain import StudyInputs, build_model, naming, read_inputs
from prevmap.study.progress import Stages
from prevmap.study.schema import Study

_WIDTHS = {"severity": 8, "row": 6, "site": 16, "field": 14, "what": 52, "action": 34}


@dataclass(frozen=True, slots=True)
class Inspection:
    """What was read, what is wrong or doubtful in it, and what a fit would do.

    Parameters
    ----------
    lines : tuple of str
        What was read and what a fit would do, one sentence a line.
    findings : DataFrame
        Columns row, site, field, severity, what, action.
    """

    lines: tuple[str, ...]
    findings: pd.DataFrame

    def __str__(self) -> str:
        counts = self.findings["severity"].value_counts()
        counted = ", ".join(f"{counts.get(name, 0)} {name}s" for name in ("error", "warning", "note"))
        return "\n".join([*self.lines, "", f"Findings: {counted}", *findings_lines(self.findings)])


def findings_lines(findings: pd.DataFrame) -> list[str]:
    """Lay findings out as a table for a terminal, long texts wrapped, errors first."""
    if findings.empty:
        return []
    order = findings["severity"].map({"error": 0, "warning": 1, "note": 2})
    rows = findings.iloc[np.argsort(order.to_numpy(), kind="stable")]
    lines = ["  ".join(name.ljust(width) for name, width in _WIDTHS.items()).rstrip()]
    lines.append("  ".join("-" * width for width in _WIDTHS.values()))
    for row in rows.to_dict("records"):
        texts = {name: "" if pd.isna(row[name]) else str(row[name]) for name in _WIDTHS}
        cells = [textwrap.wrap(texts[name], width) or [""] for name, width in _WIDTHS.items()]
        for index in range(max(len(cell) for cell in cells)):
            parts = [
                (cell[index] if index < len(cell) else "").ljust(width)
                for cell, width in zip(cells, _WIDTHS.values(), strict=True)
            ]
            lines.append("  ".join(parts).rstrip())
    return lines
