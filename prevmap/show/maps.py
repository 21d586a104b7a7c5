"""Maps of sites and surfaces: what was measured, what was estimated, how sure it is."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize
from matplotlib.patheffects import withStroke
from numpy.typing import NDArray

from prevmap.errors import InputError
from prevmap.plan.classify import checked_certainty
from prevmap.show.bars import exceedance_bar, prevalence_bar, uncertainty_bar
from prevmap.show.canvas import Sheet, house_style, new_figure
from prevmap.show.ground import (
    Ground,
    blank_entry,
    border_entries,
    cells_polygon,
    draw_borders,
    draw_ground,
    draw_sites,
    hatch_area,
    read_ground,
    thin,
)
from prevmap.show.labels import write_labels
from prevmap.show.outline import polygon_path
from prevmap.show.palette import (
    BLANK,
    EXCEEDANCE,
    INK,
    PREVALENCE,
    UNCERTAINTY,
    nice_ceiling,
    prevalence_norm,
)
from prevmap.show.sheet import (
    MapSheet,
    arrange_sheets,
    close_sheet,
    line_entry,
    open_sheet,
    site_entry,
    swatch,
)
from prevmap.show.unit_maps import map_units as map_units
from prevmap.show.unit_maps import needed_threshold
from prevmap.show.wording import count, meaning, measured, sentence, threshold_text

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from prevmap.inputs.region import Region
    from prevmap.inputs.survey import Survey
    from prevmap.model.fit import Fit
    from prevmap.model.surface import Surface

_CONTOUR_PT = 1.9
_SHOWS = ("prevalence", "uncertainty", "exceedance")


def map_surface(
    surface: Surface,
    show: str = "prevalence",
    threshold: float | None = None,
    ax: Axes | None = None,
    *,
    sites: bool = False,
    certainty: float | Mapping[str, float] = 0.90,
    labels: bool = True,
) -> Axes:
    """Map a predicted surface.

    Parameters
    ----------
    surface : Surface
        As returned by ``fit.predict``, on a grid or at points.
    show : str
        ``"prevalence"`` (posterior mean), ``"uncertainty"`` (width of the 95 % interval) or ``"exceedance"``
        (probability of being above the threshold).
    threshold : float, optional
        Prevalence threshold, a share in (0, 1); needed for ``"exceedance"``.
    ax : Axes, optional
        Axes to draw on; a new figure without one (``map_surface(...).figure`` shows it).
    sites : bool
        Draw raw site proportions over a prevalence map, on the same colour scale.
    certainty : float or mapping
        Probability marked on an exceedance map, in colour bar and by contour lines.
    labels : bool
        Write unit names where they fit, else codes (or numbers) with a key under the map.

    Returns
    -------
    Axes
        In km of the working CRS.

    Raises
    ------
    InputError
        If ``show`` is unknown or the threshold is missing or not a share.
    """
    with house_style():
        sheet = draw_surface(surface, show, threshold, ax, sites=sites, certainty=certainty, labels=labels)
        if sheet.own:
            arrange_sheets(sheet.ax.figure, [sheet], 1)
    return sheet.ax


def map_sites(
    survey_or_fit: Survey | Fit,
    region: Region | None = None,
    ax: Axes | None = None,
    *,
    surface: Surface | None = None,
    labels: bool = True,
) -> Axes:
    """Map raw site proportions: what was measured, before any model.

    Parameters
    ----------
    survey_or_fit : Survey or Fit
        Accepted sites; marker area is proportional to the number examined.
    region : Region, optional
        Drawn under the sites; a fit brings its own.
    ax : Axes, optional
        Axes to draw on; a new figure without one.
    surface : Surface, optional
        Colours as on the prevalence map of this surface, so that the two can be compared.
    labels : bool
        Write unit names where they fit, else codes (or numbers) with a key under the map.

    Returns
    -------
    Axes
        In km of the working CRS.
    """
    norm = _shared_norm(surface) if surface is not None else None
    with house_style():
        sheet = draw_site_map(survey_or_fit, region, ax, norm=norm, labels=labels)
        if sheet.own:
            arrange_sheets(sheet.ax.figure, [sheet], 1)
    return sheet.ax


def map_panel(
    surface: Surface,
    threshold: float | None = None,
    certainty: float | Mapping[str, float] = 0.90,
    *,
    labels: bool = True,
) -> Sheet:
    """Draw sites, prevalence, uncertainty and exceedance side by side, on one extent.

    Parameters
    ----------
    surface : Surface
        As returned by ``fit.predict(grid)``.
    threshold : float, optional
        Without it there is no exceedance map.
    certainty : float or mapping
        Probability marked on the exceedance map.
    labels : bool
        Write unit names where they fit, else codes (or numbers) with a key under the map.

    Returns
    -------
    Figure
    """
    with house_style():
        figure = new_figure(9.2, 12.0)
        norm = _shared_norm(surface)
        source = getattr(surface, "fit", surface)
        sheets = [draw_site_map(source, surface.region, figure=figure, norm=norm, labels=labels)]
        shows = ["prevalence", "uncertainty", *(["exceedance"] if threshold is not None else [])]
        for show in shows:
            given = threshold if show == "exceedance" else None
            drawn = draw_surface(
                surface, show, given, figure=figure, norm=norm, certainty=certainty, labels=labels
            )
            sheets.append(drawn)
        arrange_sheets(figure, sheets, 2)
    return figure


def draw_surface(
    surface: Any,
    show: str,
    threshold: float | None,
    ax: Any = None,
    *,
    figure: Any = None,
    sites: bool = False,
    certainty: float | Mapping[str, float] = 0.90,
    norm: Normalize | None = None,
    exceedance: NDArray[np.float64] | None = None,
    labels: bool = True,
) -> MapSheet:
    """Draw one map of a surface and return its sheet, not yet arranged in the figure.

    ``exceedance`` (n,) spares a second computation where the caller already has it for this threshold.
    """
    if show not in _SHOWS:
        raise InputError(f"show: found {show!r}; a surface can show {', '.join(_SHOWS)}.")
    edge = needed_threshold(show, threshold)
    levels = checked_certainty(certainty)
    ground = read_ground(surface.region, surface.sites)
    sheet = open_sheet(ground.bounds, ax, figure)
    draw_ground(sheet, ground)

    hidden = np.asarray(surface.blank, dtype=bool) | np.asarray(surface.missing, dtype=bool)
    handles: list[Any] = []
    if show == "prevalence":
        values = np.asarray(surface.mean, dtype=float)
        mappable = ScalarMappable(norm or _shared_norm(surface), PREVALENCE)
        proportions = surface.sites["proportion"] if sites else []
        prevalence_bar(sheet, mappable, "prevalence (posterior mean)", proportions)
        title = "Prevalence"
    elif show == "uncertainty":
        values = np.asarray(surface.upper95, dtype=float) - np.asarray(surface.lower95, dtype=float)
        top = nice_ceiling(float(np.max(values[~hidden], initial=0.0)))
        mappable = ScalarMappable(Normalize(0.0, top), UNCERTAINTY)
        uncertainty_bar(sheet, mappable)
        title = "Uncertainty: width of the 95 % interval"
    else:
        values = np.asarray(surface.exceedance(edge) if exceedance is None else exceedance, dtype=float)
        mappable = ScalarMappable(Normalize(0.0, 1.0), EXCEEDANCE)
        exceedance_bar(sheet, mappable, edge, levels)
        title = f"Probability that prevalence is above {threshold_text(edge)}"
    shown = np.where(hidden, np.nan, values)
    _paint(sheet, surface, ground, shown, mappable)
    if show == "exceedance":
        handles += _certainty_contours(sheet, surface, ground, shown, levels)
        handles += border_entries(ground)
    extrapolated = np.asarray(surface.extrapolated, dtype=bool) & ~hidden
    if extrapolated.any():
        _mark_extrapolated(sheet, surface, ground, extrapolated)
        handles.append(swatch("extrapolated", "#FFFFFF", pattern="lines"))
    draw_borders(sheet, ground)
    notes = surface_notes(surface)
    if sites and show == "prevalence":
        draw_sites(sheet, surface.sites, mappable.norm)
        handles.append(site_entry("raw proportion of a site"))
        notes += _above_scale(surface.sites, mappable.norm)
    if labels:
        notes += _unit_labels(sheet, surface.region, ground)
    reasons = blank_reasons(surface, ground)
    if reasons:
        handles.append(blank_entry(reasons))
    return close_sheet(
        sheet,
        title=title,
        subtitle=sentence(meaning(surface)),
        handles=handles,
        notes=notes,
    )


def draw_site_map(
    source: Any,
    region: Any = None,
    ax: Any = None,
    *,
    figure: Any = None,
    norm: Normalize | None = None,
    labels: bool = True,
) -> MapSheet:
    """Draw the map of raw site proportions and return its sheet, not yet arranged in the figure."""
    sites, area = _placed_sites(source, region)
    top = float(np.max(np.asarray(sites["proportion"], dtype=float), initial=0.0))
    ground = read_ground(area, sites) if area is not None else None
    west, south, east, north = (float(v) / 1000.0 for v in sites.total_bounds)
    sheet = open_sheet(ground.bounds if ground else (west, south, east, north), ax, figure)
    handles: list[Any] = []
    if ground is not None:
        draw_ground(sheet, ground)
        draw_borders(sheet, ground)
        handles.append(swatch("study area", BLANK))
    norm = norm or prevalence_norm(top, top)
    markers = draw_sites(sheet, sites, norm, sized=True)
    prevalence_bar(sheet, markers, "raw proportion positive", sites["proportion"])
    examined, positive = int(sites["examined"].sum()), int(sites["positive"].sum())
    smallest, largest = int(sites["examined"].min()), int(sites["examined"].max())
    span = f"{smallest:,}" if smallest == largest else f"{smallest:,} to {largest:,}"
    handles.insert(0, site_entry(f"site, area by number examined ({span})"))
    key = _unit_labels(sheet, area, ground) if labels and ground is not None else []
    names = sites["site"].nunique() if "site" in sites else len(sites)
    return close_sheet(
        sheet,
        title="What was measured: raw site proportions",
        subtitle=sentence(measured(source)),
        handles=handles,
        notes=[
            f"{count(names, 'site')}, {examined:,} examined, {positive:,} positive.",
            *_above_scale(sites, norm),
            *key,
        ],
    )


def surface_notes(surface: Any) -> list[str]:
    """Count what is extrapolated and what is not mapped, in sentences."""
    place = "cell" if surface.grid is not None else "point"
    blank, missing = np.asarray(surface.blank, dtype=bool), np.asarray(surface.missing, dtype=bool)
    shown = ~(blank | missing)
    reasons = np.asarray(surface.extrapolation_reason)[shown]
    flagged = np.asarray(surface.extrapolated, dtype=bool)[shown]
    notes = []
    if flagged.any():
        far = sum("far" in str(reason) for reason in reasons[flagged])
        outside = sum("covariates" in str(reason) for reason in reasons[flagged])
        why = []
        if far:
            why.append(f"{far:,} farther from every site than the range")
        if outside:
            why.append(f"{outside:,} with covariates outside the surveyed range")
        detail = f": {' and '.join(why)}" if why else ""
        notes.append(
            f"Hatched: {int(flagged.sum()):,} of {count(int(shown.sum()), place)} extrapolated{detail}."
        )
    else:
        notes.append(f"{count(int(shown.sum()), place)} mapped, none extrapolated.")
    left_out = []
    if (blank & ~missing).any():
        left_out.append(f"{count(int((blank & ~missing).sum()), place)} without people")
    if missing.any():
        left_out.append(f"{count(int(missing.sum()), place)} without covariate values")
    if left_out:
        notes.append(f"Not mapped: {' and '.join(left_out)}.")
    return notes


def blank_reasons(surface: Any, ground: Ground) -> list[str]:
    """Reasons for land being left grey that occur on this map."""
    reasons = []
    if (np.asarray(surface.blank, dtype=bool) & ~np.asarray(surface.missing, dtype=bool)).any():
        reasons.append("no people")
    if ground.water:
        reasons.append("excluded area")
    if np.asarray(surface.missing, dtype=bool).any():
        reasons.append("no covariate")
    return reasons


def _paint(sheet: MapSheet, surface: Any, ground: Ground, shown: NDArray[np.float64], mappable: Any) -> None:
    """Colour the cells, cut at the boundary, or the points."""
    if surface.grid is None:
        x, y = _points_km(surface)
        seen = ~np.isnan(shown)
        sheet.ax.scatter(
            x[seen], y[seen], c=shown[seen], cmap=mappable.cmap, norm=mappable.norm, s=22,
            edgecolors=INK, linewidths=0.4, zorder=6,
        )  # fmt: skip
        return
    grid = surface.grid
    left, top = (v / 1000.0 for v in grid.origin_m)
    rows, columns = grid.shape
    step = grid.cell_m / 1000.0
    extent = (left, left + columns * step, top - rows * step, top)
    image = _image(sheet, grid, shown, mappable, extent)
    path = polygon_path(thin(ground.boundary, sheet))
    if path is not None:
        image.set_clip_path(path, sheet.ax.transData)


def _image(sheet: MapSheet, grid: Any, shown: Any, mappable: Any, extent: tuple[float, ...]) -> Any:
    limits = sheet.ax.get_xlim(), sheet.ax.get_ylim()
    image = sheet.ax.imshow(
        np.ma.masked_invalid(grid.to_raster(shown)),
        extent=extent,
        cmap=mappable.cmap,
        norm=mappable.norm,
        interpolation="nearest",
        zorder=2,
    )
    # An image resets the limits to its own extent.
    sheet.ax.set_xlim(limits[0])
    sheet.ax.set_ylim(limits[1])
    return image


def _mark_extrapolated(
    sheet: MapSheet, surface: Any, ground: Ground, extrapolated: NDArray[np.bool_]
) -> None:
    if surface.grid is None:
        x, y = _points_km(surface)
        sheet.ax.scatter(
            x[extrapolated], y[extrapolated], marker="x", c=INK, s=18, linewidths=0.9, zorder=6.5
        )
        return
    hatch_area(sheet, cells_polygon(surface.grid, extrapolated, thin(ground.boundary, sheet)))


def _certainty_contours(
    sheet: MapSheet, surface: Any, ground: Ground, shown: NDArray[np.float64], levels: Mapping[str, float]
) -> list[Any]:
    """Draw lines where the probability reaches the certainty: the map can then be read in a grey print."""
    if surface.grid is None or min(surface.grid.shape) < 2 or np.isnan(shown).all():
        return []
    grid = surface.grid
    left, top = (v / 1000.0 for v in grid.origin_m)
    step = grid.cell_m / 1000.0
    x = left + step * (np.arange(grid.shape[1]) + 0.5)
    y = top - step * (np.arange(grid.shape[0]) + 0.5)
    raster = np.ma.masked_invalid(grid.to_raster(shown))
    path = polygon_path(thin(ground.boundary, sheet))
    entries = []
    for level, style, words in (
        (levels["above"], "solid", f"{100 * levels['above']:.4g} % sure: above"),
        (1.0 - levels["below"], "dashed", f"{100 * levels['below']:.4g} % sure: below"),
    ):
        if not raster.min() < level < raster.max():
            continue
        lines = sheet.ax.contour(
            x, y, raster, levels=[level], colors=INK, linewidths=_CONTOUR_PT, linestyles=style, zorder=5.8
        )
        # The white edge tells a contour from a border, in a grey print too.
        lines.set_path_effects([withStroke(linewidth=_CONTOUR_PT + 2.4, foreground="white")])
        if path is not None:
            lines.set_clip_path(path, sheet.ax.transData)
        entries.append(line_entry(words, style, width=_CONTOUR_PT))
    return entries


def _unit_labels(sheet: MapSheet, region: Any, ground: Ground) -> list[str]:
    return write_labels(sheet, region, [thin(geometry, sheet) for geometry in ground.units])


def _placed_sites(source: Any, region: Any) -> tuple[Any, Any]:
    """Sites in a working CRS with their proportion, and the region to draw under them (or None)."""
    if hasattr(source, "sites"):
        return source.sites, region if region is not None else source.region
    frame = source.frame
    if region is not None:
        frame = frame.to_crs(region.crs)
    elif frame.crs is None or frame.crs.is_geographic:
        frame = frame.to_crs(frame.estimate_utm_crs())
    frame = frame.assign(proportion=frame["positive"] / frame["examined"])
    return frame, region


def _above_scale(sites: Any, norm: Any) -> list[str]:
    """Count the sites that the colour scale does not reach, in a sentence; nothing where there are none."""
    top = float(norm.vmax or 1.0)
    over = int(np.count_nonzero(np.asarray(sites["proportion"], dtype=float) > top * (1.0 + 1e-9)))
    return [f"{count(over, 'site')} above the end of the scale."] if over else []


def _shared_norm(surface: Any) -> Normalize:
    """One prevalence scale for the surface and the raw site proportions."""
    shown = ~(np.asarray(surface.blank, dtype=bool) | np.asarray(surface.missing, dtype=bool))
    top = float(np.max(np.asarray(surface.mean, dtype=float)[shown], initial=0.0))
    sites = float(np.max(np.asarray(surface.sites["proportion"], dtype=float), initial=0.0))
    return prevalence_norm(top, sites)


def _points_km(surface: Any) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    points = surface.points.geometry
    return np.asarray(points.x, dtype=float) / 1000.0, np.asarray(points.y, dtype=float) / 1000.0
