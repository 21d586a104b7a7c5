"""From a disease survey to a prevalence map, exceedance probabilities and unit decisions.

Data flows through the rooms in this order: ``inputs`` (what was measured and where) and ``engine``
(the mathematics), ``model`` (the analyst's view of the mathematics), ``plan`` (what the programme does
with it), ``show`` (what people look at), ``study`` (the study file and the chain it runs), ``cli``.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

# A room loads when one of its names is first used, so that `prevmap --help` stays instant.
_ROOM_OF = {
    "PrevmapError": "errors",
    "InputError": "errors",
    "FitError": "errors",
    "Survey": "inputs.survey",
    "SurveyNotes": "inputs.survey",
    "read_survey": "inputs.survey",
    "Region": "inputs.region",
    "read_region": "inputs.region",
    "Population": "inputs.population",
    "read_population": "inputs.population",
    "Grid": "inputs.grid",
    "RasterCovariate": "inputs.covariates",
    "DistanceCovariate": "inputs.covariates",
    "ColumnCovariate": "inputs.covariates",
    "FactorCovariate": "inputs.covariates",
    "PrevalenceModel": "model.spec",
    "MeshSpec": "model.spec",
    "Priors": "model.spec",
    "Below": "model.spec",
    "Above": "model.spec",
    "DiagnosticAccuracy": "model.spec",
    "Fit": "model.fit",
    "Surface": "model.surface",
    "UnitEstimates": "model.units",
    "UnitDecisions": "plan.classify",
    "classify_units": "plan.classify",
    "map_surface": "show.maps",
    "map_units": "show.maps",
    "map_sites": "show.maps",
    "map_panel": "show.maps",
    "Study": "study",
    "StudyResult": "study",
    "read_study": "study",
}

__all__ = ["__version__", *_ROOM_OF]


def __getattr__(name: str) -> Any:
    if name not in _ROOM_OF:
        raise AttributeError(f"module 'prevmap' has no attribute {name!r}")
    value = getattr(importlib.import_module(f"prevmap.{_ROOM_OF[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)


if TYPE_CHECKING:
    from prevmap.errors import FitError as FitError
    from prevmap.errors import InputError as InputError
    from prevmap.errors import PrevmapError as PrevmapError
