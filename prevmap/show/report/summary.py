"""The first paragraph of the report: what was surveyed and what can be decided, in plain words."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np

from prevmap.plan.classify import ABOVE, BELOW, UNDECIDED, checked_certainty
from prevmap.show.basis import unit_basis
from prevmap.show.wording import (
    NOT_STATED,
    count,
    file_name,
    inequality,
    listed,
    noted,
    percent,
    threshold_text,
)

if TYPE_CHECKING:
    from prevmap.show.report.content import ReportContent


def summary_sentences(content: ReportContent) -> list[str]:
    """Say in a few sentences what was surveyed, what was found, and how sure it is."""
    fit = content.fit
    raw = percent(fit.n_positive / fit.n_examined) if fit.n_examined else "–"
    sentences = [
        f"The survey examined {count(fit.n_examined, 'person', 'people')} at {count(fit.n_sites, 'site')}; "
        f"{fit.n_positive:,} were positive ({raw}, raw)."
    ]
    sentences.append(rows_sentence(content))
    if content.decisions is not None:
        sentences += _decided(content)
    elif content.thresholds:
        sentences += _cells(content)
    else:
        sentences.append(
            "No threshold was set, so nothing is said here about places being above or below one."
        )
    return sentences


def rows_sentence(content: ReportContent) -> str:
    """Say how many rows were read, how many the model was fitted to, and how many were not used."""
    read, used, raw = content.survey.rows_read, content.fit.n_rows, len(content.survey.unplaced)
    left = read - used - raw
    only = f" and {raw:,} only the raw estimate of its unit" if raw else ""
    rest = (
        f"{left:,} {'was' if left == 1 else 'were'} not used, for reasons listed below"
        if left
        else "all were used"
    )
    return f"Of {count(read, 'row')} read, {used:,} entered the model{only}; {rest}."


def headline_counts(content: ReportContent) -> list[tuple[str, str, str]]:
    """Return number, words and class of the boxes at the top; empty without decisions."""
    if content.decisions is None:
        return []
    names = {ABOVE: "above", BELOW: "below", UNDECIDED: "undecided"}
    edges = content.decisions.thresholds
    boxes = []
    for i, (outcome, number) in enumerate(content.decisions.counts.items()):
        words = f"{outcome} {threshold_text(edges[0])}" if outcome in (ABOVE, BELOW) else inequality(outcome)
        boxes.append((f"{number:,}", words, names.get(outcome, f"class{i}")))
    return boxes


def survey_facts(content: ReportContent) -> list[tuple[str, str]]:
    """Pair labels with what was surveyed; unknown is printed as "not stated"."""
    survey, fit, region = content.survey, content.fit, content.region
    facts = [(label, noted(survey, field)) for label, field in _FIELDS]
    facts += [
        ("Source", file_name(survey.source) if survey.source else NOT_STATED),
        ("Rows read", f"{survey.rows_read:,}"),
        ("Sites used", f"{fit.n_sites:,}"),
        ("People examined", f"{fit.n_examined:,}"),
        ("People positive", f"{fit.n_positive:,}"),
    ]
    if len(survey.unplaced):
        facts.append(
            ("Rows without a position", f"{len(survey.unplaced):,}, in the raw estimate of their unit only")
        )
    if region.has_units:
        facts.append(("Units", f"{len(region.units):,}, from {file_name(region.source)}"))
    else:
        facts.append(("Study area", "buffered outline of the sites; no unit boundaries were given"))
    population: Any = getattr(content.surface.grid, "population", None)
    facts.append(("Population", _population_words(population, region.has_units)))
    facts.append(("Largest distortion of distances on the map", percent(float(region.distortion))))
    return facts


_FIELDS = (
    ("Indicator", "indicator"),
    ("Ages", "ages"),
    ("Test", "test"),
    ("Sampling", "sampling"),
    ("Date", "date"),
)


def _decided(content: ReportContent) -> list[str]:
    decisions: Any = content.decisions
    counts: dict[str, int] = decisions.counts
    total = sum(counts.values())
    above, below = decisions.certainty["above"], decisions.certainty["below"]
    sure = (
        threshold_text(above)
        if above == below
        else f"{threshold_text(above)} (above) or {threshold_text(below)} (below)"
    )
    if len(decisions.thresholds) == 1:
        edge = threshold_text(decisions.thresholds[0])
        found = (
            f"{counts[ABOVE]:,} {_are(counts[ABOVE])} above {edge}, "
            f"{counts[BELOW]:,} {_are(counts[BELOW])} below, and "
            f"{counts[UNDECIDED]:,} {_are(counts[UNDECIDED])} undecided"
        )
    else:
        found = listed([f"{n:,} {_are(n)} {inequality(outcome)}" for outcome, n in counts.items()])
    sentences = [f"Of {count(total, 'unit')}, {found}, at a certainty of at least {sure}."]
    decided = total - counts[UNDECIDED]
    if decided:
        wrong = f"{decisions.expected_wrong:.1f}"
        sentences.append(
            f"Of the {decided:,} decided, about {wrong} can be expected to be wrong if the model holds."
        )
    undecided = (decisions.frame["decision"] == UNDECIDED).to_numpy(dtype=bool)
    basis = unit_basis(decisions.units.frame)
    for mask, lack in (
        (basis.bare, "no surveyed site"),
        (basis.unplaced, "no site with a position"),
    ):
        number = int((undecided & mask).sum())
        if number:
            sentences.append(
                f"{count(number, 'undecided unit')} {_have(number)} {lack}; "
                "the probability shown for such a unit is borrowed from elsewhere."
            )
    number = int(basis.unpredicted.sum())
    if number:
        sentences.append(
            f"{count(number, 'unit')} {_have(number)} no prediction, since covariates are missing: "
            f"{basis.named(basis.unpredicted)}."
        )
    return sentences


def _cells(content: ReportContent) -> list[str]:
    """Count mapped cells that are sure to be above or below each threshold."""
    surface = content.surface
    levels = checked_certainty(content.certainty)
    shown = ~(np.asarray(surface.blank, dtype=bool) | np.asarray(surface.missing, dtype=bool))
    sentences = []
    for threshold in content.thresholds:
        p = np.asarray(surface.exceedance(threshold), dtype=float)[shown]
        high, low = int((p >= levels["above"]).sum()), int((p <= 1.0 - levels["below"]).sum())
        sure = threshold_text(levels["above"])
        if levels["above"] != levels["below"]:
            sure += f" (above) or {threshold_text(levels['below'])} (below)"
        sentences.append(
            f"Of {count(len(p), 'mapped cell')}, {high:,} {_are(high)} above {threshold_text(threshold)} and "
            f"{low:,} {_are(low)} below with a probability of at least {sure}; "
            f"the other {len(p) - high - low:,} are undecided."
        )
    return sentences


def _population_words(population: Any, has_units: bool) -> str:
    if population is None:
        weighted = "units are weighted by area, and " if has_units else ""
        return f"not given: {weighted}no land is left blank for being empty"
    name = file_name(population.path)
    ages = "–".join(f"{age:g}" for age in population.ages) if population.ages else NOT_STATED
    year = str(population.year) if population.year else NOT_STATED
    return f"{name}; ages {ages}; year {year}"


def _are(number: int) -> str:
    return "is" if number == 1 else "are"


def _have(number: int) -> str:
    return "has" if number == 1 else "have"
