"""The demonstration data: what the README promises, and the same files when made again."""

import hashlib
import json
import subprocess
import sys
from pathlib import Path

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import rasterio
import shapely
from exactextract import exact_extract
from rasterio.features import geometry_mask

import prevmap
from prevmap.inputs.findings import findings_frame
from prevmap.inputs.placement import assign_units, site_findings

DEMO = Path(__file__).parents[1] / "demo_data"
PLACES = Path(__file__).parent / "data" / "place_names.txt"
RASTERS = [
    "elevation.tif",
    "wetness.tif",
    "travel_time.tif",
    "population.tif",
    "truth/prevalence.tif",
]


def checksums(folder):
    lines = (folder / "SHA256SUMS").read_text(encoding="utf-8").splitlines()
    return {name: digest for digest, name in (line.split("  ") for line in lines)}


@pytest.fixture(scope="module")
def made_again(tmp_path_factory):
    folder = tmp_path_factory.mktemp("demo")
    command = [sys.executable, DEMO / "make_demo.py", "--folder", folder, "--avoid", PLACES]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    return folder


@pytest.fixture(scope="module")
def districts():
    return gpd.read_file(DEMO / "districts.geojson")


@pytest.fixture(scope="module")
def sites():
    return pd.read_csv(DEMO / "sites.csv", dtype=str, keep_default_na=False)


def test_committed_files_have_the_listed_checksums():
    listed = checksums(DEMO)
    assert set(RASTERS) | {"sites.csv", "districts.geojson", "truth/faults.csv"} <= set(listed)
    for name, digest in listed.items():
        assert hashlib.sha256((DEMO / name).read_bytes()).hexdigest() == digest, name


def test_making_again_gives_the_same_text_files(made_again):
    names = [name for name in checksums(DEMO) if not name.endswith(".tif")]
    assert len(names) == 7
    for name in names:
        assert (made_again / name).read_bytes() == (DEMO / name).read_bytes(), name


@pytest.mark.parametrize("name", RASTERS)
def test_making_again_gives_the_same_rasters(made_again, name):
    with rasterio.open(DEMO / name) as kept, rasterio.open(made_again / name) as new:
        assert kept.crs == new.crs == "EPSG:4326"
        assert kept.transform == new.transform
        assert kept.dtypes == new.dtypes == ("float32",)
        assert kept.nodata == new.nodata == -9999
        assert kept.compression is not None
        np.testing.assert_array_equal(kept.read(), new.read())


def test_no_name_of_a_real_place_is_accepted(tmp_path):
    avoid = tmp_path / "names.txt"
    district = gpd.read_file(DEMO / "districts.geojson")["district"][0]
    avoid.write_text(f"someplace\n{district.lower()}\n", encoding="utf-8")
    command = [sys.executable, DEMO / "make_demo.py", "--folder", tmp_path, "--avoid", avoid]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode != 0
    assert district.lower() in done.stderr


def test_all_is_small_enough_to_ship():
    shipped = [DEMO / name for name in checksums(DEMO)]
    assert sum(path.stat().st_size for path in shipped) < 2_000_000


def test_districts_meet_without_gap_or_overlap(districts):
    assert len(districts) == 30
    assert districts["district"].is_unique
    assert districts["code"].is_unique
    assert districts["zone"].nunique() == 5
    assert districts.geometry.is_valid.all()
    shapes = districts.geometry.to_numpy()
    first, second = np.triu_indices(len(shapes), k=1)
    assert shapely.area(shapely.intersection(shapes[first], shapes[second])).max() == 0
    whole = shapely.union_all(shapes)
    # Two ways to one sum in double precision.
    assert whole.area == pytest.approx(shapely.area(shapes).sum(), rel=1e-12)
    assert all(not part.interiors for part in shapely.get_parts(whole))
    west, south, east, north = whole.bounds
    assert 160 < 110.6 * (east - west) < 200  # km
    assert 130 < 110.6 * (north - south) < 160


def test_the_lakes_lie_inside_the_province(districts):
    lakes = gpd.read_file(DEMO / "lakes.geojson")
    assert len(lakes) == 3
    assert lakes.within(shapely.union_all(districts.geometry.to_numpy())).all()


@pytest.mark.parametrize("name", ["elevation.tif", "wetness.tif", "travel_time.tif"])
def test_covariates_reach_beyond_the_coast(districts, name):
    shore = shapely.buffer(shapely.union_all(districts.geometry.to_numpy()), 0.04)
    with rasterio.open(DEMO / name) as raster:
        known = raster.read(1) != raster.nodata
        near = geometry_mask([shore], known.shape, raster.transform, all_touched=True, invert=True)
    assert known[near].all()
    assert not known.all()


def test_the_survey_has_180_schools_and_27_districts(sites, districts):
    assert sites["school_code"].nunique() == 180
    assert sites["school_name"].nunique() == 180
    faults = pd.read_csv(DEMO / "truth" / "faults.csv")
    good = sites.drop(index=faults["row"] - 2)
    examined = good["examined"].astype(int)
    assert examined.between(25, 60).all()
    assert (good["positive"].astype(int) <= examined).all()
    points = gpd.GeoDataFrame(
        good,
        geometry=gpd.points_from_xy(good["lon"].astype(float), good["lat"].astype(float)),
        crs="EPSG:4326",
    )
    placed = points.sjoin(districts[["district", "geometry"]], how="left", predicate="within")
    assert (placed["district_left"] == placed["district_right"]).all()
    assert set(sites["district"]) - {""} <= set(districts["district"])
    assert placed["district_right"].nunique() == 27


def test_faults_are_listed_in_the_readme_row_by_row(sites):
    faults = pd.read_csv(DEMO / "truth" / "faults.csv")
    assert faults["kind"].is_unique
    assert len(faults) >= 12
    readme = (DEMO / "README.md").read_text(encoding="utf-8")
    for fault in faults.itertuples():
        assert sites["school_name"][fault.row - 2] == fault.school_name
        cells = (fault.row, fault.school_name, fault.field, fault.kind, fault.what, fault.fate)
        assert "| " + " | ".join(map(str, cells)) + " |" in readme
    assert readme.count("\n| ") - readme.count("| `") == len(faults) + 2  # two header rows


def test_the_true_district_means_follow_from_surface_and_people(districts):
    lakes = gpd.read_file(DEMO / "lakes.geojson")
    land = districts.assign(geometry=districts.difference(lakes.union_all()))
    rows = exact_extract(
        str(DEMO / "truth" / "prevalence.tif"),
        land,
        ["weighted_mean"],
        weights=str(DEMO / "population.tif"),
        include_cols=["district"],
        output="pandas",
    ).set_index("district")["weighted_mean"]
    truth = pd.read_csv(DEMO / "truth" / "districts.csv").set_index("district")
    # The truth counts 25 points a pixel, which errs where a border crosses a village.
    np.testing.assert_allclose(truth["prevalence"], rows[truth.index], rtol=0.01)
    people = exact_extract(
        str(DEMO / "population.tif"), land, ["sum"], include_cols=["district"], output="pandas"
    ).set_index("district")["sum"]
    np.testing.assert_allclose(truth["children"], people[truth.index], rtol=0.01)
    assert ((truth["prevalence"] > 0.10) == truth["above_threshold"]).all()


def test_the_threshold_splits_the_province(sites):
    truth = pd.read_csv(DEMO / "truth" / "districts.csv")["prevalence"]
    assert (truth > 0.15).sum() >= 5
    assert (truth < 0.075).sum() >= 5
    assert truth.between(0.085, 0.115).sum() >= 3


def test_positives_agree_with_the_truth_within_sampling_error(sites):
    faults = pd.read_csv(DEMO / "truth" / "faults.csv")
    good = sites.drop(index=faults["row"] - 2)
    with rasterio.open(DEMO / "truth" / "prevalence.tif") as raster:
        at = raster.sample(zip(good["lon"].astype(float), good["lat"].astype(float), strict=True))
        prevalence = np.array([value[0] for value in at], dtype=float)
    examined, positive = good["examined"].astype(int), good["positive"].astype(int)
    nugget_sd = json.loads((DEMO / "truth" / "parameters.json").read_text(encoding="utf-8"))["nugget_sd"]
    spread = prevalence * (1 - prevalence)
    variance = examined * spread + examined * (examined - 1) * (nugget_sd * spread) ** 2
    assert abs((positive - examined * prevalence).sum()) < 3 * np.sqrt(variance.sum())
    chi_square = ((positive - examined * prevalence) ** 2 / variance).sum()
    assert abs(chi_square / len(good) - 1) < 4 * np.sqrt(2 / len(good))


def test_the_study_reads_no_truth():
    assert "truth/" not in (DEMO / "study.toml").read_text(encoding="utf-8")


def test_the_checks_find_every_fault_and_nothing_else():
    faults = pd.read_csv(DEMO / "truth" / "faults.csv").set_index("row")
    columns = {"examined": "examined", "positive": "positive", "lon": "lon", "lat": "lat", "unit": "district"}
    survey = prevmap.read_survey(DEMO / "sites.csv", site="school_name", **columns)
    region = prevmap.read_region(DEMO / "districts.geojson", name="district", exclude=DEMO / "lakes.geojson")
    kept, outside = site_findings(survey.frame, region, margin_km=45)
    _, units = assign_units(survey, region)
    found = pd.concat([survey.findings, findings_frame([*outside, *units])])
    by_row = found.groupby("row")
    pooled = {
        row - 1 for row in faults.index[faults["kind"].isin(["identical row", "several rows of one site"])]
    }
    assert set(by_row.groups) <= set(faults.index) | pooled
    for row, fault in faults.iterrows():
        first = row - 1 if fault["kind"] == "several rows of one site" else row
        assert first in by_row.groups, fault["kind"]
    rejected = set(faults.index[faults["fate"] == "rejected"])
    used = set(survey.frame.index[kept])
    assert used == set(range(2, survey.rows_read + 2)) - rejected - set(
        faults.index[faults["fate"] == "unit only"]
    )
    assert list(survey.unplaced.index) == list(faults.index[faults["fate"] == "unit only"])
    errors = {
        "swapped": "lon and lat exchanged",
        "zero position": r"\(0, 0\)",
        "more positive than examined": "greater than examined",
        "not a number": "'forty'",
        "examined missing": "missing where positive is 0",
        "nobody examined": "nobody was examined",
        "negative": "-3",
        "impossible position": "95.5",
        "identical row": "identical to row",
    }
    for kind, words in errors.items():
        row = faults.index[faults["kind"] == kind][0]
        assert by_row.get_group(row)["what"].str.contains(words).any(), kind
