"""The projected coordinate system, in metres, in which every distance of a study is taken."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray
from pyproj import CRS, Transformer
from pyproj.crs import ProjectedCRS
from pyproj.crs.coordinate_operation import (
    AlbersEqualAreaConversion,
    LambertAzimuthalEqualAreaConversion,
    LambertCylindricalEqualAreaConversion,
    TransverseMercatorConversion,
)

from prevmap.errors import InputError
from prevmap.inputs.findings import Finding

Floats = NDArray[np.float64]

ANOTHER_ABOVE = 0.005  # distance distortion above which another projection is worth choosing
WARN_ABOVE = 0.02  # distance distortion above which results are weaker
LATTICE = 25  # sample points along each side of the region's bounding box
HALF_STEP_M = 500.0  # scale is the map's length of a kilometre on the ellipsoid
OUTLINE = 400  # sample points on the region's convex hull


@dataclass(frozen=True, slots=True)
class WorkingCrs:
    """A projected coordinate system in metres with its distance error over one region.

    Attributes
    ----------
    crs : pyproj.CRS
        Projected, both axes in metres.
    distortion : float
        Largest |scale - 1| of a short distance in any direction, over the region.
    findings : tuple of Finding
        What the reader should know about the choice.
    """

    crs: CRS
    distortion: float
    findings: tuple[Finding, ...]


def choose_working_crs(geometries: NDArray[Any], crs: CRS) -> WorkingCrs:
    """Return the coordinate system to work in for geometries given in `crs`.

    A projected system in metres is kept. A projected system in other units becomes the same projection in
    metres. Geographic coordinates get, on the same datum, the centred azimuthal, conic or cylindrical
    equal-area or transverse Mercator projection whose largest distance distortion over the region is least.

    Parameters
    ----------
    geometries : (n,) array of shapely geometries
        In `crs`; only their extent matters.
    crs : pyproj.CRS
        Their coordinate system.

    Returns
    -------
    WorkingCrs

    Raises
    ------
    InputError
        If `crs` is neither geographic nor projected, or the coordinates are impossible in it.

    Notes
    -----
    Distortion is the largest of |a - 1| and |b - 1|, a and b the semi-axes of Tissot's indicatrix
    (Snyder 1987, Map Projections: a working manual, USGS Professional Paper 1395, chapter 4).
    """
    crs = horizontal(crs)
    if crs.is_projected:
        metric = in_metres(crs)
        lon, lat = sample_lonlat(geometries, crs)
        distortion = distance_distortion(metric, lon, lat)
        return WorkingCrs(metric, distortion, tuple(_kept_findings(crs, metric, distortion)))
    if not crs.is_geographic:
        raise InputError(
            f"The coordinate system {crs.name!r} is neither geographic nor projected. "
            "Accepted: longitude and latitude, or a projected system such as a UTM zone."
        )
    check_degrees(geometries, crs)
    lon, lat = sample_lonlat(geometries, crs)
    scored = [
        (distance_distortion(candidate, lon, lat), candidate)
        for candidate in candidates(degrees_of(crs), lon, lat)
    ]
    distortion, chosen = min(scored, key=lambda pair: pair[0])
    return WorkingCrs(chosen, distortion, tuple(_chosen_findings(chosen, distortion)))


def horizontal(crs: CRS) -> CRS:
    """Return the two-dimensional part of a coordinate system, heights and datum shifts left aside."""
    while crs.is_bound and crs.source_crs is not None:
        crs = crs.source_crs
    if crs.is_compound:
        crs = horizontal(crs.sub_crs_list[0])
    return crs.to_2d()


def in_metres(crs: CRS) -> CRS:
    """Return the same projection with both axes in metres (itself where they already are)."""
    if all(axis.unit_name in ("metre", "meter") for axis in crs.axis_info):
        return crs
    parts = crs.to_json_dict()
    for axis in parts["coordinate_system"]["axis"]:
        axis["unit"] = "metre"
    parts.pop("id", None)
    parts["name"] = f"{crs.name} (in metres)"
    return CRS.from_json_dict(parts)


def degrees_of(crs: CRS) -> CRS:
    """Return the geographic system a coordinate system stands on, in degrees (some old ones are in grads)."""
    if crs.geodetic_crs is None:
        raise InputError(f"The coordinate system {crs.name!r} stands on no longitude and latitude.")
    base = crs.geodetic_crs.to_2d()
    if all(axis.unit_name == "degree" for axis in base.axis_info):
        return base
    parts = base.to_json_dict()
    for axis in parts["coordinate_system"]["axis"]:
        axis["unit"] = "degree"
    parts.pop("id", None)
    return CRS.from_json_dict(parts)


def distance_distortion(crs: CRS, lon: Floats, lat: Floats) -> float:
    """Return the largest |scale - 1| of short distances over points given in degrees.

    Parameters
    ----------
    crs : pyproj.CRS
        A projected system in metres.
    lon, lat : (n,) float
        Degrees, on the datum of `crs`.

    Returns
    -------
    float
        Infinite where the projection cannot show one of the points.

    Notes
    -----
    The semi-axes of Tissot's indicatrix are the singular values of the map's derivative, taken here from
    geodesics of a kilometre: printed scale factors of some projections assume a sphere.
    """
    geod, flat = crs.get_geod(), Transformer.from_crs(degrees_of(crs), crs, always_xy=True)
    if geod is None:
        raise InputError(f"{crs.name!r} has no ellipsoid, so that distances cannot be checked.")
    columns = []
    for azimuth in (90.0, 0.0):
        ends = []
        for turn in (0.0, 180.0):
            there = geod.fwd(lon, lat, np.full(len(lon), azimuth + turn), np.full(len(lon), HALF_STEP_M))
            ends.append(np.asarray(flat.transform(there[0], there[1]), dtype=float))
        columns.append((ends[0] - ends[1]) / (2.0 * HALF_STEP_M))
    # (n, 2, 2): metres on the map for a metre east and a metre north on the ground.
    change = np.stack(columns, axis=-1).transpose(1, 0, 2)
    if not np.isfinite(change).all():
        return float("inf")
    return float(np.max(np.abs(np.linalg.svd(change, compute_uv=False) - 1.0)))


def candidates(crs: CRS, lon: Floats, lat: Floats) -> list[CRS]:
    """Return the projections worth trying for a region sampled at (n,) degrees `lon`, `lat`."""
    lon0, lat0 = round(float(_middle(lon)), 4), round(float(_middle(lat)), 4)
    south, north = float(lat.min()), float(lat.max())
    sixth = (north - south) / 6.0
    conversions: list[Any] = [LambertAzimuthalEqualAreaConversion(lat0, lon0)]
    widest = max(abs(south), abs(north))
    if abs(lat0) < 80.0:
        # True scale at mid-latitude splits the error of a cylinder between its two edges.
        conversions.append(LambertCylindricalEqualAreaConversion(round(float(np.mean(np.abs(lat))), 4), lon0))
        plain = _projected(crs, TransverseMercatorConversion(lat0, lon0))
        stretch = distance_distortion(plain, lon, lat)
        if np.isfinite(stretch):
            conversions.append(
                TransverseMercatorConversion(lat0, lon0, 0.0, 0.0, round(2.0 / (2.0 + stretch), 7))
            )
    if abs(lat0) > 2.0 and widest < 85.0:
        conversions.append(
            AlbersEqualAreaConversion(round(south + sixth, 4), round(north - sixth, 4), lat0, lon0)
        )
    return [_projected(crs, conversion) for conversion in conversions]


def sample_lonlat(geometries: NDArray[Any], crs: CRS) -> tuple[Floats, Floats]:
    """Return (n,) longitudes and latitudes, in degrees, spread over geometries given in `crs`.

    A lattice over the bounding box, kept where it meets a geometry, and the corners of the convex hull.
    Longitudes run on past 180 degrees where the region crosses that meridian.
    """
    corners = shapely.get_coordinates(geometries)
    if crs.is_geographic and np.ptp(corners[:, 0]) > 180.0:
        # A region on both sides of the 180th meridian is sampled at its corners alone.
        step = max(1, len(corners) // 5000)
        inside = np.empty((0, 2))
        rim = corners[::step]
    else:
        hull = shapely.get_coordinates(shapely.convex_hull(shapely.multipoints(corners)))
        rim = hull[:: max(1, len(hull) // OUTLINE)]
        inside = _lattice_inside(geometries, corners)
    points = np.vstack([rim, inside])
    to_degrees = Transformer.from_crs(crs, degrees_of(crs), always_xy=True)
    lon, lat = to_degrees.transform(points[:, 0], points[:, 1])
    lon, lat = np.asarray(lon, float), np.asarray(lat, float)
    usable = np.isfinite(lon) & np.isfinite(lat)
    if not usable.all():
        raise InputError(
            f"Coordinates such as x = {points[~usable][0, 0]:g}, y = {points[~usable][0, 1]:g} do not exist "
            f"in {crs.name!r}. Is the coordinate system the right one?"
        )
    if np.ptp(lon) > 180.0:
        lon = np.where(lon < 0.0, lon + 360.0, lon)
    return lon, lat


def _lattice_inside(geometries: NDArray[Any], corners: Floats) -> Floats:
    low, high = corners.min(axis=0), corners.max(axis=0)
    across, up = np.meshgrid(np.linspace(low[0], high[0], LATTICE), np.linspace(low[1], high[1], LATTICE))
    lattice = np.column_stack([across.ravel(), up.ravel()])
    usable = np.asarray(geometries, dtype=object)
    usable = usable[shapely.is_valid(usable)]
    hits = shapely.STRtree(usable).query(shapely.points(lattice), predicate="intersects")[0]
    return lattice[np.unique(hits)]


def _projected(crs: CRS, conversion: Any) -> CRS:
    kind = {
        "Lambert Azimuthal Equal Area": "Azimuthal equal-area",
        "Albers Equal Area": "Conic equal-area",
        "Lambert Cylindrical Equal Area": "Cylindrical equal-area",
        "Transverse Mercator": "Transverse Mercator",
    }[conversion.method_name]
    return ProjectedCRS(conversion, name=f"{kind} centred on the region", geodetic_crs=crs)


def _middle(values: Floats) -> float:
    return 0.5 * (float(values.min()) + float(values.max()))


def check_degrees(geometries: NDArray[Any], crs: CRS, source: str = "") -> None:
    """Raise an InputError where coordinates of geometries in a geographic `crs` are impossible as degrees."""
    corners = shapely.get_coordinates(geometries)
    impossible = (np.abs(corners[:, 0]) > 360.0) | (np.abs(corners[:, 1]) > 90.0)
    if crs.is_geographic and crs == degrees_of(crs) and impossible.any():
        x, y = corners[impossible][0]
        where = f"{source}: " if source else ""
        raise InputError(
            f"{where}coordinates such as x = {x:g}, y = {y:g} are impossible as degrees "
            f"of {crs.name!r}: longitude is within 180, latitude within 90. Perhaps they are metres: the "
            "coordinate system must then be a projected one."
        )


def _percent(distortion: float) -> str:
    return f"{100.0 * distortion:.2g} %" if np.isfinite(distortion) else "without bound"


def _kept_findings(given: CRS, metric: CRS, distortion: float) -> list[Finding]:
    findings = []
    if metric is not given:
        unit = given.axis_info[0].unit_name
        what = f"{given.name} measures in {unit}"
        findings.append(Finding(None, None, "crs", "note", what, "the same projection in metres is used"))
    if distortion > ANOTHER_ABOVE:
        severity = "warning" if distortion > WARN_ABOVE else "note"
        what = f"distances in {given.name} are off by up to {_percent(distortion)} over the region"
        action = "kept as given; give longitude and latitude, or another projection, for truer distances"
        findings.append(Finding(None, None, "crs", severity, what, action))  # type: ignore[arg-type]
    return findings


def _chosen_findings(chosen: CRS, distortion: float) -> list[Finding]:
    if distortion <= ANOTHER_ABOVE:
        return []
    severity = "warning" if distortion > WARN_ABOVE else "note"
    what = f"the region is so large that distances are off by up to {_percent(distortion)} on any flat map"
    action = f"the best of the projections tried is used: {chosen.name}"
    return [Finding(None, None, "crs", severity, what, action)]  # type: ignore[arg-type]
