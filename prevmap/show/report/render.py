"""Fill the report's template: one page that needs no network, no script and no other file."""

from __future__ import annotations

import base64
import struct
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import jinja2

from prevmap.plan.classify import UNDECIDED
from prevmap.show.basis import unit_basis, weight_notes
from prevmap.show.maps import surface_notes
from prevmap.show.palette import decision_styles
from prevmap.show.report.checklist import checklist
from prevmap.show.report.content import ReportContent, ReportFigure
from prevmap.show.report.methods import cited_sources, methods_paragraphs
from prevmap.show.report.summary import headline_counts, summary_sentences, survey_facts
from prevmap.show.report.tables import (
    coefficient_table,
    finding_groups,
    hyperparameter_table,
    input_table,
    unit_table,
)
from prevmap.show.wording import NUGGET_WORDS, meaning, sentence, significant

_TEMPLATES = Path(__file__).parent / "templates"

# Figures printed outside the section of maps.
_ELSEWHERE = ("sites", "sites_chart", "odds_ratios", "units_chart")

_DIAGNOSTICS: Mapping[str, str] = {
    "nodes": "mesh nodes",
    "edge_km": "mesh edge, km",
    "margin_km": "mesh margin, km",
    "evaluations": "evaluations of the log evidence",
    "iterations": "Newton iterations",
    "gradient_norm": "size of the gradient at the mode",
    "smallest_pivot": "smallest pivot of the factorised precision",
    "components": "points of the hyperparameter integration",
}
# Times differ between two runs of the same study; the report does not.
_NOT_PRINTED = ("seconds", "engine")


def render_report(content: ReportContent) -> str:
    """Render the report as one self-contained HTML page.

    Parameters
    ----------
    content : ReportContent
        Computed artefacts and drawn figures.

    Returns
    -------
    str
        HTML; every name that came from an input is escaped.
    """
    environment = jinja2.Environment(
        loader=jinja2.FileSystemLoader(_TEMPLATES),
        autoescape=True,
        undefined=jinja2.StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.globals["picture"] = _picture
    return environment.get_template("report.html.j2").render(**_context(content)) + "\n"


def _context(content: ReportContent) -> dict[str, Any]:
    """Everything the template prints, as text, tables and figures."""
    fit: Any = content.fit
    paragraphs = methods_paragraphs(content)
    of_cells, of_units = [], []
    for name, figure in content.figures.items():
        if name.startswith("unit_") or name == "decisions":
            of_units.append(figure)
        elif name not in _ELSEWHERE:
            of_cells.append(figure)
    nugget = str(content.surface.nugget)
    return {
        "title": content.title,
        "statements": content.statements,
        "boxes": headline_counts(content),
        "summary": summary_sentences(content),
        "meaning": sentence(meaning(content.surface)),
        "facts": survey_facts(content),
        "findings": finding_groups(fit.findings),
        "coefficients": coefficient_table(fit.coefficients),
        "hyperparameters": hyperparameter_table(fit.hyperparameters),
        "priors": [(_parameter(name), text) for name, text in fit.prior_text],
        "nugget": NUGGET_WORDS.get(nugget, nugget),
        "nugget_setting": nugget,
        "log_evidence": f"{float(fit.log_evidence):.3f}".replace("-", "−"),
        "diagnostics": [
            (_DIAGNOSTICS.get(name, name.replace("_", " ")), _number(value))
            for name, value in fit.diagnostics.items()
            if name not in _NOT_PRINTED
        ],
        "warnings": [str(warning) for warning in fit.warnings],
        "figures": content.figures,
        "maps": [("By place", of_cells), ("By unit", of_units)],
        "map_notes": surface_notes(content.surface),
        "units": unit_table(content),
        "unit_notes": _unit_notes(content),
        "class_colours": _class_colours(content),
        "decided": content.decisions is not None,
        "weighted": "weight" in content.survey.frame.columns,
        "methods": paragraphs,
        "sources": cited_sources(paragraphs),
        "checklist": checklist(content),
        "inputs": input_table(content.record.get("inputs", {})),
        "environment": _environment(content.record.get("environment", {})),
        "seed": content.record.get("seed", fit.seed),
        "command": content.record.get("command", "prevmap run study.toml"),
        "settings_file": content.record.get("study", ""),
    }


def _unit_notes(content: ReportContent) -> list[str]:
    """Name the units whose estimate stands on less than the others'."""
    if content.units is None:
        return []
    basis = unit_basis(content.units.frame)
    lacking = bool((basis.borrowed | basis.unpredicted).any())
    return [*(basis.sentences() if lacking else []), *weight_notes(content.units)]


def _picture(figure: ReportFigure) -> dict[str, Any]:
    """Give data URI and size of a PNG; its first chunk, IHDR, holds width and height."""
    width, height = struct.unpack(">II", figure.png[16:24])
    uri = "data:image/png;base64," + base64.b64encode(figure.png).decode("ascii")
    return {"uri": uri, "width": width, "height": height}


def _class_colours(content: ReportContent) -> list[tuple[str, str]]:
    """Colours of the classes between several thresholds, by the mark that rows and boxes carry."""
    decisions = content.decisions
    if decisions is None or len(decisions.thresholds) == 1:
        return []
    styles = decision_styles(decisions.outcomes)
    return [
        (f"class{i}", style.colour) for i, (name, style) in enumerate(styles.items()) if name != UNDECIDED
    ]


def _parameter(name: str) -> str:
    words = {"range_km": "range", "sd": "standard deviation", "nugget_sd": "nugget"}
    return words.get(name, name.replace("_", " "))


def _number(value: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int):
        return f"{value:,}"
    if isinstance(value, float):
        return significant(value)
    return str(value)


def _environment(record: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Put versions in reading order: the package, Python, then the libraries."""
    lines = [(name, str(record[name])) for name in ("prevmap", "python") if name in record]
    packages = record.get("packages", {})
    if packages:
        lines.append(
            ("libraries", ", ".join(f"{name} {version}" for name, version in sorted(packages.items())))
        )
    return lines
