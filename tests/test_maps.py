"""Maps and charts draw what was estimated, in km, told apart without colour, the same every time."""

import subprocess
import sys
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st
from invented_results import NAMES, invented_results
from matplotlib.collections import LineCollection, PathCollection
from matplotlib.colors import to_rgb
from matplotlib.contour import ContourSet
from matplotlib.figure import Figure
from matplotlib.text import Text
from tolerances import ALGEBRA

import prevmap
from prevmap.plan.classify import classify_units
from prevmap.show.canvas import figure_bytes, save_figure
from prevmap.show.charts import chart_odds_ratios, chart_sites, chart_units
from prevmap.show.ground import cells_polygon, read_ground
from prevmap.show.labels import UnitText, label_units, short_signs
from prevmap.show.maps import map_panel, map_sites, map_surface, map_units, surface_notes
from prevmap.show.outline import in_km, polygon_path
from prevmap.show.palette import decision_styles, nice_ceiling, prevalence_norm
from prevmap.show.scale_bar import bar_length_km
from prevmap.show.sheet import SHEET_WIDTH, open_sheet
from prevmap.show.wording import wrapped


@pytest.fixture(scope="module")
def results():
    return invented_results()


@pytest.fixture(scope="module")
def decisions(results):
    return classify_units(results.units, [0.10])


def texts(ax):
    return " ".join(t.get_text().replace("\u00a0", " ") for t in ax.figure.findobj(Text))


def image_of(ax):
    (image,) = ax.images
    return image


def test_a_surface_map_shows_the_mean_and_leaves_blank_cells_out(results):
    surface = results.surface
    image = image_of(map_surface(surface))
    expected = surface.grid.to_raster(np.where(surface.blank, np.nan, surface.mean))
    drawn = image.get_array()
    assert (np.ma.getmaskarray(drawn) == np.isnan(expected)).all()
    assert np.allclose(drawn.compressed(), expected[~np.isnan(expected)], rtol=0, atol=ALGEBRA)
    left, top = surface.grid.origin_m
    assert image.get_extent() == pytest.approx([left / 1000, left / 1000 + 96, top / 1000 - 60, top / 1000])


def test_uncertainty_and_exceedance_maps_show_what_they_say(results):
    surface = results.surface
    shown = ~surface.blank
    width = image_of(map_surface(surface, "uncertainty")).get_array().compressed()
    assert np.allclose(
        np.sort(width), np.sort((surface.upper95 - surface.lower95)[shown]), rtol=0, atol=ALGEBRA
    )
    ax = map_surface(surface, "exceedance", 0.10, certainty=0.95)
    p = image_of(ax).get_array().compressed()
    assert np.allclose(np.sort(p), np.sort(surface.exceedance(0.10)[shown]), rtol=0, atol=ALGEBRA)
    (bar,) = ax.child_axes
    assert bar.get_yticks() == pytest.approx([0.0, 0.05, 0.5, 0.95, 1.0])
    assert bar.get_ylabel().replace("\u00a0", " ") == "P(prevalence > 10 %)"
    assert image_of(ax).norm.vmin == 0.0
    assert image_of(ax).norm.vmax == 1.0


def test_sites_lie_on_the_colour_scale_of_the_surface(results):
    ax = map_surface(results.surface, sites=True)
    markers = next(c for c in ax.collections if isinstance(c, PathCollection))
    assert (markers.norm.vmin, markers.norm.vmax) == (image_of(ax).norm.vmin, image_of(ax).norm.vmax)
    assert markers.get_cmap().name == image_of(ax).get_cmap().name
    assert np.allclose(
        np.sort(markers.get_array()), np.sort(results.fit.sites["proportion"]), rtol=0, atol=ALGEBRA
    )
    alone = map_sites(results.fit)
    panel = map_panel(results.surface, 0.10)
    norms = [c.norm.vmax for c in panel.axes[0].collections if isinstance(c, PathCollection)]
    assert norms[-1] == panel.axes[1].images[0].norm.vmax
    assert "60 sites, " in texts(alone)


def test_a_map_is_drawn_in_km_with_equal_scales_and_a_scale_bar(results):
    ax = map_surface(results.surface)
    west, south, east, north = (v / 1000.0 for v in results.region.boundary.bounds)
    assert ax.get_xlim()[0] < west < east < ax.get_xlim()[1]
    assert ax.get_ylim()[0] < south < north < ax.get_ylim()[1]
    assert ax.get_aspect() == 1.0
    assert len(ax.get_xticks()) == len(ax.get_yticks()) == 0
    assert "20 km" in texts(ax)


def test_the_subtitle_says_what_prevalence_means(results, decisions):
    words = texts(map_surface(results.surface)).replace("\n", " ")
    assert "Any infection, ages 5-14, test: single smear" in words
    assert "mean over the settlements at a place; predicted for sampling = community" in words
    assert "weighted by population" in texts(map_units(decisions, "decision")).replace("\n", " ")


def test_extrapolated_cells_are_hatched_and_counted(results):
    surface = results.surface
    ground = read_ground(surface.region, surface.sites)
    area = cells_polygon(surface.grid, surface.extrapolated, ground.boundary)
    cell_km2 = (surface.grid.cell_m / 1000.0) ** 2
    # No extrapolated cell of the invented region touches its lake or its border partially.
    assert area.area == pytest.approx(surface.extrapolated.sum() * cell_km2, rel=ALGEBRA)
    shown = surface.extrapolated & ~surface.blank
    words = texts(map_surface(surface)).replace("\n", " ")
    assert f"Hatched: {shown.sum()} of 1,373 cells extrapolated" in words
    assert "extrapolated" in [t.get_text() for t in map_surface(surface).get_legend().get_texts()]
    assert "Not mapped: 35 cells without people." in surface_notes(surface)
    plain = SimpleNamespace(**{**vars(surface), "extrapolated": np.zeros(len(surface.mean), dtype=bool)})
    assert "1,373 cells mapped, none extrapolated." in surface_notes(plain)


@pytest.mark.parametrize(
    ("draw", "message"),
    [
        (lambda r, d: map_surface(r.surface, "risk"), "show: found 'risk'; a surface can show prevalence"),
        (lambda r, d: map_surface(r.surface, "exceedance"), "needs threshold="),
        (lambda r, d: map_surface(r.surface, "exceedance", 10), "found 10; a threshold is a share"),
        (lambda r, d: map_units(r.units, "decision"), "needs the result of classify_units"),
        (lambda r, d: map_units(r.units, "exceedance"), "needs threshold="),
        (lambda r, d: map_units(d, "everything"), "show: found 'everything'; a map of units can show"),
        (lambda r, d: map_surface(r.surface, certainty=0.4), "certainty: found 0.4"),
    ],
)
def test_what_cannot_be_drawn_is_refused(results, decisions, draw, message):
    with pytest.raises(prevmap.InputError, match=message):
        draw(results, decisions)


def test_figures_are_the_same_bytes_every_time_and_carry_no_date(results, decisions, tmp_path):
    first, second = (map_units(decisions, "decision").figure for _ in range(2))
    assert figure_bytes(first) == figure_bytes(second)
    assert figure_bytes(first, "svg") == figure_bytes(second, "svg")
    assert b"<dc:date>" not in figure_bytes(first, "svg")
    assert b"CreationDate" not in figure_bytes(first, "pdf")
    assert b"tEXt" not in figure_bytes(first)
    assert save_figure(first, tmp_path / "map.png").read_bytes() == figure_bytes(first)


def test_drawing_leaves_no_global_figures_behind_and_shows_itself():
    code = (
        "import sys; sys.path.insert(0, 'tests'); from invented_results import invented_results; "
        "import prevmap; ax = prevmap.map_surface(invented_results().surface); "
        "assert 'matplotlib.pyplot' not in sys.modules; "
        "assert ax.figure._repr_png_().startswith(b'\\x89PNG')"
    )
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr


def test_given_axes_are_drawn_on_and_returned(results, decisions):
    figure = Figure(figsize=(12, 5))
    left, right = figure.subplots(1, 2)
    assert map_surface(results.surface, ax=left) is left
    assert map_units(decisions, "decision", ax=right) is right
    assert tuple(figure.get_size_inches()) == (12, 5)
    assert len(figure_bytes(figure, dpi=40)) > 1000


def grey(colour):
    """Luminance of a colour in a grey print (Rec. 709 weights)."""
    return float(np.dot(to_rgb(colour), [0.2126, 0.7152, 0.0722]))


def test_decisions_are_told_apart_without_colour():
    styles = decision_styles(("above", "below", "undecided"))
    looks = {(style.letter, style.pattern) for style in styles.values()}
    assert len(looks) == 3
    assert styles["undecided"].pattern == "lines"
    assert styles["undecided"].colour == "#FFFFFF"
    levels = sorted(grey(style.colour) for style in styles.values())
    assert min(np.diff(levels)) > 0.15  # about what a laser printer can show side by side
    many = decision_styles((">= 50 %", ">= 20 % and < 50 %", ">= 10 % and < 20 %", "< 10 %", "undecided"))
    assert [style.letter for style in many.values()] == ["IV", "III", "II", "I", "?"]
    darkness = [grey(style.colour) for style in many.values()][:3]
    assert darkness == sorted(darkness)


def test_a_decision_map_letters_every_unit_and_counts(results, decisions):
    ax = map_units(decisions, "decision")
    letters = [t.get_text() for t in ax.texts if t.get_fontweight() == "bold" and len(t.get_text()) == 1]
    assert sorted(letters) == sorted(
        {"above": "A", "below": "B", "undecided": "?"}[d] for d in decisions.frame["decision"]
    )
    legend = [t.get_text() for t in ax.get_legend().get_texts()]
    assert f"A  above ({decisions.counts['above']})" in legend
    assert f"?  undecided ({decisions.counts['undecided']})" in legend


def test_units_without_sites_are_hatched_and_counted(results):
    words = texts(map_units(results.units)).replace("\n", " ")
    bare = int((results.units.frame["basis"] != "own sites").sum())
    assert bare > 0
    assert f"Hatched: {bare} of 12 units without a surveyed site" in words


def with_frame(units, frame):
    return SimpleNamespace(**{**vars(units), "frame": frame})


def test_units_whose_sites_have_no_position_are_not_called_unsurveyed(results):
    frame = results.units.frame.copy()
    frame.loc[:3, "basis"] = "neighbours"
    frame.loc[1:3, ["sites", "examined"]] = 0
    bare = np.flatnonzero((frame["basis"] != "own sites") & (frame["sites"] == 0))
    words = texts(map_units(with_frame(results.units, frame))).replace("\n", " ")
    assert f"Hatched: {len(bare)} of 12 units without a surveyed site" in words
    assert "Hatched: 1 of 12 units with sites but none with a position" in words


def test_units_without_a_prediction_are_named_and_not_hatched(results):
    frame = results.units.frame.copy()
    frame.loc[:3, "basis"] = "covariates only"
    frame.loc[:3, "sites"] = 0
    bare = np.flatnonzero(frame["basis"] != "own sites")
    frame.loc[bare[0], ["mean", "lower95", "upper95"]] = np.nan
    ax = map_units(with_frame(results.units, frame))
    words = texts(ax).replace("\n", " ")
    assert f"No prediction, covariates missing: {frame['unit'][bare[0]]}." in words
    assert f"Hatched: {len(bare) - 1} of 12 units" in words
    assert "not mapped (no estimate, excluded area)" in words


def test_units_weighted_by_area_or_predicted_in_part_are_named(results):
    frame = results.units.frame.copy()
    assert "Weighted by area" not in texts(map_units(results.units))
    frame.loc[3, "weighting"] = "area"
    frame.loc[4, "share_without_prediction"] = 0.25
    words = texts(map_units(with_frame(results.units, frame))).replace("\n", " ")
    assert f"Weighted by area, since the population file counts nobody there: {NAMES[3]}." in words
    assert f"{NAMES[4]} (25.0 %)." in words
    older = results.units.frame.drop(columns=["weighting", "share_without_prediction"])
    assert "Weighted by area" not in texts(map_units(with_frame(results.units, older)))


@pytest.mark.parametrize(
    "draw",
    [
        lambda r, **k: map_sites(r.fit, **k),
        lambda r, **k: map_surface(r.surface, **k),
        lambda r, **k: map_surface(r.surface, "uncertainty", **k),
        lambda r, **k: map_surface(r.surface, "exceedance", 0.10, **k),
    ],
)
def test_cell_maps_name_the_units_unless_told_not_to(results, draw):
    signs = dict(zip(short_signs(results.region.units), NAMES, strict=True))

    def labels(ax):
        return [t.get_text() for t in ax.texts if t.get_text() in {*signs, *NAMES}]

    ax = draw(results)
    written = labels(ax)
    # Every unit once, by name or by short sign, and every short sign explained under the map.
    assert sorted(signs.get(label, label) for label in written) == sorted(NAMES)
    words = texts(ax).replace("\n", " ")
    assert all(f"{label} {signs[label]}" in words for label in written if label in signs)
    assert labels(draw(results, labels=False)) == []


def test_contours_of_certainty_are_told_from_borders(results):
    ax = map_surface(results.surface, "exceedance", 0.10)
    contours = [c for c in ax.collections if isinstance(c, ContourSet)]
    assert [c.get_linestyle()[0][1] is None for c in contours] == [True, False]  # solid above, dashed below
    borders = [c for c in ax.collections if type(c) is LineCollection and c.get_zorder() in (5, 5.2, 5.4)]
    widest = max(float(np.max(c.get_linewidth())) for c in borders)
    for contour in contours:
        assert contour.get_path_effects()
        assert float(np.max(contour.get_linewidth())) > 1.5 * widest
        assert contour.get_zorder() > 5.4
    legend = [t.get_text() for t in ax.get_legend().get_texts()]
    assert legend[:4] == ["90 % sure: above", "90 % sure: below", "unit border", "border of several units"]


def test_a_map_is_legible_on_a_phone(results, decisions):
    for ax in (
        map_sites(results.fit),
        map_surface(results.surface, "exceedance", 0.10),
        map_units(decisions, "decision"),
        chart_units(decisions),
        chart_sites(results.fit),
        chart_odds_ratios(results.fit),
    ):
        # A phone shows a figure about 360 CSS pixels wide.
        pixels_per_pt = 360.0 / (72.0 * ax.figure.get_size_inches()[0])
        sizes = [t.get_fontsize() for t in ax.figure.findobj(Text) if t.get_text().strip()]
        assert min(sizes) * pixels_per_pt > 10.3


def test_a_unit_map_takes_values_by_name_not_by_position(results):
    shuffled = SimpleNamespace(
        **{**vars(results.units), "frame": results.units.frame.iloc[::-1].reset_index(drop=True)}
    )
    assert figure_bytes(map_units(shuffled).figure) == figure_bytes(map_units(results.units).figure)


def test_names_are_taken_literally():
    names = ["$x^2$", "a_b", r"\frac", "<b>", "& co", "日本", *NAMES[6:]]
    results = invented_results(names=names, cell_m=6_000.0)
    words = texts(map_units(results.units))
    assert "$x^2$" in words
    assert len(figure_bytes(map_units(results.units).figure)) > 1000


@pytest.mark.parametrize("name", ["W", "A very long name of a unit"])
def test_labels_never_overlap_and_short_signs_have_a_key(name):
    # Sixty-four units on a sheet: long names cannot all fit.
    polygons = [
        shapely.box(10 * (i % 8), 10 * (i // 8), 10 * (i % 8) + 10, 10 * (i // 8) + 10) for i in range(64)
    ]
    sheet = open_sheet((0.0, 0.0, 80.0, 80.0))
    before = set(sheet.ax.texts)
    short = label_units(
        sheet.ax, polygons, [UnitText(f"{name} {i}", str(i + 1)) for i in range(64)], sheet.km_per_pt
    )
    wide = sheet.box_in[0] / SHEET_WIDTH
    sheet.ax.set_position((0.05, 0.05, wide, wide * SHEET_WIDTH / 6.0 * sheet.box_in[1] / sheet.box_in[0]))
    written = [t for t in sheet.ax.texts if t not in before]
    assert len(written) == 64
    assert len(short) == (0 if name == "W" else 64)
    renderer = sheet.ax.figure.canvas.get_renderer()
    boxes = [shapely.box(*t.get_window_extent(renderer).extents) for t in written]
    tree = shapely.STRtree(boxes)
    first, second = tree.query(boxes, predicate="overlaps")
    assert len(first) == 0
    assert len(second) == 0


def test_short_signs_are_codes_only_where_all_units_have_short_ones():
    assert short_signs(pd.DataFrame({"unit": ["a", "b"], "code": ["K1", "K2"]})) == ["K1", "K2"]
    assert short_signs(pd.DataFrame({"unit": ["a", "b"], "code": ["K1", None]})) == ["1", "2"]
    assert short_signs(pd.DataFrame({"unit": ["a", "b"], "code": ["37001", "K2"]})) == ["1", "2"]


def test_maps_adapt_to_what_is_missing(results):
    bare = invented_results(lake=False, population=False, cell_m=6_000.0)
    legend = map_surface(bare.surface).get_legend()
    assert [t.get_text() for t in legend.get_texts()] == ["extrapolated"]
    assert "weighted by area, since no population was given" in texts(map_units(bare.units)).replace(
        "\n", " "
    )
    hull = SimpleNamespace(**{**vars(bare.region), "units": bare.region.units.iloc[:0], "has_units": False})
    surface = SimpleNamespace(
        **{
            **vars(bare.surface),
            "region": hull,
            "grid": None,
            "extrapolation_reason": bare.surface.extrapolation_reason,
        }
    )
    ax = map_surface(surface, "exceedance", 0.1)
    assert not ax.images
    assert len(figure_bytes(ax.figure)) > 1000
    survey = SimpleNamespace(
        frame=results.survey.frame, about=results.survey.about, noted=results.survey.noted
    )
    assert "ages 5-14" in texts(map_sites(survey))


def test_holes_stay_open():
    square = shapely.box(0, 0, 4, 4).difference(shapely.box(1, 1, 3, 3))
    path = polygon_path(shapely.MultiPolygon([square, shapely.box(6, 0, 7, 1)]))
    inside = path.contains_points([(0.5, 0.5), (6.5, 0.5)])
    assert inside.all()
    signed = 0.0
    for ring in path.to_polygons(closed_only=True):
        x, y = np.asarray(ring).T
        signed += 0.5 * float(np.sum(x[:-1] * y[1:] - x[1:] * y[:-1]))
    assert signed == pytest.approx(13.0, abs=ALGEBRA)  # 16 - 4 + 1: the hole runs the other way
    assert polygon_path(shapely.Polygon()) is None
    assert in_km(shapely.Point(1500, 500)).coords[0] == (1.5, 0.5)


@given(st.floats(1e-3, 1e5))
def test_a_scale_bar_is_round_and_fits(width):
    length = bar_length_km(width)
    assert length <= 0.3 * width * (1 + 1e-9)  # rounding of the printed length
    assert length > 0.3 * width / 2.5 * (1 - 1e-9)  # steps 1, 2, 5 are at most a factor 2.5 apart
    assert f"{length:e}"[0] in "125"


@given(st.floats(1e-6, 1.0))
def test_a_colour_scale_ends_just_above_the_largest_value(value):
    top = nice_ceiling(value)
    assert (
        value * (1 - 1e-8) <= top <= 4 / 3 * value * (1 + 1e-8) or top <= 1.34 * value
    )  # widest step is 3 to 4
    assert prevalence_norm(value, 1.0).vmax <= 1.0


@given(st.text(st.sampled_from("abc \u00a0%"), max_size=200), st.floats(1.0, 6.0))
def test_wrapping_keeps_every_letter(text, width):
    joined = "".join(wrapped(text, width, 8.0)).replace(" ", "")
    assert joined == text.replace(" ", "")


def test_charts_show_means_intervals_and_raw_estimates(results, decisions):
    ax = chart_units(decisions)
    means = np.sort(results.units.frame["mean"])
    assert [t.get_text() for t in ax.get_yticklabels()][-1] == results.units.frame.sort_values("mean")[
        "unit"
    ].iloc[-1]
    offsets = np.concatenate(
        [c.get_offsets()[:, 0] for c in ax.collections if isinstance(c, PathCollection)][1:]
    )
    assert np.allclose(np.sort(np.asarray(offsets)), means, rtol=0, atol=ALGEBRA)
    bars = chart_sites(results.fit, 0.1)
    assert sum(p.get_height() for p in bars.patches) == len(results.fit.sites)
    odds = chart_odds_ratios(results.fit)
    x = odds.collections[-1].get_offsets()[:, 0]
    assert np.allclose(x, np.exp([0.42, -0.31]), rtol=0, atol=ALGEBRA)
    assert chart_units(results.units, 0.2).figure is not None


def test_decisions_of_several_classes_are_drawn(results):
    several = classify_units(results.units, [0.05, 0.10, 0.20], 0.6)
    legend = [t.get_text() for t in map_units(several, "decision").get_legend().get_texts()]
    assert f"IV  ≥ 20 % ({several.counts['>= 20 %']})" in legend
    assert replace(several, thresholds=(0.05, 0.10, 0.20)).outcomes[-1] == "undecided"
