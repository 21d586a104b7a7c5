import json

import geopandas as gpd
import openpyxl
import pandas as pd
import pytest
import shapely
from hypothesis import given, settings
from hypothesis import strategies as st

import prevmap

ROLES = {"examined": "examined", "positive": "positive", "lon": "lon", "lat": "lat", "site": "village"}
COUNTS = {"examined": "examined", "positive": "positive"}

TABLE = """village,examined,positive,lon,lat,terrain,altitude_m,code
Mill,40,3,36.10,-1.20,valley,1200,007
Ford,35,0,36.20,-1.25,valley,1310.5,012
Well,50,7,36.15,-1.30,ridge,,040
"""


def write(folder, text, name="sites.csv", encoding="utf-8"):
    path = folder / name
    path.write_bytes(text.encode(encoding))
    return path


def frame():
    return gpd.GeoDataFrame(
        {"village": ["Mill", "Ford", "Well"], "examined": [40, 35, 50], "positive": [3, 0, 7]},
        geometry=gpd.points_from_xy([36.10, 36.20, 36.15], [-1.20, -1.25, -1.30]),
        crs="EPSG:4326",
    )


def check(survey, rows):
    assert survey.frame["site"].tolist() == ["Mill", "Ford", "Well"]
    assert survey.frame["examined"].tolist() == [40, 35, 50]
    assert survey.frame["positive"].tolist() == [3, 0, 7]
    assert survey.frame.geometry.x.tolist() == [36.10, 36.20, 36.15]
    assert survey.frame.geometry.y.tolist() == [-1.20, -1.25, -1.30]
    assert survey.frame.index.tolist() == rows
    assert not (survey.findings["severity"] != "note").any(), survey.findings.to_string()


# --- text


def test_a_csv_is_read_with_lines_as_rows_and_columns_of_one_type(tmp_path):
    survey = prevmap.read_survey(write(tmp_path, TABLE), **ROLES)
    check(survey, [2, 3, 4])
    assert survey.source == "sites.csv"
    assert "from sites.csv" in repr(survey)
    assert survey.frame["altitude_m"].tolist()[:2] == [1200.0, 1310.5]
    assert survey.frame["altitude_m"].isna().tolist() == [False, False, True]
    assert survey.frame["code"].tolist() == ["007", "012", "040"]
    assert survey.frame["lon"].tolist() == [36.10, 36.20, 36.15]


@pytest.mark.parametrize("separator", [";", "\t", "|"])
def test_the_separator_is_recognised(tmp_path, separator):
    check(prevmap.read_survey(write(tmp_path, TABLE.replace(",", separator)), **ROLES), [2, 3, 4])


def test_a_decimal_comma_is_recognised_and_noted(tmp_path):
    text = TABLE.replace(",", ";").replace(".", ",")
    survey = prevmap.read_survey(write(tmp_path, text), **ROLES)
    check(survey, [2, 3, 4])
    assert survey.frame["altitude_m"].tolist()[1] == 1310.5
    assert "6 coordinates are written with a decimal comma" in survey.findings["what"].tolist()
    check(prevmap.read_survey(write(tmp_path, text), **ROLES, decimal=","), [2, 3, 4])
    with pytest.raises(prevmap.InputError, match="declare decimal=','"):
        prevmap.read_survey(write(tmp_path, text), **ROLES, decimal=".")
    with pytest.raises(prevmap.InputError, match="decimal=';'"):
        prevmap.read_survey(write(tmp_path, text), **ROLES, decimal=";")


@pytest.mark.parametrize("ending", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig"])
def test_line_ends_and_byte_order_marks_do_not_matter(tmp_path, ending, encoding):
    path = write(tmp_path, TABLE.replace("\n", ending), encoding=encoding)
    check(prevmap.read_survey(path, **ROLES), [2, 3, 4])
    check(prevmap.read_survey(path, **ROLES, encoding="UTF-8"), [2, 3, 4])


def test_tsv_and_txt_are_text(tmp_path):
    check(prevmap.read_survey(write(tmp_path, TABLE.replace(",", "\t"), "sites.tsv"), **ROLES), [2, 3, 4])
    check(prevmap.read_survey(write(tmp_path, TABLE, "sites.TXT"), **ROLES), [2, 3, 4])


def test_rows_are_physical_lines_below_comments_blank_lines_titles_and_quoted_line_breaks(tmp_path):
    text = (
        '# collected by team 3, checked "twice"\n'
        "\n"
        "Survey of the upper valley,,,,,,,\n"
        + TABLE.replace("Mill,", '"Mill\nnorth",').replace("Well", "\n\nWell")
        + ",,,,,,,\n"
    )
    survey = prevmap.read_survey(write(tmp_path, text), **ROLES)
    assert survey.frame.index.tolist() == [5, 7, 10]
    assert survey.frame["site"].tolist() == ["Mill north", "Ford", "Well"]
    assert survey.rows_read == 3
    title = survey.findings.iloc[0]
    assert (title["row"], title["severity"]) == (3, "note")
    assert "Survey of the upper valley" in title["what"]
    assert "line 4" in title["action"]


def test_a_separator_declared_on_the_first_line_is_believed(tmp_path):
    survey = prevmap.read_survey(write(tmp_path, "sep=;\n" + TABLE.replace(",", ";")), **ROLES)
    check(survey, [3, 4, 5])


def test_a_byte_order_mark_before_a_quotation_mark_is_no_text(tmp_path):
    text = TABLE.replace("village", '"village"', 1)
    check(prevmap.read_survey(write(tmp_path, text, encoding="utf-8-sig"), **ROLES), [2, 3, 4])


def test_a_header_that_starts_with_a_hash_is_a_header(tmp_path):
    text = TABLE.replace("village", "#village")
    check(prevmap.read_survey(write(tmp_path, text), **{**ROLES, "site": "#village"}), [2, 3, 4])


def test_blanks_around_names_and_cells_do_not_matter(tmp_path):
    text = TABLE.replace(",", " , ").replace("Mill", "\ufeff Mill\u00a0")
    check(prevmap.read_survey(write(tmp_path, text), **{**ROLES, "examined": " examined"}), [2, 3, 4])


def test_a_row_with_a_cell_too_many_is_an_error_and_a_short_one_lacks_its_last_cells(tmp_path):
    text = TABLE + "Hill,60,1,5,36.1,-1.2,valley,1200,041\nGate,30,2,36.12,-1.21\n"
    survey = prevmap.read_survey(write(tmp_path, text), **ROLES)
    assert survey.frame.index.tolist() == [2, 3, 4, 6]
    error = survey.findings[survey.findings["severity"] == "error"].iloc[0]
    assert error["row"] == 5
    assert "has 9 cells, the header has 8: '041' is left over" in error["what"]
    assert survey.rows_read == 5


def test_columns_without_a_name_are_named_or_left_if_empty(tmp_path):
    text = TABLE.replace("code", "").replace("\n", ",\n")
    survey = prevmap.read_survey(write(tmp_path, text), **ROLES)
    assert survey.frame["unnamed column 8"].tolist() == ["007", "012", "040"]
    assert "unnamed column 9" not in survey.frame


def test_text_in_another_encoding_needs_it_declared(tmp_path):
    text = TABLE.replace("Ford", "Fördé")
    path = write(tmp_path, text, encoding="cp1252")
    with pytest.raises(
        prevmap.InputError, match=r"sites.csv: the text is not in UTF-8 \(byte 0xf6 on line 3\)"
    ):
        prevmap.read_survey(path, **ROLES)
    survey = prevmap.read_survey(path, **ROLES, encoding="cp1252")
    assert survey.frame["site"].tolist() == ["Mill", "Fördé", "Well"]
    with pytest.raises(prevmap.InputError, match="'cp99' is not a known encoding"):
        prevmap.read_survey(path, **ROLES, encoding="cp99")
    with pytest.raises(prevmap.InputError, match="not in the declared encoding 'ascii'"):
        prevmap.read_survey(path, **ROLES, encoding="ascii")
    wide = write(tmp_path, text, encoding="utf-16")
    with pytest.raises(prevmap.InputError, match="encoding='utf-16'"):
        prevmap.read_survey(wide, **ROLES)
    assert prevmap.read_survey(wide, **ROLES, encoding="utf-16").n_sites == 3
    with pytest.raises(prevmap.InputError, match="zero bytes"):
        prevmap.read_survey(wide, **ROLES, encoding="latin-1")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "the file is empty"),
        ("\n\n", "holds no rows"),
        ("village,examined,positive,lon,lat\n", r"a header \(line 1\) and no rows below it"),
        (TABLE.replace("code", "lon"), "found more than once: 'lon'"),
        (TABLE.replace("village", "vilage"), "no column 'village' .*site=.* Did you mean 'vilage'"),
        (TABLE.replace("village", "Village"), "Did you mean 'Village'"),
        (TABLE.replace("Ford", '"Ford'), "the row that starts on line 3 cannot be read: a quotation mark"),
        (TABLE.replace("40", "x").replace("35", "").replace("50", "5.5"), "none of the 3 rows can be used"),
    ],
)
def test_files_that_are_no_such_table_are_refused_by_name(tmp_path, text, message):
    path = write(tmp_path, text)
    with pytest.raises(prevmap.InputError, match=message) as caught:
        prevmap.read_survey(path, **ROLES)
    assert str(path) in str(caught.value)


def test_a_missing_column_names_the_nearest_and_all_others(tmp_path):
    with pytest.raises(prevmap.InputError) as caught:
        prevmap.read_survey(write(tmp_path, TABLE), **{**ROLES, "examined": "examind"})
    message = str(caught.value)
    assert "sites.csv: there is no column 'examind' (given as examined=)." in message
    assert "Did you mean 'examined'?" in message
    assert "'altitude_m'" in message


def test_missing_files_folders_and_other_kinds_are_refused(tmp_path):
    with pytest.raises(prevmap.InputError, match=r"absent.csv: there is no such file"):
        prevmap.read_survey(tmp_path / "absent.csv", **ROLES)
    (tmp_path / "folder.csv").mkdir()
    with pytest.raises(prevmap.InputError, match="this is a folder"):
        prevmap.read_survey(tmp_path / "folder.csv", **ROLES)
    with pytest.raises(prevmap.InputError, match=r"'.xls' are not read. Save it as .xlsx or CSV"):
        prevmap.read_survey(write(tmp_path, TABLE, "sites.xls"), **ROLES)
    for name in ("sites.xlsx", "sites.gpkg", "sites.geojson", "sites.shp", "sites.parquet"):
        with pytest.raises(prevmap.InputError, match=name):
            prevmap.read_survey(write(tmp_path, TABLE, name), **ROLES)


def test_a_file_that_may_not_be_read_is_refused(tmp_path, monkeypatch):
    path = write(tmp_path, TABLE)

    def refuse(self):
        raise PermissionError(13, "Permission denied", str(self))

    monkeypatch.setattr(type(path), "read_bytes", refuse)
    with pytest.raises(prevmap.InputError, match=r"sites.csv: cannot be read .*Permission denied"):
        prevmap.read_survey(path, **ROLES)


# --- workbooks


def workbook(folder, sheets, name="sites.xlsx"):
    book = openpyxl.Workbook()
    book.remove(book.active)
    for title, rows in sheets.items():
        page = book.create_sheet(title)
        for row in rows:
            page.append(row)
    path = folder / name
    book.save(path)
    return path


ROWS = [
    ["village", "examined", "positive", "lon", "lat", 2026],
    ["Mill", 40, 3, 36.10, -1.20, None],
    ["Ford", 35.0, "0", "36.20", -1.25, "12"],
    ["Well", 50, 7, 36.15, -1.30, 4],
]


def test_a_workbook_is_read_with_its_own_row_numbers(tmp_path):
    path = workbook(tmp_path, {"data": [["Upper valley"], [], ROWS[0], *ROWS[1:3], [], ROWS[3]]})
    survey = prevmap.read_survey(path, **ROLES)
    check(survey, [4, 5, 7])
    assert survey.frame["2026"].tolist()[1:] == [12.0, 4.0]
    assert "Upper valley" in survey.findings["what"].iloc[0]


def test_the_sheet_that_has_the_columns_is_read_and_two_such_need_a_name(tmp_path):
    path = workbook(tmp_path, {"remarks": [["checked by team 3"]], "data": ROWS})
    survey = prevmap.read_survey(path, **ROLES)
    check(survey, [2, 3, 4])
    assert "read sheet 'data'" in survey.findings["action"].iloc[0]
    path = workbook(tmp_path, {"north": ROWS, "south": ROWS[:3]})
    with pytest.raises(
        prevmap.InputError, match=r"2 sheets hold the columns .*'north', 'south'. Name one as sheet="
    ):
        prevmap.read_survey(path, **ROLES)
    assert len(prevmap.read_survey(path, **ROLES, sheet="south").frame) == 2
    with pytest.raises(prevmap.InputError, match="no sheet 'east'; the sheets are 'north', 'south'"):
        prevmap.read_survey(path, **ROLES, sheet="east")
    with pytest.raises(prevmap.InputError, match="holds no rows"):
        prevmap.read_survey(workbook(tmp_path, {"empty": []}), **ROLES)


def test_counts_that_a_spreadsheet_turned_into_dates_are_errors(tmp_path):
    rows = [*ROWS, ["Hill", pd.Timestamp("2026-03-05").to_pydatetime(), 3, 36.11, -1.21, None]]
    survey = prevmap.read_survey(workbook(tmp_path, {"data": rows}), **ROLES)
    error = survey.findings[survey.findings["severity"] == "error"].iloc[0]
    assert (error["row"], error["field"]) == (5, "examined")
    assert "date or time" in error["what"]


# --- layers


@pytest.mark.parametrize("name", ["sites.geojson", "sites.gpkg", "sites.shp", "sites.parquet"])
def test_layers_bring_their_positions_and_count_features_from_one(tmp_path, name):
    path = tmp_path / name
    if name.endswith("parquet"):
        frame().to_parquet(path)
    else:
        frame().to_file(path)
    check(prevmap.read_survey(path, **COUNTS, site="village"), [1, 2, 3])


def test_columns_named_beside_a_geometry_are_used_and_said(tmp_path):
    path = tmp_path / "sites.geojson"
    frame().assign(east=[36.5, 36.6, 36.7], north=[-1.0, -1.1, -1.2]).to_file(path)
    survey = prevmap.read_survey(path, **COUNTS, lon="east", lat="north")
    assert survey.frame.geometry.x.tolist() == [36.5, 36.6, 36.7]
    assert "geometry of the layer is not used" in survey.findings["action"].iloc[0]


def test_a_feature_without_geometry_is_unplaced(tmp_path):
    features = json.loads(frame().assign(unit="north").to_json())
    features["features"][1]["geometry"] = None
    path = write(tmp_path, json.dumps(features), "sites.geojson")
    survey = prevmap.read_survey(path, **COUNTS, site="village", unit="unit")
    assert survey.unplaced.index.tolist() == [2]
    assert survey.frame["unit"].tolist() == ["north", "north"]


def test_a_shapefile_without_its_coordinate_system_needs_one(tmp_path):
    frame().to_file(tmp_path / "sites.shp")
    (tmp_path / "sites.prj").unlink()
    with pytest.raises(prevmap.InputError, match=r"sites.shp: the geometry names no coordinate system.*crs="):
        prevmap.read_survey(tmp_path / "sites.shp", **COUNTS)
    assert prevmap.read_survey(tmp_path / "sites.shp", **COUNTS, crs="EPSG:4326").n_sites == 3


def test_a_geopackage_with_several_layers_is_read_by_its_columns_or_by_name(tmp_path):
    path = tmp_path / "all.gpkg"
    frame()[["village", "geometry"]].to_file(path, layer="villages")
    frame().to_file(path, layer="round 1")
    assert prevmap.read_survey(path, **COUNTS).n_sites == 3
    frame().iloc[:2].to_file(path, layer="round 2")
    with pytest.raises(prevmap.InputError, match="2 layers hold the columns"):
        prevmap.read_survey(path, **COUNTS)
    assert prevmap.read_survey(path, **COUNTS, sheet="round 2").n_sites == 2
    with pytest.raises(prevmap.InputError, match="no layer 'round 3'"):
        prevmap.read_survey(path, **COUNTS, sheet="round 3")


def test_a_parquet_table_without_geometry_is_a_plain_table(tmp_path):
    path = tmp_path / "sites.parquet"
    pd.DataFrame(frame().drop(columns="geometry")).assign(
        lon=[36.10, 36.20, 36.15], lat=[-1.20, -1.25, -1.30]
    ).to_parquet(path)
    check(prevmap.read_survey(path, **ROLES), [1, 2, 3])
    with pytest.raises(prevmap.InputError, match="name the columns of coordinates"):
        prevmap.read_survey(path, **COUNTS)


def test_units_surveyed_as_areas_are_one_site_each(tmp_path):
    path = tmp_path / "counties.gpkg"
    frame().set_geometry([shapely.box(36 + k, -2, 37 + k, -1) for k in range(3)], crs="EPSG:4326").to_file(
        path
    )
    survey = prevmap.read_survey(path, **COUNTS, site="village", unit="village")
    assert survey.frame["unit"].tolist() == survey.frame["site"].tolist() == ["Mill", "Ford", "Well"]
    assert survey.frame.geometry.geom_type.unique().tolist() == ["Point"]


# --- properties

NAMES = st.text(
    st.characters(blacklist_categories=("Cs", "Cc", "Cf", "Zl", "Zp", "Zs")), min_size=2, max_size=8
).filter(
    lambda name: name.casefold() not in ("total", "sum", "somme", "suma", "overall", "totals", "totale", "--")
)


@settings(max_examples=40, deadline=None)
@given(
    st.lists(
        st.tuples(NAMES, st.integers(1, 90), st.integers(0, 90), st.integers(0, 3)), min_size=1, max_size=8
    ),
    st.sampled_from(",;\t|"),
    st.sampled_from(["\n", "\r\n"]),
)
def test_what_is_written_is_read_on_its_line(tmp_path_factory, rows, separator, ending):
    lines = ["# written by a test", "", separator.join(["site", "examined", "positive", "x", "y"])]
    expected = []
    for k, (name, examined, positive, breaks) in enumerate(rows):
        quoted = '"' + name.replace('"', '""') + "\n" * breaks + "z" + '"'
        if positive <= examined:
            expected.append((1 + sum(line.count("\n") + 1 for line in lines), examined, positive))
        lines.append(separator.join([quoted, str(examined), str(positive), f"{500000 + k}.5", "9800000"]))
    path = tmp_path_factory.mktemp("written") / "sites.csv"
    path.write_bytes(ending.join(lines).encode())
    arguments = {"examined": "examined", "positive": "positive", "x": "x", "y": "y", "crs": "EPSG:32737"}
    if not expected:
        with pytest.raises(prevmap.InputError, match="none of the"):
            prevmap.read_survey(path, **arguments, site="site")
        return
    survey = prevmap.read_survey(path, **arguments, site="site")
    read = zip(survey.frame.index, survey.frame["examined"], survey.frame["positive"], strict=True)
    assert list(read) == expected
