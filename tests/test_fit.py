"""The model layer through its public names: worked values, published data, invariances, and refusals."""

import csv
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy.interpolate import CubicSpline
from scipy.special import expit

import prevmap
from prevmap.engine.laplace import Theta

DATA = Path(__file__).parent / "data"
METRES = "+proj=laea +lat_0=0 +lon_0=0 +datum=WGS84 +units=m"
KILOMETRES = "+proj=laea +lat_0=0 +lon_0=0 +datum=WGS84 +units=km"


def survey_of(xy_km, examined, positive, crs=KILOMETRES, scale=1.0, **columns):
    frame = pd.DataFrame({"examined": examined, "positive": positive, **columns})
    points = gpd.points_from_xy(scale * np.asarray(xy_km)[:, 0], scale * np.asarray(xy_km)[:, 1])
    site = "site" if "site" in columns else None
    return prevmap.Survey.from_frame(
        gpd.GeoDataFrame(frame, geometry=points, crs=crs), examined="examined", positive="positive", site=site
    )


def simulated(seed=5, n=60, intercept=-1.2, slope=0.5, size=80.0):
    rng = np.random.default_rng(seed)
    xy = rng.uniform(5, size, (n, 2))
    x = rng.normal(size=n)
    wave = 0.8 * np.sin(xy[:, 0] / 12.0) + 0.5 * np.cos(xy[:, 1] / 15.0)
    examined = rng.integers(20, 60, n)
    positive = rng.binomial(examined, expit(intercept + wave + slope * x + 0.3 * rng.normal(size=n)))
    return xy, examined, positive, x


def fixed(range_km, sd, intercept, nugget_sd=None):
    return prevmap.Priors(range_km=range_km, sd=sd, nugget_sd=nugget_sd, intercept=(intercept, 1e-5))


# Rasmussen & Williams (2006), eq. 3.32, evaluated independently with 30-digit arithmetic.
@pytest.mark.parametrize(
    ("y", "n", "intercept", "log_z"),
    [
        (3, 10, 0.0, -2.163735990712),
        (0, 20, 0.0, -5.046877237383),
        (0, 20, -2.0, -1.798714770010),
        (30, 100, 0.0, -4.339729911989),
    ],
)
def test_worked_laplace_values_of_one_site(y, n, intercept, log_z):
    model = prevmap.PrevalenceModel([], priors=fixed(10.0, 1.0, intercept))
    fit = model.fit(survey_of([[3.0, 4.0]], [n], [y]), engine="exact")
    assert fit.log_evidence == pytest.approx(log_z, abs=1e-6)  # six digits, as asked of a user's path
    assert fit.diagnostics["nodes"] == 0


def test_one_person_at_one_site_is_a_survey():
    survey = survey_of([[3.0, 4.0]], [1], [1])
    fit = prevmap.PrevalenceModel([], priors=fixed(10.0, 1.0, 0.0)).fit(survey, engine="exact")
    assert fit.n_examined == fit.n_sites == 1
    # p(y=1) is exactly 1/2 by symmetry, so Laplace's answer must be near log 0.5; 0.05 is its known error there.
    assert fit.log_evidence == pytest.approx(np.log(0.5), abs=0.05)
    meshed = prevmap.PrevalenceModel([]).fit(survey)
    surface = meshed.predict(gpd.GeoDataFrame(geometry=gpd.points_from_xy([3.0], [4.0]), crs=KILOMETRES))
    assert 0.0 < surface.lower95[0] < surface.mean[0] < surface.upper95[0] < 1.0


def test_worked_laplace_values_with_correlated_sites():
    # Three sites with a free intercept, nu = 1, range 2; computed independently.
    survey = survey_of([[5, 5], [6, 5], [5, 6]], [20, 25, 30], [2, 5, 1])
    priors = prevmap.Priors(range_km=2.0, sd=1.0, nugget_sd=None, intercept=(0.0, 5.0))
    fit = prevmap.PrevalenceModel([], priors=priors).fit(survey, engine="exact")
    assert fit.log_evidence == pytest.approx(-8.176709750855, abs=1e-6)


@pytest.mark.parametrize(("row", "nu"), [("S1", 0.5), ("S1m", 1.5)])
def test_county_births_reproduce_the_reference_fits(row, nu):
    """Cressie & Read (1985) data; reference values computed by two independent codes (tests/data/README.md)."""
    with (DATA / "nc" / "nc_reference_fits.csv").open() as file:
        wanted = {
            r["parameter"]: float(r["value"])
            for r in csv.DictReader(file)
            if r["model_id"] == row and "exact" not in r["method"]
        }
    counties = pd.read_csv(DATA / "nc" / "nc_sids.csv")
    survey = survey_of(counties[["x_km", "y_km"]], counties["births_74"], counties["sids_74"], KILOMETRES)
    priors = fixed(np.sqrt(8 * nu) * wanted["phi"], np.sqrt(wanted["sigma2"]), wanted["intercept"])
    fit = prevmap.PrevalenceModel([], priors=priors, nu=nu).fit(survey, engine="exact")
    assert fit.n_positive == 667
    assert fit.log_evidence == pytest.approx(wanted["loglik"], abs=2e-4)  # phi is printed to 4 decimals


def test_without_a_field_it_is_logistic_regression():
    """Sd of the field pushed to zero and flat priors: statsmodels' binomial GLM."""
    xy, examined, positive, x = simulated(n=150)
    examined, positive = 20 * examined, 20 * positive  # so that a posterior mean is its maximum
    survey = survey_of(xy, examined, positive, x=x)
    priors = prevmap.Priors(range_km=20.0, sd=1e-4, nugget_sd=None, intercept=(0.0, 1e3), coefficient_sd=1e3)
    glm = sm.GLM(
        np.column_stack([positive, examined - positive]), sm.add_constant(x), family=sm.families.Binomial()
    ).fit()
    for engine in ("mesh", "exact"):
        model = prevmap.PrevalenceModel([prevmap.ColumnCovariate("x", scale=False)], priors=priors)
        table = model.fit(survey, engine=engine).coefficients
        assert np.max(np.abs(table["mean"] - glm.params) / glm.bse) < 0.03
        assert np.max(np.abs(table["sd"] / glm.bse - 1.0)) < 0.003


@pytest.mark.parametrize("engine", ["mesh", "exact"])
def test_splitting_shuffling_and_units_change_nothing(engine, rng):
    xy, examined, positive, x = simulated(n=40)
    site = np.array([f"s{i}" for i in range(40)])
    model = prevmap.PrevalenceModel(
        [prevmap.ColumnCovariate("x")],
        priors=prevmap.Priors(range_km=30.0),
        mesh=prevmap.MeshSpec(edge_km=6.0),
    )
    whole = model.fit(survey_of(xy, examined, positive, x=x, site=site), engine=engine)
    first, part = examined // 2, np.minimum(positive // 3, examined // 2)
    part = np.maximum(part, positive - (examined - first))
    split = survey_of(
        np.repeat(xy, 2, axis=0),
        np.column_stack([first, examined - first]).ravel(),
        np.column_stack([part, positive - part]).ravel(),
        x=np.repeat(x, 2),
        site=np.repeat(site, 2),
    )
    order = rng.permutation(40)
    shuffled = survey_of(xy[order], examined[order], positive[order], x=x[order], site=site[order])
    metres = survey_of(xy, examined, positive, METRES, 1000.0, x=x, site=site)
    points = gpd.GeoDataFrame(
        {"x": rng.normal(size=25)}, geometry=gpd.points_from_xy(*rng.uniform(5, 80, (2, 25))), crs=KILOMETRES
    )
    expected = whole.predict(points)
    for other in (split, shuffled, metres):
        fit = model.fit(other, engine=engine)
        assert fit.log_evidence == pytest.approx(whole.log_evidence, rel=1e-8)
        np.testing.assert_allclose(fit.coefficients, whole.coefficients, rtol=1e-8, atol=1e-10)
        np.testing.assert_allclose(fit.hyperparameters, whole.hyperparameters, rtol=1e-8)
        surface = fit.predict(points)
        for name in ("mean", "sd", "lower95", "upper95"):
            np.testing.assert_allclose(getattr(surface, name), getattr(expected, name), rtol=1e-8)


def test_mesh_and_dense_engines_agree_when_everything_is_estimated():
    xy, examined, positive, x = simulated()
    survey = survey_of(xy, examined, positive, x=x)
    covariates = [prevmap.ColumnCovariate("x")]
    mesh = prevmap.PrevalenceModel(covariates, mesh=prevmap.MeshSpec(edge_km=3.0)).fit(survey)
    dense = prevmap.PrevalenceModel(covariates).fit(survey, engine="exact")
    # The mesh's own error at a tenth of the range: about 2 % in sd, so in log sd; a tenth of a posterior sd here.
    assert np.log(mesh.hyperparameters["median"]).to_numpy() == pytest.approx(
        np.log(dense.hyperparameters["median"]).to_numpy(), abs=0.06
    )
    assert mesh.log_evidence == pytest.approx(
        dense.log_evidence, abs=0.2
    )  # a Bayes factor of 1.2 decides nothing
    shift = (mesh.coefficients["mean"] - dense.coefficients["mean"]) / dense.coefficients["sd"]
    assert np.max(np.abs(shift)) < 0.05  # posterior standard deviations, from the mesh
    points = gpd.GeoDataFrame(
        {"x": [0.0, 1.0]}, geometry=gpd.points_from_xy([20, 60], [30, 50]), crs=KILOMETRES
    )
    a, b = mesh.predict(points), dense.predict(points)
    assert np.max(np.abs(a.exceedance(0.25) - b.exceedance(0.25))) < 0.03  # the mesh, as above


def test_evidence_integrates_the_prior():
    """With one free hyperparameter the integral is a one-dimensional quadrature of fits at fixed values."""
    xy, examined, positive, _ = simulated(n=40)
    survey = survey_of(xy, examined, positive)

    def model(sd):
        priors = prevmap.Priors(range_km=25.0, sd=sd, nugget_sd=None)
        return prevmap.PrevalenceModel([], priors=priors)

    rate = -np.log(0.05) / 2.0
    log_sd = np.linspace(np.log(0.2), np.log(4.0), 61)
    values = [
        model(float(np.exp(v))).fit(survey, engine="exact").log_evidence + np.log(rate) - rate * np.exp(v) + v
        for v in log_sd
    ]
    top = max(values)
    brute = top + np.log(np.sum(np.exp(np.array(values) - top)) * (log_sd[1] - log_sd[0]))
    fit = model(prevmap.Above(2.0, 0.05)).fit(survey, engine="exact")
    assert fit.log_evidence == pytest.approx(
        brute, abs=0.01
    )  # a trapezoid of step 1.5 sd on a skewed density
    weight = np.exp(np.array(values) - top)
    cumulative = np.cumsum(weight) / np.sum(weight)
    median = np.exp(np.interp(0.5, cumulative - 0.5 * weight / weight.sum(), log_sd))
    assert fit.hyperparameters.loc["sd", "median"] == pytest.approx(median, rel=0.01)
    flat = model(prevmap.Above(2.0, 0.05)).fit(survey, engine="exact", integrate=False)
    assert flat.diagnostics["components"] == 1
    assert flat.log_evidence == pytest.approx(brute, abs=0.1)  # a Gaussian instead


def test_three_free_hyperparameters_are_integrated_as_a_dense_grid_does():
    """A small survey that leaves range, sd and nugget wide open, where an integration that stops early shows."""
    rng = np.random.default_rng(3)
    xy = rng.uniform(0, 100, (25, 2))
    positive = rng.binomial(30, expit(-2.0 + np.sin(xy[:, 0] / 8.0) + 0.4 * rng.normal(size=25)))
    survey = survey_of(xy, np.full(25, 30), positive)
    below, above_sd, above_nugget = 10.0, 2.0, 1.0
    priors = prevmap.Priors(range_km=prevmap.Below(below), sd=prevmap.Above(above_sd))
    fit = prevmap.PrevalenceModel([], priors=priors).fit(survey, engine="exact")
    rates = -np.log(0.05) * np.array([below, 1 / above_sd, 1 / above_nugget])
    axes = np.linspace(1.0, 9.0, 15), np.linspace(-5.0, 2.0, 12), np.linspace(-5.0, 1.5, 11)
    height = np.empty([len(a) for a in axes])
    start = None
    for i, r in enumerate(axes[0]):
        for j, s in enumerate(axes[1]):
            for k, g in enumerate(axes[2]):
                state = fit.core.laplace(Theta(r, s, g), start)
                start = state.mode
                log_prior = np.log(rates[0]) - r - rates[0] * np.exp(-r)
                log_prior += (
                    np.log(rates[1]) + s - rates[1] * np.exp(s) + np.log(rates[2]) + g - rates[2] * np.exp(g)
                )
                height[i, j, k] = state.log_evidence + log_prior
    weight = np.exp(height - height.max())
    volume = np.prod([a[1] - a[0] for a in axes])
    assert fit.log_evidence == pytest.approx(
        height.max() + np.log(weight.sum() * volume), abs=0.06
    )  # tails, 1.5 sd
    weight /= weight.sum()
    for at, name in enumerate(("range_km", "sd", "nugget_sd")):
        other = tuple(b for b in range(3) if b != at)
        fine = np.linspace(axes[at][0], axes[at][-1], 2_000)
        density = np.exp(CubicSpline(axes[at], np.log(weight.sum(axis=other)))(fine))
        cumulative = np.cumsum(density) / density.sum()
        row = np.log(fit.hyperparameters.loc[name])
        for column, q, error in (("lower95", 0.025, 0.02), ("median", 0.5, 0.06), ("upper95", 0.975, 0.025)):
            # Probability below the printed limit; the grid itself errs by about 0.01.
            assert np.interp(row[column], fine, cumulative) == pytest.approx(q, abs=error), (name, column)


def test_a_survey_without_positives_is_the_same_on_the_mesh_and_without_one():
    """Long ranges stay open here: the border of the mesh must be farther than any range that is tried."""
    rng = np.random.default_rng(9)
    survey = survey_of(rng.uniform(0, 40, (25, 2)), np.full(25, 30), np.zeros(25, dtype=int))
    mesh = prevmap.PrevalenceModel([], mesh=prevmap.MeshSpec(edge_km=4.0)).fit(survey)
    dense = prevmap.PrevalenceModel([]).fit(survey, engine="exact")
    # Ranges beyond 20 diagonals, 1 % of the prior, are tried by the dense engine only.
    assert mesh.log_evidence == pytest.approx(dense.log_evidence, abs=0.06)
    a, b = mesh.coefficients.loc["intercept"], dense.coefficients.loc["intercept"]
    assert a["sd"] == pytest.approx(b["sd"], rel=0.05)
    assert a["upper95"] == pytest.approx(b["upper95"], abs=0.2 * b["sd"])


def test_coefficient_spread_is_that_of_the_mixture():
    xy, examined, positive, x = simulated(n=30)
    fit = prevmap.PrevalenceModel([prevmap.ColumnCovariate("x")]).fit(
        survey_of(xy, examined, positive, x=x), engine="exact"
    )
    parts = [fit.core.coefficients(state) for state in fit.posterior.states]
    weight = fit.posterior.weights
    means, variances = np.array([m for m, _ in parts]), np.array([np.diag(c) for _, c in parts])
    draws_of = np.random.default_rng(2)
    k = draws_of.choice(weight.size, 200_000, p=weight)
    draws = means[k] + np.sqrt(variances[k]) * draws_of.standard_normal((k.size, 2))
    np.testing.assert_allclose(
        fit.coefficients["sd"], draws.std(axis=0), rtol=0.01
    )  # 4 errors of a sd: 0.7 %
    assert np.all(
        fit.coefficients["sd"] > 1.0001 * np.sqrt(weight @ variances)
    )  # hyperparameters move the mean
    for name, q in (("lower95", 0.025), ("upper95", 0.975)):
        below = (draws <= fit.coefficients[name].to_numpy()).mean(axis=0)
        np.testing.assert_allclose(below, q, atol=4 * np.sqrt(q * (1 - q) / k.size))


def test_a_known_truth_is_recovered():
    xy, examined, positive, x = simulated(seed=11, n=120)
    fit = prevmap.PrevalenceModel([prevmap.ColumnCovariate("x", scale=False)]).fit(
        survey_of(xy, examined, positive, x=x)
    )
    row = fit.coefficients.loc["x"]
    assert row["lower95"] < 0.5 < row["upper95"]
    assert row["sd"] < 0.15  # the covariate is not lost in the field
    assert (
        fit.hyperparameters.loc["nugget_sd", "lower95"]
        < 0.3
        < fit.hyperparameters.loc["nugget_sd", "upper95"]
    )


def test_test_accuracy_moves_prevalence_towards_the_truth():
    xy, examined, positive, _ = simulated(n=50, intercept=-2.0)
    survey = survey_of(xy, examined, positive, test=["smear"] * 50)
    about = prevmap.SurveyNotes(test="smear")
    survey = prevmap.Survey.from_frame(
        survey.frame[["examined", "positive", "geometry"]],
        examined="examined",
        positive="positive",
        about=about,
    )
    plain = prevmap.PrevalenceModel([]).fit(survey)
    insensitive = prevmap.PrevalenceModel([], tests={"smear": prevmap.DiagnosticAccuracy(0.6, 1.0)}).fit(
        survey
    )
    where = gpd.GeoDataFrame(geometry=gpd.points_from_xy([40.0], [40.0]), crs=KILOMETRES)
    ratio = insensitive.predict(where).median[0] / plain.predict(where).median[0]
    assert ratio == pytest.approx(
        1 / 0.6, rel=0.1
    )  # Rogan & Gladen (1978): apparent over sensitivity, at Sp = 1
    assert not any("could be false" in w for w in insensitive.warnings)
    doubtful = prevmap.PrevalenceModel(
        [], tests={"smear": prevmap.DiagnosticAccuracy(0.9, 0.94)}, priors=prevmap.Priors(range_km=30.0)
    ).fit(survey, integrate=False)
    assert any("positives could be false" in w for w in doubtful.warnings)
    unknown = prevmap.PrevalenceModel([], tests={"other": prevmap.DiagnosticAccuracy(0.6, 1.0)})
    with pytest.raises(prevmap.InputError, match="'other', which no row of the survey used; found: 'smear'"):
        unknown.fit(survey)


def test_a_default_mesh_is_made_again_where_the_range_asks_for_it():
    rng = np.random.default_rng(3)
    xy = rng.uniform(0, 100, (250, 2))
    patch = np.sin(xy[:, 0] / 2.5) * np.sin(xy[:, 1] / 2.5)
    positive = rng.binomial(60, expit(-1 + 1.6 * patch))
    survey = survey_of(xy, np.full(250, 60), positive)
    priors = prevmap.Priors(range_km=prevmap.Below(30, 0.05))
    refined = prevmap.PrevalenceModel([], priors=priors).fit(survey, integrate=False)
    lower = refined.hyperparameters.loc["range_km", "lower95"]
    coarse = prevmap.PrevalenceModel([], priors=priors, mesh=prevmap.MeshSpec(edge_km=8.0)).fit(
        survey, integrate=False
    )
    assert coarse.diagnostics["edge_km"] == 8.0  # a stated edge is kept, with a warning
    assert any("a fifth of the range's lower limit" in w for w in coarse.warnings)
    assert refined.diagnostics["edge_km"] < 8.0
    assert refined.diagnostics["edge_km"] <= lower / 4.0 or refined.warnings


@pytest.mark.parametrize(
    ("model", "arguments", "message"),
    [
        ({"nu": 1.5}, {}, "the mesh engine has nu = 1"),
        ({"nu": 0.7}, {"engine": "exact"}, "nu = 0.7: expected one of 0.5, 1.0, 1.5, 2.5"),
        ({}, {"engine": "fast"}, "expected 'mesh' or 'exact'"),
        ({"mesh": prevmap.MeshSpec(edge_km=0.01)}, {}, "edge"),
    ],
)
def test_what_cannot_be_fitted_is_refused_in_words(model, arguments, message):
    xy, examined, positive, _ = simulated(n=20)
    with pytest.raises(prevmap.InputError, match=message):
        prevmap.PrevalenceModel([], **model).fit(survey_of(xy, examined, positive), **arguments)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: prevmap.Priors(range_km=prevmap.Above(2)), r"range_km = Above.*expected Below"),
        (lambda: prevmap.Priors(sd=prevmap.Below(2)), r"sd = Below.*expected Above"),
        (lambda: prevmap.Priors(sd=-1.0), "sd = -1.0: expected a positive number"),
        (lambda: prevmap.Below(0), "expected a positive number"),
        (lambda: prevmap.Above(1, probability=1.5), "between 0 and 1"),
        (lambda: prevmap.Priors(intercept=3.0), r"expected a pair \(mean, sd\)"),
        (lambda: prevmap.MeshSpec(edge_km=-2), "edge_km = -2"),
        (lambda: prevmap.DiagnosticAccuracy(0.4, 0.5), "carries no information"),
        (lambda: prevmap.DiagnosticAccuracy(1.4, 0.5), "expected at most 1"),
    ],
)
def test_impossible_settings_are_refused_when_they_are_made(make, message):
    with pytest.raises(prevmap.InputError, match=message):
        make()


def test_a_fit_prints_what_makes_it_trustworthy():
    xy, examined, positive, _ = simulated(n=30)
    fit = prevmap.PrevalenceModel([]).fit(survey_of(xy, examined, positive))
    text = repr(fit)
    for word in (
        "examined at 30 sites",
        "log-evidence",
        "gradient",
        "smallest pivot",
        "range_km",
        "intercept",
    ):
        assert word in text
    assert dict(fit.prior_text)["range_km"].endswith("(default: 5 % of the study area's diagonal)")
    told = []
    prevmap.PrevalenceModel([]).fit(survey_of(xy, examined, positive), progress=told.append)
    assert {"mode", "curvature", "integration"} <= set(told)
