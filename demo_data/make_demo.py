"""Make the demonstration study: an invented island province, its survey and the truth behind both.

Run as ``python demo_data/make_demo.py [--folder FOLDER] [--avoid NAMES.txt]``. Everything follows from one
seed; the same versions of the libraries give the same bytes. Nothing here comes from a real place.
"""

from __future__ import annotations

import argparse
import csv
import hashlib
import json
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import rasterio
import shapely
from numpy.typing import NDArray
from province import (
    COLUMNS,
    DISTRICTS,
    NORTH,
    PIXEL_DEG,
    ROWS,
    TOWNS,
    TRANSFORM,
    WEST,
    ZONES,
    Floats,
    Province,
    Settlements,
    count_children,
    invent_names,
    make_province,
    normal,
    pixel_of,
    pixel_xy_km,
    settle,
    smooth_noise,
    to_km,
    uniform,
)
from scipy.interpolate import RectBivariateSpline
from scipy.spatial import cKDTree
from scipy.spatial.distance import cdist
from scipy.special import expit, k1
from scipy.stats import binom

SEED = 15
NODATA = -9999.0
SCHOOLS = 180
UNVISITED = [0, 4, 9]  # ranks, by settlements, of the districts that no team reached
TRUTH: dict[str, Any] = {
    "intercept": -2.35,
    "coefficients_per_sd": {"elevation": -0.35, "wetness": 0.40, "log1p of km_to_water": -0.25},
    "field": {"smoothness_nu": 1.0, "range_km": 45.0, "sd": 0.9},
    "nugget_sd": 0.35,
    "threshold": 0.10,
}


def standardised(values: Floats, where: NDArray[np.bool_]) -> Floats:
    """Centre and scale by the pixels in ``where``."""
    return (values - values[where].mean()) / values[where].std()


def matern_field(rng: np.random.Generator, range_km: float, sd: float) -> Floats:
    """Simulate a Matern field with nu = 1: exactly on a 4 km lattice, then by cubic interpolation."""
    x_km, y_km = pixel_xy_km()
    x_nodes = np.arange(-4.0, x_km.max() + 8, 4.0)
    y_nodes = np.arange(-4.0, y_km.max() + 8, 4.0)
    nodes = np.column_stack([a.ravel() for a in np.meshgrid(y_nodes, x_nodes, indexing="ij")])
    scaled = cdist(nodes, nodes) * math.sqrt(8) / range_km
    scaled[scaled == 0] = 1e-9
    root = np.linalg.cholesky(scaled * k1(scaled) + 1e-9 * np.eye(len(nodes)))
    values = sd * (root @ normal(rng, len(nodes))).reshape(y_nodes.size, x_nodes.size)
    return np.asarray(RectBivariateSpline(y_nodes, x_nodes, values)(y_km[:, 0], x_km[0]))


def average_over_nugget(eta: Floats, nugget_sd: float) -> Floats:
    """Return the mean of expit(eta + Z), Z normal with sd ``nugget_sd``."""
    node, weight = np.polynomial.hermite_e.hermegauss(31)
    return np.asarray(expit(eta[..., None] + nugget_sd * node) @ (weight / weight.sum()))


def true_logit(rng: np.random.Generator, province: Province) -> tuple[Floats, dict[str, Any]]:
    """Return the true logit prevalence without nugget, and the parameters behind it."""
    land = province.coast_km > 0
    effects = TRUTH["coefficients_per_sd"]
    inputs = [province.elevation, province.wetness, np.log1p(province.km_to_water)]
    eta = TRUTH["intercept"] + sum(
        slope * standardised(value, land) for slope, value in zip(effects.values(), inputs, strict=True)
    )
    scales = {
        name: {"mean": round(float(value[land].mean()), 6), "sd": round(float(value[land].std()), 6)}
        for name, value in zip(effects, inputs, strict=True)
    }
    field = TRUTH["field"]
    eta = eta + matern_field(rng, field["range_km"], field["sd"])
    return eta, {**TRUTH, "covariate_scales": scales, "seed": SEED}


def choose_schools(rng: np.random.Generator, province: Province, villages: Settlements) -> NDArray[np.intp]:
    """Choose the surveyed settlements, leaving out the districts that no team reached."""
    settled = np.bincount(villages.district, minlength=DISTRICTS)
    unvisited = np.argsort(settled, kind="stable")[UNVISITED]
    reached = np.nonzero(~np.isin(villages.district, unvisited))[0]
    shuffled = reached[np.argsort(uniform(rng, reached.size))]
    home = villages.district[shuffled]
    earlier = np.array([np.sum(home[:i] == home[i]) for i in range(home.size)])
    # The first two of each district come before all others, so that each visited one has schools.
    return np.sort(shuffled[np.argsort(earlier >= 2, kind="stable")[:SCHOOLS]])


Row = dict[str, Any]


def with_faults(table: list[Row], districts: Sequence[str], offshore: Floats) -> tuple[list[Row], list[Row]]:
    """Damage some rows on purpose; return the table and the list of what was done."""
    marks: list[tuple[Row, str, str, str, str]] = []

    def damage(row: Row, field: str, kind: str, fate: str, what: str, **values: Any) -> None:
        row.update(values)
        marks.append((row, field, kind, fate, what))

    t = table
    damage(t[8], "lon, lat", "swapped", "rejected", "longitude and latitude stand in each other's column",
           lon=t[8]["lat"], lat=t[8]["lon"])  # fmt: skip
    damage(t[19], "lon, lat", "zero position", "rejected", "position typed as 0, 0", lon=0, lat=0)
    damage(t[27], "positive", "more positive than examined", "rejected", "more positive than examined",
           positive=t[27]["examined"] + 9)  # fmt: skip
    damage(t[41], "examined", "not a number", "rejected", "examined written as a word", examined="forty")
    damage(t[55], "lon, lat", "no position, district known", "unit only",
           "no position; the district is given", lon="", lat="")  # fmt: skip
    damage(t[63], "examined", "examined missing", "rejected", "examined left empty where nobody was positive",
           examined="", positive=0)  # fmt: skip
    damage(t[88], "lon", "far outside", "rejected", "longitude mistyped by ten degrees",
           lon=round(t[88]["lon"] + 10, 5))  # fmt: skip
    damage(t[97], "examined", "nobody examined", "rejected", "nobody was examined", examined=0, positive=0)
    damage(t[104], "positive", "negative", "rejected", "a negative count", positive=-3)
    damage(t[118], "lon, lat", "no position, no district", "rejected", "neither position nor district",
           lon="", lat="", district="")  # fmt: skip
    damage(t[126], "lat", "impossible position", "rejected", "latitude above 90 degrees",
           lat=round(t[126]["lat"] + 90, 5))  # fmt: skip
    other = districts[(districts.index(t[139]["district"]) + 11) % len(districts)]
    damage(t[139], "district", "district does not match position", "kept",
           "the district given is not the one of the position", district=other)  # fmt: skip
    shore = min(t[150:], key=lambda row: np.hypot(*(offshore - [row["lon"], row["lat"]]).T).min())
    lon, lat = min(offshore.tolist(), key=lambda at: math.dist(at, (shore["lon"], shore["lat"])))
    damage(shore, "lon, lat", "just outside", "kept", "position some km off the coast",
           lon=round(lon, 5), lat=round(lat, 5))  # fmt: skip
    twin = dict(t[72])
    t.insert(73, twin)
    damage(twin, "row", "identical row", "kept", "the row above a second time")
    second = dict(t[12], examined=29, positive=t[12]["positive"] // 2)
    t.insert(13, second)
    damage(second, "school_name", "several rows of one site", "kept", "a second group of the school above")
    line = {id(row): i + 2 for i, row in enumerate(t)}
    faults = [
        {"row": line[id(row)], "school_name": row["school_name"]}
        | {"field": field, "kind": kind, "fate": fate, "what": what}
        for row, field, kind, fate, what in marks
    ]
    return t, sorted(faults, key=lambda fault: fault["row"])


def write_csv(path: Path, rows: Sequence[Mapping[str, Any]]) -> None:
    """Write rows with a header, Unix line ends."""
    with path.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.DictWriter(stream, list(rows[0]), lineterminator="\n")
        writer.writeheader()
        writer.writerows(rows)


def write_geojson(path: Path, shapes: Sequence[shapely.Geometry], rows: Sequence[Mapping[str, Any]]) -> None:
    """Write one feature a line in a fixed vertex order."""
    lines = []
    for shape, row in zip(shapes, rows, strict=True):
        geometry = json.loads(shapely.to_geojson(shapely.orient_polygons(shapely.normalize(shape))))
        geometry["coordinates"] = rounded(geometry["coordinates"])
        feature = {"type": "Feature", "properties": row, "geometry": geometry}
        lines.append(json.dumps(feature, separators=(",", ":")))
    collection = '{"type":"FeatureCollection","features":[\n' + ",\n".join(lines) + "\n]}\n"
    path.write_text(collection, encoding="utf-8")


def rounded(coordinates: Any) -> Any:
    """Round nested coordinates to the snapping grid's decimals."""
    return round(coordinates, 4) if isinstance(coordinates, float) else [rounded(c) for c in coordinates]


def write_raster(path: Path, values: Floats, known: NDArray[np.bool_], description: str) -> None:
    """Write one float32 band, nodata where not ``known``."""
    profile = {
        "driver": "GTiff", "height": ROWS, "width": COLUMNS, "count": 1, "dtype": "float32",
        "crs": "EPSG:4326", "transform": TRANSFORM, "nodata": NODATA, "compress": "deflate", "predictor": 3,
        "zlevel": 9,
    }  # fmt: skip
    with rasterio.open(path, "w", **profile) as raster:
        raster.write(np.where(known, values, NODATA).astype(np.float32), 1)
        raster.set_band_description(1, description)


def write_truth(
    folder: Path, province: Province, names: Sequence[str], children: Floats, prevalence: Floats, known: Any
) -> None:
    """Write the true surface and the true district means, which the study never reads."""
    write_raster(folder / "prevalence.tif", np.round(prevalence, 6), known, "true average prevalence")
    rows = []
    for d in np.argsort(names):
        share = (province.district_at == d).reshape(ROWS, 5, COLUMNS, 5).mean(axis=(1, 3))
        people = float((children * share).sum())
        mean = float((children * share * prevalence).sum() / people)
        rows.append({"district": names[d], "children": round(people), "prevalence": round(mean, 5),
                     "above_threshold": str(mean > TRUTH["threshold"]).lower()})  # fmt: skip
    write_csv(folder / "districts.csv", rows)


def checksums(folder: Path) -> str:
    """Return one line of SHA-256 and name for every file made."""
    kinds = {".csv", ".geojson", ".json", ".tif"}
    made = [p for p in [*folder.iterdir(), *(folder / "truth").iterdir()] if p.suffix in kinds]
    lines = {p.relative_to(folder).as_posix(): hashlib.sha256(p.read_bytes()).hexdigest() for p in made}
    return "".join(f"{digest}  {name}\n" for name, digest in sorted(lines.items()))


def make_demo(folder: Path) -> list[str]:
    """Write every file of the demonstration study; return the invented names."""
    (folder / "truth").mkdir(parents=True, exist_ok=True)
    tasks = ("names", "coast", "relief", "villages", "children", "field", "schools", "counts", "travel")
    rng = dict(zip(tasks, np.random.default_rng(SEED).spawn(len(tasks)), strict=True))

    province = make_province(rng["coast"], rng["relief"])
    villages = settle(rng["villages"], province)
    count = len(villages.people)
    names = invent_names(rng["names"], DISTRICTS + ZONES + len(province.lakes) + count)
    district_names, zone_names = names[:DISTRICTS], names[DISTRICTS : DISTRICTS + ZONES]
    lake_names, village_names = names[DISTRICTS + ZONES : -count], names[-count:]

    order = np.argsort(district_names)
    rounds = np.floor(5 * uniform(rng["names"], DISTRICTS)).astype(int)
    write_geojson(
        folder / "districts.geojson",
        [province.districts[d] for d in order],
        [
            {"district": district_names[d], "code": f"D{i + 1:02d}", "zone": zone_names[province.zone[d]],
             "past_rounds": int(rounds[d])}
            for i, d in enumerate(order)
        ],
    )  # fmt: skip
    write_geojson(folder / "lakes.geojson", province.lakes, [{"lake": name} for name in lake_names])

    children = count_children(rng["children"], province, villages)
    eta, parameters = true_logit(rng["field"], province)
    towns = to_km(villages.lonlat[np.argsort(-villages.people)[:TOWNS]])
    x_km, y_km = pixel_xy_km()
    to_town = cKDTree(towns).query(np.column_stack([x_km.ravel(), y_km.ravel()]))[0].reshape(ROWS, COLUMNS)
    slowness = 1.6 + province.elevation / 700 + 0.3 * smooth_noise(rng["travel"], 4)
    near_land = province.coast_km > -9
    covariates = {
        "elevation": (province.elevation, "elevation in m"),
        "wetness": (province.wetness, "share of the year the ground is wet"),
        "travel_time": (np.round(5 + to_town * slowness), "minutes to the nearest town"),
    }
    for name, (values, description) in covariates.items():
        write_raster(folder / f"{name}.tif", values, near_land, description)
    write_raster(folder / "population.tif", children, province.coast_km > -2, "children of 5 to 14 years")

    truth = folder / "truth"
    prevalence = average_over_nugget(eta, TRUTH["nugget_sd"])
    write_truth(truth, province, district_names, children, prevalence, province.coast_km > -2)
    (truth / "parameters.json").write_text(json.dumps(parameters, indent=2) + "\n", encoding="utf-8")

    schools = choose_schools(rng["schools"], province, villages)
    row, column = pixel_of(villages.lonlat[schools])
    logit = eta[row, column] + TRUTH["nugget_sd"] * normal(rng["schools"], SCHOOLS)
    examined = 25 + np.floor(36 * uniform(rng["counts"], SCHOOLS)).astype(int)
    positive = binom.ppf(uniform(rng["counts"], SCHOOLS), examined, expit(logit)).astype(int)
    table = [
        {"school_code": "", "school_name": f"{village_names[s]} school",
         "district": district_names[villages.district[s]],
         "lon": float(villages.lonlat[s, 0]), "lat": float(villages.lonlat[s, 1]), "examined": int(n),
         "positive": int(k), "test": "single smear", "date": "year 1, term 2"}
        for s, n, k in zip(schools, examined, positive, strict=True)
    ]  # fmt: skip
    table.sort(key=lambda line: (line["district"], line["school_name"]))
    for i, line in enumerate(table):
        line["school_code"] = f"S{i + 1:03d}"
    offshore = np.argwhere((province.coast_km < -2.5) & (province.coast_km > -3.5))[:, ::-1] + 0.5
    offshore = np.array([WEST, NORTH]) + offshore * np.array([PIXEL_DEG, -PIXEL_DEG])
    table, faults = with_faults(table, sorted(district_names), offshore)
    write_csv(folder / "sites.csv", table)
    write_csv(truth / "faults.csv", faults)

    others = np.setdiff1d(np.arange(count), schools)
    write_csv(
        folder / "candidates.csv",
        [
            {"settlement": village_names[s], "district": district_names[villages.district[s]],
             "lon": float(villages.lonlat[s, 0]), "lat": float(villages.lonlat[s, 1]),
             "people": int(villages.people[s])}
            for s in others
        ],
    )  # fmt: skip
    (folder / "SHA256SUMS").write_text(checksums(folder), encoding="utf-8")
    return names


def main() -> None:
    """Run from the command line."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--folder", type=Path, default=Path(__file__).parent, help="where to write")
    parser.add_argument("--avoid", type=Path, help="text file of real names that must not occur")
    options = parser.parse_args()
    names = make_demo(options.folder)
    if options.avoid:
        real = {line.strip().lower() for line in options.avoid.read_text(encoding="utf-8").splitlines()}
        taken = sorted(name.lower() for name in names if name.lower() in real)
        if taken:
            raise SystemExit(f"Real places have these names, change the syllables: {', '.join(taken)}")


if __name__ == "__main__":
    main()
