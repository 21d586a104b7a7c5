"""The methods section in sentences, fitted to what was actually done, and the sources it cites."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from prevmap.show.wording import NUGGET_WORDS, listed, sentence

if TYPE_CHECKING:
    from prevmap.show.report.content import ReportContent

SOURCES: dict[str, tuple[str, str]] = {
    "Diggle, Tawn & Moyeed 1998": (
        "Diggle PJ, Tawn JA, Moyeed RA (1998). Model-based geostatistics. "
        "Journal of the Royal Statistical Society C 47:299-350.",
        "10.1111/1467-9876.00113",
    ),
    "Fuglstad et al. 2019": (
        "Fuglstad GA, Simpson D, Lindgren F, Rue H (2019). Constructing priors that penalize "
        "the complexity of "
        "Gaussian random fields. Journal of the American Statistical Association 114:445-452.",
        "10.1080/01621459.2017.1415907",
    ),
    "Gething, Patil & Hay 2010": (
        "Gething PW, Patil AP, Hay SI (2010). Quantifying aggregated uncertainty in Plasmodium "
        "falciparum malaria "
        "prevalence and populations at risk via efficient space-time geostatistical joint simulation. "
        "PLoS Computational Biology 6:e1000724.",
        "10.1371/journal.pcbi.1000724",
    ),
    "Lindgren, Rue & Lindström 2011": (
        "Lindgren F, Rue H, Lindström J (2011). An explicit link between Gaussian fields and Gaussian Markov "
        "random fields: the stochastic partial differential equation approach. "
        "Journal of the Royal Statistical Society B 73:423-498.",
        "10.1111/j.1467-9868.2011.00777.x",
    ),
    "Rue, Martino & Chopin 2009": (
        "Rue H, Martino S, Chopin N (2009). Approximate Bayesian inference for latent Gaussian "
        "models by using "
        "integrated nested Laplace approximations. Journal of the Royal Statistical Society B 71:319-392.",
        "10.1111/j.1467-9868.2008.00700.x",
    ),
    "Stevens et al. 2016": (
        "Stevens GA, Alkema L, Black RE, et al. (2016). Guidelines for Accurate and Transparent "
        "Health Estimates "
        "Reporting: the GATHER statement. Lancet 388:e19-e23.",
        "10.1016/S0140-6736(16)30388-9",
    ),
    "Tierney & Kadane 1986": (
        "Tierney L, Kadane JB (1986). Accurate approximations for posterior moments and marginal densities. "
        "Journal of the American Statistical Association 81:82-86.",
        "10.1080/01621459.1986.10478240",
    ),
    "Wilson 1927": (
        "Wilson EB (1927). Probable inference, the law of succession, and statistical inference. "
        "Journal of the American Statistical Association 22:209-212.",
        "10.1080/01621459.1927.10502953",
    ),
}


def methods_paragraphs(content: ReportContent) -> list[str]:
    """Describe the model, its computation and the summaries, as done in this run."""
    fit: Any = content.fit
    paragraphs = [_likelihood(fit), _computation(fit), _prediction(content)]
    if content.units is not None:
        paragraphs.append(_units(content))
    return paragraphs


def cited_sources(paragraphs: list[str]) -> list[tuple[str, str]]:
    """Return reference and DOI of every source named in the paragraphs, and of the reporting checklist."""
    text = " ".join([*paragraphs, "Stevens et al. 2016"])
    return [entry for name, entry in SOURCES.items() if name in text]


def integrated(fit: Any) -> bool:
    """Whether the results are a mixture over several values of the hyperparameters."""
    return int(fit.diagnostics.get("components", 1)) > 1


def _has_nugget(fit: Any) -> bool:
    table = fit.hyperparameters
    return "nugget_sd" in table.index and float(table.loc["nugget_sd", "at_mode"]) > 0.0


def _likelihood(fit: Any) -> str:
    terms = [term for term in fit.coefficients.index if term != "intercept"]
    parts = ["an intercept"]
    if terms:
        parts.append(f"linear effects of {listed([str(term) for term in terms])}")
    parts.append("a spatially correlated surface")
    if _has_nugget(fit):
        parts.append("an independent effect of each site (the nugget)")
    nu = float(getattr(fit.model, "nu", 1.0))
    text = (
        "The number positive at a site was taken as binomial given the number examined, with the logit of "
        f"prevalence equal to the sum of {listed(parts)} (Diggle, Tawn & Moyeed 1998). The "
        "surface is a Gaussian "
        f"random field with Matérn correlation of smoothness {nu:g}; its range is the distance at which "
        "correlation has fallen to about 0.14."
    )
    tests = getattr(fit.model, "tests", None)
    if tests:
        named = listed(
            [
                f"{name} (sensitivity {a.sensitivity:g}, specificity {a.specificity:g})"
                for name, a in tests.items()
            ]
        )
        text += f" Test results were corrected inside the likelihood for the accuracy of {named}."
    else:
        text += " Tests were taken as free of error: prevalence is prevalence by the test used."
    return text


def _computation(fit: Any) -> str:
    if fit.engine == "mesh":
        text = (
            "The surface was represented on a triangular mesh through a stochastic partial "
            "differential equation "
            "(Lindgren, Rue & Lindström 2011), "
        )
    else:
        text = "The surface was computed with the full covariance between sites, without a mesh, "
    text += (
        "and its posterior distribution given the hyperparameters by a Laplace approximation "
        "(Tierney & Kadane "
        "1986). "
    )
    if integrated(fit):
        text += (
            "Results were integrated over the posterior distribution of the hyperparameters (Rue, Martino & "
            "Chopin 2009). "
        )
    else:
        text += "The hyperparameters were held at single values, which intervals do not account for. "
    return text + _priors(fit)


_PARAMETERS = (
    ("range_km", "the range of the surface"),
    ("sd", "the standard deviation of the surface"),
    ("nugget_sd", "the standard deviation of the nugget"),
)


def _priors(fit: Any) -> str:
    """Say which hyperparameters have priors and which were fixed; what the model lacks is not named."""
    sentences = dict(fit.prior_text)
    known = [(words, str(sentences[name])) for name, words in _PARAMETERS if name in sentences]
    free = [words for words, prior in known if prior.startswith("P(")]
    fixed = [f"{words} ({prior})" for words, prior in known if " fixed at " in prior]
    parts = []
    if free:
        parts.append(
            f"{listed(free)} {'has a' if len(free) == 1 else 'have'} penalised-complexity "
            f"prior{'' if len(free) == 1 else 's'} (Fuglstad et al. 2019), printed above as used"
        )
    if fixed:
        parts.append(f"{listed(fixed)} {'was' if len(fixed) == 1 else 'were'} given a value, not estimated")
    return sentence("; ".join(parts))


def _prediction(content: ReportContent) -> str:
    nugget = str(content.surface.nugget)
    text = (
        "Prevalence was predicted on a grid; on maps and in tables it means "
        f"{NUGGET_WORDS.get(nugget, nugget)}. Intervals are 95 % credible intervals. "
        "Exceedance is the posterior probability that prevalence is above a threshold."
    )
    if content.surface.extrapolated.any():
        text += (
            " Cells farther from every site than the range, or with covariates outside the range that was "
            "surveyed, are marked as extrapolated."
        )
    return text


def _units(content: ReportContent) -> str:
    units: Any = content.units
    weights = (
        "the people living in each cell"
        if units.weighting == "population"
        else "the area of each cell, since no population was given"
    )
    text = (
        f"Unit estimates are means over the cells of a unit weighted by {weights}, taken within each of "
        f"{units.draws:,} joint draws from the posterior (Gething, Patil & Hay 2010), never by averaging the "
        "exceedance of cells. Raw estimates carry Wilson intervals (Wilson 1927), which take "
        "the people examined for a simple random sample."
    )
    if content.decisions is not None:
        text += (
            " A unit was decided where the probability of its class reached the certainty asked for; "
            f"{content.decisions.units.draws:,} draws were used for the decisions."
        )
    return text
