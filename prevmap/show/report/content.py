"""What a report is made of: artefacts that are already computed, and figures that are already drawn."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from prevmap.inputs.region import Region
    from prevmap.inputs.survey import Survey
    from prevmap.model.fit import Fit
    from prevmap.model.surface import Surface
    from prevmap.model.units import UnitEstimates
    from prevmap.plan.classify import UnitDecisions

_NOTHING: Mapping[str, Any] = MappingProxyType({})


@dataclass(frozen=True, slots=True)
class ReportFigure:
    """A drawn figure with what a reader needs who cannot see it.

    Attributes
    ----------
    png : bytes
        The picture; equal results give equal bytes.
    alt : str
        What the figure shows, in words, for screen readers.
    caption : str
        Printed under the figure.
    figure : Figure, optional
        The drawing itself, for those who want it in another format.
    """

    png: bytes
    alt: str
    caption: str
    figure: Any = field(default=None, compare=False, repr=False)


@dataclass(frozen=True, slots=True)
class ReportContent:
    """Everything the report prints; nothing is computed from data while it is rendered.

    Attributes
    ----------
    title : str
        Heading of the report.
    survey : Survey
        The survey as read and checked.
    region : Region
        Units and study area; without a region file the buffered hull of the sites.
    fit : Fit
        The fitted model.
    surface : Surface
        The prediction on the grid.
    units : UnitEstimates or None
        None without a region file.
    decisions : UnitDecisions or None
        None without a region file or without a decision section.
    thresholds : tuple of float
        Prevalence thresholds of the decision; empty without a decision section.
    figures : mapping of str to ReportFigure
        By name, in the order in which they are printed; see ``report_figures``.
    record : mapping
        ``inputs`` (key to ``file`` and ``sha256``), ``environment`` (versions), ``seed``, ``command``.
    statements : mapping of str to str
        What only the programme can say: authors, contact, purpose, funding, data_sources,
        data_availability, ethics, limitations. Whatever is missing prints as "not stated".
    certainty : float or mapping
        Probability that counts as sure where there are no unit decisions.
    """

    title: str
    survey: Survey
    region: Region
    fit: Fit
    surface: Surface
    units: UnitEstimates | None = None
    decisions: UnitDecisions | None = None
    thresholds: tuple[float, ...] = ()
    figures: Mapping[str, ReportFigure] = field(default_factory=lambda: _NOTHING)
    record: Mapping[str, Any] = field(default_factory=lambda: _NOTHING)
    statements: Mapping[str, str] = field(default_factory=lambda: _NOTHING)
    certainty: float | Mapping[str, float] = 0.90
