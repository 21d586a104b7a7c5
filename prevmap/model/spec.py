"""The model an analyst states: covariates, mesh, priors and test accuracy, before any data are seen."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Literal

from prevmap.errors import InputError

if TYPE_CHECKING:
    from prevmap.inputs.region import Region
    from prevmap.inputs.survey import Survey
    from prevmap.model.fit import Fit

SMOOTHNESS = (0.5, 1.0, 1.5, 2.5)


def _positive(value: Any, name: str) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        number = math.nan
    if not (math.isfinite(number) and number > 0):
        raise InputError(f"{name} = {value!r}: expected a positive number")
    return number


def _share(value: Any, name: str) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        number = math.nan
    if not 0.0 < number < 1.0:
        raise InputError(f"{name} = {value!r}: expected a number between 0 and 1")
    return number


@dataclass(frozen=True, slots=True)
class Below:
    """A prior for the range: P(range < value) = probability.

    Parameters
    ----------
    value : float
        A distance in km that the range is unlikely to be below.
    probability : float
        How unlikely, between 0 and 1.
    """

    value: float
    probability: float = 0.05

    def __post_init__(self) -> None:
        _positive(self.value, "Below(value)")
        _share(self.probability, "Below(probability)")


@dataclass(frozen=True, slots=True)
class Above:
    """A prior for a standard deviation: P(sd > value) = probability.

    Parameters
    ----------
    value : float
        A standard deviation on the logit scale that is unlikely to be exceeded.
    probability : float
        How unlikely, between 0 and 1.
    """

    value: float
    probability: float = 0.05

    def __post_init__(self) -> None:
        _positive(self.value, "Above(value)")
        _share(self.probability, "Above(probability)")


@dataclass(frozen=True, slots=True)
class MeshSpec:
    """How finely the field is resolved.

    Parameters
    ----------
    edge_km : float, optional
        Edge of the triangles in the region; from the prior and the spacing of the sites where left out.
    margin_km : float, optional
        How far the mesh goes beyond the region; one range, where left out.
    max_nodes : int
        A request that needs more nodes is refused before any work.
    """

    edge_km: float | None = None
    margin_km: float | None = None
    max_nodes: int = 100_000

    def __post_init__(self) -> None:
        if self.edge_km is not None:
            _positive(self.edge_km, "edge_km")
        if self.margin_km is not None:
            _positive(self.margin_km, "margin_km")
        if int(self.max_nodes) < 10:
            raise InputError(f"max_nodes = {self.max_nodes!r}: expected a whole number of at least 10")


@dataclass(frozen=True, slots=True)
class Priors:
    """Prior distributions; a bare number fixes a hyperparameter.

    Parameters
    ----------
    range_km : Below or float, optional
        Where left out: ``Below(5 % of the region's diagonal, probability=0.05)``.
    sd : Above or float
        Standard deviation of the field on the logit scale.
    nugget_sd : Above, float or None
        Standard deviation of the site-level nugget; None leaves the nugget out.
    intercept : (mean, sd)
        Gaussian, logit scale.
    coefficient_sd : float
        Gaussian around 0 for every coefficient, covariates as scaled.

    Notes
    -----
    ``Below`` and ``Above`` are penalised-complexity priors (Fuglstad, Simpson, Lindgren & Rue 2019,
    J. Am. Stat. Assoc. 114:445-452).
    """

    range_km: Below | float | None = None
    sd: Above | float = field(default_factory=lambda: Above(2.0, 0.05))
    nugget_sd: Above | float | None = field(default_factory=lambda: Above(1.0, 0.05))
    intercept: tuple[float, float] = (0.0, 3.0)
    coefficient_sd: float = 2.5

    def __post_init__(self) -> None:
        for name, value, kind in (
            ("range_km", self.range_km, Below),
            ("sd", self.sd, Above),
            ("nugget_sd", self.nugget_sd, Above),
        ):
            other = Above if kind is Below else Below
            if isinstance(value, other):
                raise InputError(
                    f"{name} = {value!r}: expected {kind.__name__}(value, probability=...) or a number"
                )
            if value is not None and not isinstance(value, kind):
                _positive(value, name)
        if self.sd is None:
            raise InputError("sd = None: a model without a field is not a map; give Above(...) or a number")
        try:
            mean, sd = self.intercept
            mean = float(mean)
        except (TypeError, ValueError) as error:
            raise InputError(f"intercept = {self.intercept!r}: expected a pair (mean, sd)") from error
        if not math.isfinite(mean):
            raise InputError(f"intercept = {self.intercept!r}: the mean must be a number")
        _positive(sd, "sd of the intercept")
        _positive(self.coefficient_sd, "coefficient_sd")


@dataclass(frozen=True, slots=True)
class DiagnosticAccuracy:
    """Sensitivity and specificity of a diagnostic test, each in (0, 1], with a sum above 1.

    Parameters
    ----------
    sensitivity : float
        P(test positive | infected).
    specificity : float
        P(test negative | not infected).
    """

    sensitivity: float
    specificity: float

    def __post_init__(self) -> None:
        for name in ("sensitivity", "specificity"):
            value = _positive(getattr(self, name), name)
            if value > 1.0:
                raise InputError(f"{name} = {value!r}: expected at most 1")
        if self.sensitivity + self.specificity <= 1.0:
            raise InputError(
                f"sensitivity {self.sensitivity} + specificity {self.specificity} is not above 1: such a test "
                "carries no information on prevalence"
            )


@dataclass(frozen=True, slots=True)
class PrevalenceModel:
    """A binomial geostatistical model: logit prevalence = covariates + Matern field + nugget per site.

    Parameters
    ----------
    covariates : sequence of covariates
        Any mix of raster, distance, column and factor covariates; none for a field around a mean.
    mesh : MeshSpec
    priors : Priors
    tests : mapping of test name to DiagnosticAccuracy, optional
        Accuracy of the tests behind the counts; the surface is then true prevalence. Tests that are not
        named are taken as perfect.
    nu : float
        Smoothness of the field; other than 1 only with ``engine="exact"``.

    Notes
    -----
    Diggle, Tawn & Moyeed (1998), Applied Statistics 47:299-350.
    """

    covariates: Sequence[Any] = ()
    mesh: MeshSpec = field(default_factory=MeshSpec)
    priors: Priors = field(default_factory=Priors)
    tests: Mapping[str, DiagnosticAccuracy] | None = None
    nu: float = 1.0

    def __post_init__(self) -> None:
        object.__setattr__(self, "covariates", tuple(self.covariates))
        for name, accuracy in (self.tests or {}).items():
            if not isinstance(accuracy, DiagnosticAccuracy):
                raise InputError(
                    f"tests[{name!r}] = {accuracy!r}: expected DiagnosticAccuracy(sensitivity, specificity)"
                )

    def fit(
        self,
        survey: Survey,
        *,
        region: Region | None = None,
        engine: Literal["mesh", "exact"] = "mesh",
        integrate: bool = True,
        progress: bool | Callable[[str], None] = False,
        seed: int = 1,
    ) -> Fit:
        """Fit the model to a survey.

        Parameters
        ----------
        survey : Survey
        region : Region, optional
            Study area; the buffered hull of the sites where left out.
        engine : {"mesh", "exact"}
            The sparse mesh engine, or the dense one without a mesh (a few hundred sites).
        integrate : bool
            Whether to integrate over the hyperparameters or to fix them at their mode.
        progress : bool or callable
            True shows a progress bar; a callable is told the stage after every step.
        seed : int
            Recorded with the fit; the fit itself draws nothing at random.

        Returns
        -------
        Fit

        Raises
        ------
        InputError
            Where inputs cannot be used; the message says which and why.
        FitError
            Where the model could not be fitted; the message says why and what to try.
        """
        from prevmap.model.fit import fit_model

        return fit_model(
            self, survey, region=region, engine=engine, integrate=integrate, progress=progress, seed=seed
        )
