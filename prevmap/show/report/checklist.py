"""A reporting checklist after the 18 items of GATHER (Stevens et al. 2016), in our own words.

What a run knows about itself is filled in; what only the programme knows is taken from its statements;
everything else prints as "not stated".
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from prevmap.show.report.methods import integrated
from prevmap.show.report.summary import rows_sentence
from prevmap.show.wording import NOT_STATED, count, file_name, listed, noted, sentence

if TYPE_CHECKING:
    from prevmap.show.report.content import ReportContent


@dataclass(frozen=True, slots=True)
class ChecklistItem:
    """One item: its number, what has to be reported, and what this report says about it."""

    number: int
    asks: str
    answer: str

    @property
    def stated(self) -> bool:
        """Whether the item is answered."""
        return self.answer != NOT_STATED


def checklist(content: ReportContent) -> list[ChecklistItem]:
    """Answer every item as far as the run and the programme's statements allow."""
    say = content.statements
    answers = [
        _what(content),
        _said(say, "funding"),
        _said(say, "data_sources"),
        _inclusion(content),
        _survey_line(content),
        NOT_STATED,
        _other_inputs(content),
        _said(say, "data_availability"),
        'In outline in the section "Methods".',
        'In the sections "Model and estimates" and "Methods"; formulae in the sources cited there.',
        NOT_STATED,
        NOT_STATED,
        _uncertainty(content),
        _software(content),
        _files(content),
        "95 % intervals with every estimate; uncertainty maps beside the estimates.",
        NOT_STATED,
        _said(say, "limitations", 'General cautions in the section "Cautions".'),
    ]
    return [
        ChecklistItem(i + 1, asks, answer)
        for i, (asks, answer) in enumerate(zip(_ASKS, answers, strict=True))
    ]


_ASKS = (
    "What is estimated, for which people, places and times",
    "Who paid for the work",
    "How the data were found and obtained",
    "What was let in and left out, single exclusions included",
    "For each source: where it comes from, population, method, dates, ages, test, number examined",
    "Which inputs may be biased, and why",
    "Other inputs (covariates, population, boundaries) and where they come from",
    "Where the input data can be had as files, or whom to ask",
    "The method in outline",
    "Every step with its formulae: cleaning, adjustment, weights, model",
    "Which candidate models were compared and how one was chosen",
    "How well the model performs; how results change with its assumptions",
    "How uncertainty was computed, and which parts of it are left out",
    "Where the code is",
    "The estimates as machine-readable files",
    "A measure of uncertainty with every estimate",
    "What the result means beside earlier evidence, and why it may have changed",
    "Limits: assumptions and gaps in the data",
)


def _said(statements: Mapping[str, str], key: str, default: str = NOT_STATED) -> str:
    value = statements.get(key)
    return str(value) if value else default


def _what(content: ReportContent) -> str:
    indicator, ages, date = (noted(content.survey, field) for field in ("indicator", "ages", "date"))
    where = (
        count(len(content.region.units), "unit") if content.region.has_units else "the area around the sites"
    )
    text = f"Prevalence of: {indicator}; ages: {ages}; date: {date}; place: {where}."
    purpose = content.statements.get("purpose")
    return f"{text} Purpose: {sentence(str(purpose), capital=False)}" if purpose else text


def _inclusion(content: ReportContent) -> str:
    return f'{rows_sentence(content)} See the section "What was excluded and why".'


def _survey_line(content: ReportContent) -> str:
    fields = [f"{name}: {noted(content.survey, name)}" for name in ("sampling", "date", "ages", "test")]
    return f"One survey table; {'; '.join(fields)}; {content.fit.n_examined:,} examined."


def _other_inputs(content: ReportContent) -> str:
    parts = [f"boundaries: {file_name(content.region.source)}"] if content.region.has_units else []
    terms = [str(term) for term in content.fit.coefficients.index if term != "intercept"]
    if terms:
        parts.append(f"covariates: {listed(terms)}")
    population: Any = getattr(content.surface.grid, "population", None)
    if population is not None:
        parts.append(f"population: {file_name(population.path)}")
    files = "; ".join(parts) or "none"
    return f"{files}. Their origin: {sentence(_said(content.statements, 'data_sources'), capital=False)}"


def _uncertainty(content: ReportContent) -> str:
    kept = "sampling, the surface, the covariate effects"
    kept += " and the hyperparameters" if integrated(content.fit) else "; the hyperparameters are held fixed"
    return (
        f"By the posterior distribution: {kept}. Left out: errors in positions, in covariates, "
        "in the population "
        "and in the boundaries, survey weights, and the choice of the model itself."
    )


def _software(content: ReportContent) -> str:
    version = content.record.get("environment", {}).get("prevmap")
    return (
        f"prevmap {version}, open source (BSD-3-Clause)."
        if version
        else "prevmap, open source (BSD-3-Clause)."
    )


def _files(content: ReportContent) -> str:
    names = ["prevalence.tif"]
    if content.units is not None:
        names += ["units.csv", "units.gpkg"]
    return f"{listed(names)}, beside this report."
