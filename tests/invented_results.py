"""Small invented results with the attributes that maps and report read: a stand-in for a finished fit."""

from types import SimpleNamespace

import geopandas as gpd
import numpy as np
import pandas as pd
import shapely
from affine import Affine
from pyproj import CRS

WORKING = CRS.from_epsg(32631)
LEFT, BOTTOM = 400_000.0, 600_000.0
NAMES = [
    "Upper Karvel",
    "Sembro",
    "Dunqua West",
    "Illoth",
    "Maravenn",
    "Tesk",
    "Ombria Lakeside",
    "Quell",
    "Pentavar",
    "Rill",
    "Hask & Moor",
    "Bendrith",
]


class Notes(SimpleNamespace):
    """What the survey measured."""


def invented_region(lake=True):
    """Twelve units in three rows of four, wavy borders not needed; a lake cut out of two of them."""
    width, height = 24_000.0, 20_000.0
    rows = []
    for i, name in enumerate(NAMES):
        column, row = i % 4, i // 4
        west, south = LEFT + column * width, BOTTOM + row * height
        rows.append(
            (
                name,
                f"K{i + 1:02d}",
                "North" if row else "South",
                shapely.box(west, south, west + width, south + height),
            )
        )
    units = gpd.GeoDataFrame(rows, columns=["unit", "code", "parent", "geometry"], crs=WORKING)
    water = shapely.Point(LEFT + 44_000, BOTTOM + 24_000).buffer(7_000.0) if lake else None
    boundary = units.union_all()
    if water is not None:
        boundary = boundary.difference(water)
    return SimpleNamespace(
        units=units,
        boundary=boundary,
        crs=WORKING,
        exclude=water,
        distortion=0.0004,
        source="units.geojson",
        has_units=True,
        findings=pd.DataFrame(),
    )


def invented_results(seed=1, *, names=None, lake=True, population=True, cell_m=2_000.0):
    """Region, grid, fit, surface, units that belong together; prevalence rises from west to east."""
    rng = np.random.default_rng(seed)
    region = invented_region(lake)
    if names is not None:
        region.units["unit"] = names
    columns, lines = int(96_000 / cell_m), int(60_000 / cell_m)
    top = BOTTOM + 60_000.0
    centres_x = LEFT + cell_m * (np.arange(columns) + 0.5)
    centres_y = top - cell_m * (np.arange(lines) + 0.5)
    x, y = (a.ravel() for a in np.meshgrid(centres_x, centres_y))
    points = gpd.GeoSeries(gpd.points_from_xy(x, y), crs=WORKING)
    active = points.within(region.boundary).to_numpy()
    cell = np.flatnonzero(active)
    x, y, n = x[active], y[active], int(active.sum())

    def to_raster(values, fill=np.nan):
        raster = np.full(lines * columns, fill, dtype=float)
        raster[cell] = values
        return raster.reshape(lines, columns)

    people = rng.poisson(60.0, n).astype(float)
    people[(x - LEFT < 10_000) & (y > BOTTOM + 45_000)] = 0.0
    grid = SimpleNamespace(
        region=region,
        cell_m=cell_m,
        shape=(lines, columns),
        origin_m=(LEFT, top),
        cell=cell,
        xy_km=np.column_stack([x, y]) / 1000.0,
        coverage=np.ones(n),
        people=people if population else None,
        population=SimpleNamespace(ages=(5, 14), year=2026, path="people.tif", kind="counts")
        if population
        else None,
        people_unassigned=0.0,
        to_raster=to_raster,
        transform=Affine(cell_m, 0.0, LEFT, 0.0, -cell_m, top),
    )

    def eta(px, py):
        return -3.2 + 2.4 * (px - LEFT) / 96_000.0 + 0.5 * np.sin(py / 9_000.0) + 0.4 * np.cos(px / 11_000.0)

    spread = 0.35 + 0.4 * np.abs((y - BOTTOM) / 60_000.0 - 0.4)
    draws = eta(x, y) + spread * (0.8 * rng.standard_normal((400, 1)) + 0.6 * rng.standard_normal((400, n)))
    prevalence = 1.0 / (1.0 + np.exp(-draws))
    about = Notes(
        indicator="any infection", ages=(5, 14), test="single smear", sampling="school", date="2026-03"
    )

    k = 60
    sx, sy = LEFT + rng.uniform(2_000, 94_000, k), BOTTOM + rng.uniform(2_000, 44_000, k)
    examined = rng.integers(25, 61, k)
    positive = rng.binomial(examined, 1.0 / (1.0 + np.exp(-eta(sx, sy) - 0.4 * rng.standard_normal(k))))
    where = gpd.GeoSeries(gpd.points_from_xy(sx, sy), crs=WORKING)
    owner = [region.units["unit"][region.units.contains(p)].iloc[0] for p in where]
    sites = gpd.GeoDataFrame(
        {
            "site": [f"site {i + 1}" for i in range(k)],
            "examined": examined,
            "positive": positive,
            "proportion": positive / examined,
            "unit": owner,
        },
        geometry=where,
        crs=WORKING,
    )
    far = y > BOTTOM + 52_000
    odd = (x - LEFT > 88_000) & (y < BOTTOM + 8_000)
    reason = np.where(far & odd, "far, covariates", np.where(far, "far", np.where(odd, "covariates", "")))

    findings = pd.DataFrame(
        [
            (12, "site 11", "positive", "error", "positive 41 is larger than examined 40", "row not used"),
            (29, None, "examined", "error", "examined is missing while positive is 0", "row not used"),
            (33, "site 30", "geometry", "warning", "identical to row 32", "kept and pooled"),
            (None, None, "distance", "note", "<b>largest distortion</b> 0.04 %", "kept"),
        ],
        columns=["row", "site", "field", "severity", "what", "action"],
    )
    survey = SimpleNamespace(
        frame=sites.to_crs(4326),
        about=about,
        findings=findings,
        source="sites.csv",
        rows_read=k + 2,
        has_unit=True,
        unplaced=pd.DataFrame(columns=["site", "examined", "positive", "unit"]),
        noted=lambda field: "5-14" if field == "ages" else str(getattr(about, field) or "not stated"),
    )
    fit = SimpleNamespace(
        survey=survey,
        region=region,
        engine="mesh",
        seed=1,
        sites=sites,
        n_sites=k,
        n_rows=k,
        n_examined=int(examined.sum()),
        n_positive=int(positive.sum()),
        log_evidence=-182.4417,
        findings=findings,
        warnings=("The mesh edge is above a fifth of the range's lower limit.",),
        coefficients=pd.DataFrame(
            {
                "mean": [-1.9, 0.42, -0.31],
                "sd": [0.3, 0.12, 0.2],
                "lower95": [-2.5, 0.19, -0.70],
                "median": [-1.9, 0.42, -0.31],
                "upper95": [-1.3, 0.65, 0.08],
            },
            index=pd.Index(["intercept", "elevation", "km_to_water"], name="term"),
        ),
        hyperparameters=pd.DataFrame(
            {
                "median": [31.0, 0.8, 0.42],
                "lower95": [14.0, 0.5, 0.2],
                "upper95": [77.0, 1.3, 0.7],
                "at_mode": [29.0, 0.78, 0.43],
            },
            index=pd.Index(["range_km", "sd", "nugget_sd"], name="parameter"),
        ),
        prior_text=(
            ("range_km", "P(range < 20 km) = 0.05"),
            ("sd", "P(sd > 2) = 0.05"),
            ("nugget_sd", "P(nugget sd > 1) = 0.05"),
        ),
        diagnostics={
            "nodes": 1843,
            "edge_km": 4.0,
            "margin_km": 40.0,
            "evaluations": 23,
            "iterations": 61,
            "gradient_norm": 3.1e-7,
            "smallest_pivot": 0.012,
            "components": 17,
            "seconds": 4.2,
        },
        model=SimpleNamespace(
            covariates=(SimpleNamespace(label="elevation"), SimpleNamespace(label="km_to_water")),
            nu=1.0,
            tests=None,
        ),
        design=SimpleNamespace(
            terms=("intercept", "elevation", "km_to_water"),
            centre=np.array([0, 310.0, 6.1]),
            scale=np.array([1, 140.0, 4.4]),
        ),
    )
    surface = SimpleNamespace(
        grid=grid,
        points=gpd.GeoDataFrame(geometry=gpd.points_from_xy(x, y), crs=WORKING),
        nugget="average",
        mean=prevalence.mean(axis=0),
        sd=prevalence.std(axis=0),
        median=np.median(prevalence, axis=0),
        lower95=np.quantile(prevalence, 0.025, axis=0),
        upper95=np.quantile(prevalence, 0.975, axis=0),
        exceedance=lambda t: (prevalence > t).mean(axis=0),
        extrapolated=far | odd,
        extrapolation_reason=reason,
        nearest_site_km=np.ones(n),
        missing=np.zeros(n, dtype=bool),
        at={"sampling": "community"},
        region=region,
        about=about,
        sites=sites,
        blank=people == 0 if population else np.zeros(n, dtype=bool),
        fit=fit,
    )

    unit_draws, rows = [], []
    inside = np.column_stack([points[active].within(g).to_numpy() for g in region.units.geometry])
    for i, unit in region.units.iterrows():
        mine = inside[:, i]
        weights = people[mine] if population else np.ones(mine.sum())
        drawn = prevalence[:, mine] @ weights / weights.sum()
        unit_draws.append(drawn)
        own = sites[sites["unit"] == unit["unit"]]
        m, a = int(own["examined"].sum()), int(own["positive"].sum())
        rows.append(
            {
                "unit": unit["unit"],
                "code": unit["code"],
                "parent": unit["parent"],
                "sites": len(own),
                "examined": m,
                "positive": a,
                "direct_estimate": a / m if m else np.nan,
                "direct_lower95": max(0.0, a / m - 0.05) if m else np.nan,
                "direct_upper95": a / m + 0.05 if m else np.nan,
                "mean": drawn.mean(),
                "sd": drawn.std(),
                "lower95": np.quantile(drawn, 0.025),
                "median": np.median(drawn),
                "upper95": np.quantile(drawn, 0.975),
                "population": weights.sum() if population else np.nan,
                "infected_mean": drawn.mean() * weights.sum(),
                "infected_lower95": 0.8 * drawn.mean() * weights.sum(),
                "infected_upper95": 1.2 * drawn.mean() * weights.sum(),
                "nearest_site_km": 0.0 if len(own) else 9.5,
                "share_extrapolated": float((far | odd)[mine].mean()),
                "basis": "own sites" if len(own) else "neighbours",
                "monte_carlo_error": drawn.std() / 20.0,
                "share_without_prediction": 0.0,
                "weighting": "population" if population else "area",
            }
        )
    frame = pd.DataFrame(rows)
    matrix = np.column_stack(unit_draws)

    def exceedance(t):
        return pd.Series((matrix > t).mean(axis=0), index=frame["unit"].to_list())

    def exceedance_error(t):
        p = exceedance(t)
        return np.sqrt(p * (1 - p) / len(matrix))

    units = SimpleNamespace(
        frame=frame,
        exceedance=exceedance,
        exceedance_error=exceedance_error,
        grid=grid,
        region=region,
        nugget="average",
        draws=64_000,
        draw_matrix=matrix,
        fit=fit,
        surface=surface,
        seed=1,
        weighting="population" if population else "area",
    )
    return SimpleNamespace(region=region, grid=grid, survey=survey, fit=fit, surface=surface, units=units)
