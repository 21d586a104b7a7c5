"""The report: complete, self-contained, escaped, readable without colour, and the same every time."""

import doctest
import importlib
import re
from dataclasses import replace
from html.parser import HTMLParser
from types import SimpleNamespace

import geopandas as gpd
import numpy as np
import pandas as pd
import pytest
import shapely
from invented_results import NAMES, invented_results

import prevmap
from prevmap.plan.classify import classify_units
from prevmap.show.canvas import figure_bytes, new_figure
from prevmap.show.report import ReportContent, ReportFigure, render_report, report_figures
from prevmap.show.report.checklist import checklist
from prevmap.show.report.methods import cited_sources, methods_paragraphs
from prevmap.show.report.summary import summary_sentences
from prevmap.show.report.tables import finding_groups, rounded_positions, unit_table

RECORD = {
    "inputs": {"survey.file": {"file": "sites.csv", "sha256": "ab" * 32}},
    "environment": {"prevmap": "0.1.0", "python": "3.12.1", "packages": {"numpy": "2.0", "scipy": "1.14"}},
    "seed": 7,
    "command": "prevmap run study.toml",
}
VOID = {"meta", "img", "br", "link", "input", "hr"}


class Page(HTMLParser):
    """What the tests ask of a page: balanced tags, attributes, text outside style."""

    def __init__(self, page):
        super().__init__(convert_charrefs=True)
        self.open, self.tags, self.words, self.unbalanced = [], [], [], []
        self.feed(page)
        self.text = re.sub(r"\s+", " ", " ".join(self.words)).replace("\u00a0", " ")

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        if not self.open or self.open.pop() != tag:
            self.unbalanced.append(tag)

    def handle_data(self, data):
        if "style" not in self.open:
            self.words.append(data)

    def all(self, tag):
        return [attrs for name, attrs in self.tags if name == tag]


def dot():
    return ReportFigure(figure_bytes(new_figure(0.2, 0.1), dpi=50), "An empty picture.", "Nothing.")


def content_of(results, *, thresholds=(0.10,), units=True, figures=None, statements=None):
    decisions = classify_units(results.units, thresholds) if units and thresholds else None
    return ReportContent(
        "Survey of an invented place",
        results.survey,
        results.region,
        results.fit,
        results.surface,
        results.units if units else None,
        decisions,
        thresholds,
        figures if figures is not None else {"prevalence": dot(), "decisions": dot()},
        RECORD,
        statements or {},
    )


@pytest.fixture(scope="module")
def results():
    return invented_results(cell_m=4_000.0)


@pytest.fixture(scope="module")
def full(results):
    decisions = classify_units(results.units, [0.10])
    figures = report_figures(results.fit, results.surface, results.units, decisions, (0.10,))
    return render_report(content_of(results, figures=figures))


def test_the_page_is_self_contained(full):
    page = Page(full)
    assert not page.unbalanced
    assert not page.open
    assert not page.all("script")
    assert not page.all("link")
    assert len(page.all("img")) == 11
    assert all(img["src"].startswith("data:image/png;base64,") for img in page.all("img"))
    assert all(a["href"].startswith("#") for a in page.all("a"))
    assert "@import" not in full
    assert "url(" not in full


def test_the_page_can_be_read_aloud_and_navigated(full):
    page = Page(full)
    assert page.all("html")[0]["lang"] == "en"
    assert all(len(img["alt"]) > 10 for img in page.all("img"))
    assert all(int(img["width"]) > 0 and int(img["height"]) > 0 for img in page.all("img"))
    levels = [int(tag[1]) for tag, _ in page.tags if re.fullmatch(r"h[1-6]", tag)]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert max(np.diff(levels)) <= 1
    ids = [attrs["id"] for _, attrs in page.tags if "id" in attrs]
    assert len(ids) == len(set(ids))
    assert {a["href"][1:] for a in page.all("a")} <= set(ids)
    assert all("scope" in th for th in page.all("th"))


def test_every_section_is_there_in_order(full):
    page = Page(full)
    sections = [attrs["id"] for attrs in page.all("section")]
    assert sections == [
        "summary",
        "surveyed",
        "excluded",
        "model",
        "maps",
        "units",
        "methods",
        "cautions",
        "checklist",
        "again",
    ]


def test_the_cautions_are_printed(full):
    text = Page(full).text
    for words in (
        "Maps support and do not replace programme guidelines and qualified public-health staff",
        "no opinion on their legal status",
        "A cell is not a village",
        "The decision belongs to the programme, which also applies exclusions from outside",
        "safety and co-endemic disease",
        "ignore that they were examined in clusters",
        "The model ignores survey weights",
        "Leaving local variation out makes means at low prevalence too low",
    ):
        assert words in text
    assert not re.search(r"\btreat", text, flags=re.IGNORECASE)


def test_the_summary_says_what_was_surveyed_and_decided(results):
    content = content_of(results)
    counts = content.decisions.counts
    text = " ".join(summary_sentences(content)).replace("\u00a0", " ")
    fit = results.fit
    assert f"examined {fit.n_examined:,} people at 60 sites; {fit.n_positive} were positive" in text
    assert "Of 62 rows read, 60 entered the model; 2 were not used" in text
    assert f"Of 12 units, {counts['above']} " in text
    assert f"{counts['undecided']} " in text
    assert "at a certainty of at least 90 %" in text
    assert f"about {content.decisions.expected_wrong:.1f} can be expected to be wrong" in text


def test_names_from_inputs_are_escaped(results):
    evil = '<script>alert("x")</script>'
    hostile = invented_results(names=[evil, *NAMES[1:]], cell_m=6_000.0)
    hostile.survey.about.indicator = "<img src=x onerror=alert(1)>"
    hostile.fit.coefficients.index = ["intercept", "<i>a</i>", "b"]
    page = render_report(content_of(hostile, statements={"purpose": "</style><script>"}))
    parsed = Page(page)
    assert evil not in page
    assert not parsed.all("script")
    assert not parsed.unbalanced
    assert len(parsed.all("img")) == 2
    assert evil in parsed.text
    assert "<img src=x onerror=alert(1)>" in parsed.text


def test_findings_are_grouped_by_severity_and_cut_with_a_count(results):
    text = Page(render_report(content_of(results))).text
    assert text.index("Not used (2)") < text.index("Doubtful (1)") < text.index("Notes (1)")
    assert "positive 41 is larger than examined 40" in text
    assert "<b>largest distortion</b> 0.04 %" in text
    many = pd.concat([results.fit.findings.iloc[[0]]] * 230)
    (group,) = finding_groups(many)
    assert (group.total, group.more, len(group.table.rows)) == (230, 30, 200)
    none = SimpleNamespace(**{**vars(results.fit), "findings": results.fit.findings.iloc[:0]})
    clean = SimpleNamespace(**{**vars(results), "fit": none})
    assert "every row that was read was used" in Page(render_report(content_of(clean))).text


def test_exact_positions_are_not_passed_on():
    text = "(6.22941, -32.6371) is far from the others, around (-32.0421, 5.92444); (0, 0) stands for none"
    assert rounded_positions(text) == (
        "(6.2, -32.6) is far from the others, around (-32.0, 5.9); (0, 0) stands for none"
    )


def test_the_unit_table_holds_every_unit_with_undecided_ones_first(results):
    content = content_of(results)
    table = unit_table(content)
    frame = results.units.frame.set_index("unit")
    decisions = content.decisions.frame.set_index("unit")
    column = {name: i for i, name in enumerate(table.heads)}
    assert [row[0] for row in table.rows] != list(frame.index)
    assert sorted(row[0] for row in table.rows) == sorted(frame.index)
    outcome = [row[column["decision"]] for row in table.rows]
    undecided = outcome.count("undecided")
    assert undecided > 0
    assert outcome[:undecided] == ["undecided"] * undecided
    means = [frame.loc[row[0], "mean"] for row in table.rows]
    assert means[:undecided] == sorted(means[:undecided], reverse=True)
    assert means[undecided:] == sorted(means[undecided:], reverse=True)
    exceedance = results.units.exceedance(0.10)
    for row in table.rows:
        unit = frame.loc[row[0]]
        assert row[column["examined"]] == f"{unit['examined']:,.0f}"
        assert row[column["decision"]] == decisions.loc[row[0], "decision"]
        assert row[column["basis"]] == unit["basis"]
        p = row[column["P(above 10\u00a0%)"]].replace("\u00a0%", "")
        assert p in (f"{100 * exceedance[row[0]]:.1f}", "<\u00a00.1", ">\u00a099.9")
        if unit["mean"] >= 0.01:
            assert row[column["modelled mean (95\u00a0%)"]].startswith(f"{100 * unit['mean']:.1f}\u00a0% (")
    assert table.marks == tuple(outcome)
    assert table.heads[:3] == ("unit", "decision", "P(above 10\u00a0%)")
    unsurveyed = next(row for row in table.rows if row[column["sites"]] == "0")
    assert unsurveyed[column["raw (95\u00a0%)"]] == "–"


def test_coefficients_are_printed_as_odds_ratios_too(results):
    text = Page(render_report(content_of(results))).text
    assert "1.52 (1.21 to 1.92)" in text  # exp of 0.42, 0.19, 0.65
    assert "prevalence 13.0 % (7.6 % to 21.4 %)" in text  # expit of -1.9, -2.5, -1.3
    assert "distance at which correlation is about 0.14" in text
    assert "P(range < 20 km) = 0.05" in text
    assert "The mesh edge is above a fifth of the range's lower limit." in text
    assert "−182.442" in text


def test_unfilled_items_of_the_checklist_say_so(results):
    items = checklist(content_of(results))
    assert [item.number for item in items] == list(range(1, 19))
    assert {item.number for item in items if not item.stated} == {2, 3, 6, 8, 11, 12, 17}
    said = checklist(
        content_of(results, statements={"funding": "An invented fund", "data_sources": "A survey"})
    )
    assert said[1].answer == "An invented fund"
    stops = checklist(content_of(results, statements={"data_sources": "A survey.", "purpose": "To plan."}))
    assert not [item.answer for item in [*items, *said, *stops] if ".." in item.answer]
    assert stops[6].answer.endswith("Their origin: A survey.")
    assert {item.number for item in said if not item.stated} == {6, 8, 11, 12, 17}
    text = Page(render_report(content_of(results))).text
    assert text.count("not stated") >= 7


def test_methods_follow_what_was_done(results):
    content = content_of(results)
    text = " ".join(methods_paragraphs(content))
    for source in (
        "Diggle, Tawn & Moyeed 1998",
        "Lindgren, Rue & Lindström 2011",
        "Rue, Martino & Chopin 2009",
    ):
        assert source in text
    for source in ("Fuglstad et al. 2019", "Tierney & Kadane 1986", "Wilson 1927"):
        assert source in text
    assert len(cited_sources(methods_paragraphs(content))) == 8
    assert "the nugget" in text
    table = results.fit.hyperparameters.copy()
    table.loc["nugget_sd"] = 0.0
    exact = SimpleNamespace(
        **{
            **vars(results.fit),
            "engine": "exact",
            "hyperparameters": table,
            "diagnostics": {"components": 1},
            "prior_text": (
                ("range_km", "range fixed at 30 km"),
                ("sd", "P(sd of the field > 2) = 0.05"),
                ("nugget_sd", "no nugget"),
            ),
        }
    )
    other = SimpleNamespace(**{**vars(results), "fit": exact})
    text = " ".join(methods_paragraphs(content_of(other, units=False)))
    assert "without a mesh" in text
    assert "the nugget" not in text
    assert "held at single values" in text
    assert "The standard deviation of the surface has a penalised-complexity prior" in text
    assert "the range of the surface (range fixed at 30 km) was given a value, not estimated" in text
    every = (("range_km", "range fixed at 30 km"), ("sd", "sd of the field fixed at 1 on the logit scale"))
    fixed = SimpleNamespace(**{**vars(exact), "prior_text": every})
    paragraphs = methods_paragraphs(content_of(SimpleNamespace(**{**vars(results), "fit": fixed})))
    assert "penalised" not in " ".join(paragraphs)
    assert not any("Fuglstad" in reference for reference, _ in cited_sources(paragraphs))
    assert "Wilson" not in text


def test_without_a_region_thresholds_apply_to_the_surface(results):
    content = content_of(results, units=False)
    page = Page(render_report(content))
    assert "units" not in [attrs["id"] for attrs in page.all("section")]
    p = results.surface.exceedance(0.10)[~results.surface.blank]
    high, low = int((p >= 0.9).sum()), int((p <= 0.1).sum())
    assert f"Of {len(p)} mapped cells, {high} are above 10 % and {low} are below" in page.text
    assert "unit_prevalence" not in report_figures(results.fit, results.surface, thresholds=(0.10,))


def test_without_a_threshold_nothing_is_called_above_or_below(results):
    content = content_of(results, thresholds=())
    page = Page(render_report(content))
    assert "No threshold was set" in page.text
    assert "decision" not in unit_table(content).heads
    figures = report_figures(results.fit, results.surface, results.units)
    assert not [name for name in figures if "exceedance" in name or name == "decisions"]


def test_several_thresholds_give_a_map_and_a_column_each(results):
    decisions = classify_units(results.units, [0.05, 0.20], 0.7)
    figures = report_figures(results.fit, results.surface, results.units, decisions, (0.05, 0.20))
    assert {"exceedance_1", "exceedance_2", "unit_exceedance_1", "unit_exceedance_2"} <= set(figures)
    content = content_of(results, thresholds=(0.05, 0.20))
    assert {"P(above 5\u00a0%)", "P(above 20\u00a0%)"} <= set(unit_table(content).heads)
    assert "≥ 5 % and < 20 %" in Page(render_report(content)).text


def test_an_undecided_class_tells_the_threshold_that_is_decided(results):
    decisions = classify_units(results.units, [0.05, 0.10, 0.20])
    frame = decisions.frame.copy()
    probable = frame["reason"].str.contains("short of") & (frame["decision"] == "undecided")
    assert probable.any()
    frame["decision"], frame["reason"] = "undecided", frame.loc[probable, "reason"].iloc[0]
    classes = [f"p_class_{k}" for k in range(4)]
    cases = {
        (0.0, 0.0005, 0.45, 0.5495): "at least 10\u00a0%, class undecided",
        (0.45, 0.50, 0.05, 0.0): "below 10\u00a0%, class undecided",
        (0.02, 0.48, 0.48, 0.02): "at least 5\u00a0% and below 20\u00a0%, class undecided",
        (0.09, 0.41, 0.42, 0.08): "below 20\u00a0%, class undecided",  # each sure, not both at once
        (0.3, 0.2, 0.2, 0.3): "undecided",
    }
    for i, p in enumerate(cases):
        frame.loc[i, classes] = p
    content = replace(
        content_of(results, thresholds=(0.05, 0.10, 0.20)), decisions=replace(decisions, frame=frame)
    )
    table = unit_table(content)
    said = {row[0]: row[table.heads.index("decision")] for row in table.rows}
    assert [said[frame["unit"][i]] for i in range(len(cases))] == list(cases.values())
    assert set(table.marks) == {"undecided"}
    # A unit without sites of its own is not decided, so nothing is said of its thresholds either.
    frame.loc[0, "reason"] = next(r for r in decisions.frame["reason"] if "no surveyed site" in r)
    table = unit_table(content)
    assert next(row[1] for row in table.rows if row[0] == frame["unit"][0]) == "undecided"


def test_units_that_stand_on_less_are_named_under_the_table(results):
    frame = results.units.frame.copy()
    frame.loc[0, "basis"] = "neighbours"
    frame.loc[1, ["mean", "lower95", "upper95"]] = np.nan
    frame.loc[2, "weighting"] = "area"
    frame.loc[4, "share_without_prediction"] = 0.125
    units = SimpleNamespace(**{**vars(results.units), "frame": frame})
    content = content_of(SimpleNamespace(**{**vars(results), "units": units}))
    page = Page(render_report(content)).text
    assert "1 of 12 units with sites but none with a position; the estimate comes from elsewhere." in page
    assert f"1 unit has no prediction, since covariates are missing: {NAMES[1]}." in page
    assert f"Weighted by area, since the population file counts nobody there: {NAMES[2]}." in page
    assert f"{NAMES[4]} (12.5 %)." in page
    table = unit_table(content)
    basis = {row[0]: row[table.heads.index("basis")] for row in table.rows}
    assert basis[NAMES[0]] == "neighbours; no site with a position"
    assert basis[NAMES[1]] == "no prediction: covariates missing"


def test_the_units_chart_does_not_promise_narrower_intervals(full):
    text = Page(full).text
    assert "Raw intervals ignore clustering between sites, so they are too narrow" in text
    assert "of the whole population of the unit" in text
    assert "narrower" not in text


def test_findings_carry_their_headings_for_narrow_screens(full):
    cells = [attrs for attrs in Page(full).all("td") if "data-head" in attrs]
    assert {attrs["data-head"] for attrs in cells} == {"site", "field", "what was found", "what was done"}


def test_the_report_can_be_made_again_byte_for_byte(results, full):
    decisions = classify_units(results.units, [0.10])
    figures = report_figures(results.fit, results.surface, results.units, decisions, (0.10,))
    assert render_report(content_of(results, figures=figures)) == full
    text = Page(full).text
    assert "prevmap run study.toml" in text
    assert "ab" * 32 in text
    assert "numpy 2.0, scipy 1.14" in text
    assert "4.2" not in re.findall(r"seconds.{0,20}", text)


@pytest.mark.parametrize(
    "module", ["plan.classify", "show.palette", "show.scale_bar", "show.wording", "show.report.tables"]
)
def test_the_examples_in_docstrings_hold(module):
    outcome = doctest.testmod(importlib.import_module(f"prevmap.{module}"))
    assert outcome.attempted > 0
    assert outcome.failed == 0


@pytest.fixture(scope="module")
def real(tmp_path_factory):
    """A small survey carried through the real chain, hyperparameters held fixed to keep it quick."""
    folder = tmp_path_factory.mktemp("real")
    generator = np.random.default_rng(5)
    units = gpd.GeoDataFrame(
        {"name": ["Karvel", "Sembro", "Illoth", "Tesk"]},
        geometry=[shapely.box(x, y, x + 30_000, y + 30_000) for x in (0, 30_000) for y in (0, 30_000)],
        crs="EPSG:32631",
    ).translate(400_000, 600_000)
    frame = gpd.GeoDataFrame(
        {"name": ["Karvel", "Sembro", "Illoth", "Tesk"]}, geometry=units, crs="EPSG:32631"
    )
    frame.to_file(folder / "units.gpkg", driver="GPKG")
    region = prevmap.read_region(folder / "units.gpkg", name="name")
    x, y = 400_000 + generator.uniform(1_000, 59_000, 40), 600_000 + generator.uniform(1_000, 29_000, 40)
    examined = generator.integers(25, 60, 40)
    positive = generator.binomial(examined, 1 / (1 + np.exp(3.2 - (x - 400_000) / 18_000)))
    table = pd.DataFrame({"x": x, "y": y, "examined": examined, "positive": positive})
    survey = prevmap.Survey.from_frame(
        table,
        examined="examined",
        positive="positive",
        x="x",
        y="y",
        crs="EPSG:32631",
        about=prevmap.SurveyNotes(indicator="any infection", ages=(5, 14)),
    )
    priors = prevmap.Priors(range_km=40.0, sd=0.8, nugget_sd=0.3)
    model = prevmap.PrevalenceModel([], mesh=prevmap.MeshSpec(edge_km=8.0), priors=priors)
    fit = model.fit(survey, region=region)
    grid = region.grid(5)
    surface, estimates = fit.predict(grid), fit.units(grid, draws=1000)
    return SimpleNamespace(survey=survey, region=region, fit=fit, surface=surface, units=estimates)


def test_a_real_fit_becomes_a_report(real):
    content = content_of(real)
    figures = report_figures(real.fit, real.surface, real.units, content.decisions, (0.10,))
    page = Page(render_report(content_of(real, figures=figures)))
    assert not page.unbalanced
    assert len(page.all("img")) == len(figures) == 10  # no covariates, so no chart of odds ratios
    assert f"examined {real.fit.n_examined:,} people at 40 sites" in page.text
    assert "weighted by the area of each cell, since no population was given" in page.text
    assert "test: not stated" in page.text
    for name, row in real.units.frame.set_index("unit").iterrows():
        assert name in page.text
        assert f"{100 * row['mean']:.1f} % (" in page.text
    drawn = prevmap.map_surface(real.surface, "exceedance", 0.10).images[0].get_array().compressed()
    assert np.allclose(
        np.sort(drawn), np.sort(real.surface.exceedance(0.10)), rtol=0, atol=1e-12
    )  # the same numbers


def test_a_real_fit_without_a_region_becomes_a_report(real):
    model = prevmap.PrevalenceModel([], mesh=prevmap.MeshSpec(edge_km=8.0), priors=real.fit.model.priors)
    fit = model.fit(real.survey)
    surface = fit.predict(fit.region.grid(5))
    results = SimpleNamespace(survey=real.survey, region=fit.region, fit=fit, surface=surface, units=None)
    figures = report_figures(fit, surface, thresholds=(0.10,))
    page = Page(render_report(content_of(results, units=False, figures=figures)))
    assert list(figures) == ["sites", "sites_chart", "prevalence", "uncertainty", "exceedance"]
    assert "mapped cells" in page.text
    assert "no unit boundaries were given" in page.text
    assert "weighted by area" not in page.text
    assert "not given: no land is left blank" in page.text
