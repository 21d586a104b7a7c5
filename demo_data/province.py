"""The invented land of the demonstration study: names, coast, districts, lakes, relief and people."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray
from rasterio.features import rasterize
from rasterio.transform import Affine, from_origin
from scipy.ndimage import distance_transform_edt, gaussian_filter, map_coordinates
from scipy.spatial import Voronoi, cKDTree
from scipy.spatial.distance import cdist
from scipy.special import expit, ndtri

Floats = NDArray[np.float64]

WEST, NORTH, PIXEL_DEG, ROWS, COLUMNS = -33.0, 6.7, 1 / 120, 180, 216
KM_PER_LAT = 110.6
KM_PER_LON = 111.3 * math.cos(math.radians(NORTH - ROWS * PIXEL_DEG / 2))
TRANSFORM = from_origin(WEST, NORTH, PIXEL_DEG, PIXEL_DEG)
SNAP_DEG = 1e-4  # vertices sit on this grid, so that neighbours share them exactly

DISTRICTS, ZONES, SETTLEMENTS, TOWNS = 30, 5, 300, 4
ONSETS = "b br d dr f fl g gl h k l m n p pl r s t tr v vr z".split()
VOWELS = "a e i o u ae oa".split()
CODAS = ["", "", "", "", "l", "n", "r"]
ENDINGS = "avo elu ime oru ivan esko unel othe adru ixa".split()


def uniform(rng: np.random.Generator, *shape: int) -> Floats:
    """Draw uniform numbers; all others derive from these, the stream least likely ever to change."""
    return rng.random(shape)


def normal(rng: np.random.Generator, *shape: int) -> Floats:
    """Draw standard normal numbers by inversion."""
    return np.asarray(ndtri(uniform(rng, *shape)))


def smooth_noise(rng: np.random.Generator, scale_px: float) -> Floats:
    """Return a (ROWS, COLUMNS) smooth random field with mean 0 and sd 1."""
    field = gaussian_filter(normal(rng, ROWS, COLUMNS), scale_px, mode="reflect")
    return np.asarray((field - field.mean()) / field.std())


def pixel_xy_km() -> tuple[Floats, Floats]:
    """Return pixel centres in km east and south of the raster's north-west corner, both (ROWS, COLUMNS)."""
    x_km = (np.arange(COLUMNS) + 0.5) * PIXEL_DEG * KM_PER_LON
    y_km = (np.arange(ROWS) + 0.5) * PIXEL_DEG * KM_PER_LAT
    x, y = np.meshgrid(x_km, y_km)
    return x, y


def to_degrees(xy_km: Floats) -> Floats:
    """Turn (n, 2) km from the north-west corner into longitude and latitude."""
    return np.column_stack([WEST + xy_km[:, 0] / KM_PER_LON, NORTH - xy_km[:, 1] / KM_PER_LAT])


def to_km(lonlat: Floats) -> Floats:
    """Turn (n, 2) longitude and latitude into km from the north-west corner."""
    return np.column_stack([(lonlat[:, 0] - WEST) * KM_PER_LON, (NORTH - lonlat[:, 1]) * KM_PER_LAT])


def pixel_of(lonlat: Floats) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Return row and column of the pixel each (n, 2) position falls in."""
    row = np.floor((NORTH - lonlat[:, 1]) / PIXEL_DEG).astype(np.intp)
    column = np.floor((lonlat[:, 0] - WEST) / PIXEL_DEG).astype(np.intp)
    return row, column


def invent_names(rng: np.random.Generator, count: int) -> list[str]:
    """Build ``count`` different names from syllables."""

    def pick(options: Sequence[str]) -> str:
        return options[int(uniform(rng, 1)[0] * len(options))]

    names: list[str] = []
    while len(names) < count:
        name = pick(ONSETS) + pick(VOWELS) + pick(CODAS) + pick(ONSETS) + pick(ENDINGS)
        if name.capitalize() not in names and 6 <= len(name) <= 9:
            names.append(name.capitalize())
    return names


def warp(rng: np.random.Generator) -> Any:
    """Return a smooth one-to-one map of the plane (km), which makes straight lines wander."""
    x_noise, y_noise = (
        4.5 * smooth_noise(rng, 14) + 1.7 * smooth_noise(rng, 4.5) + 0.5 * smooth_noise(rng, 1.6)
        for _ in range(2)
    )

    def moved(xy_km: Floats) -> Floats:
        at = [xy_km[:, 1] / (PIXEL_DEG * KM_PER_LAT) - 0.5, xy_km[:, 0] / (PIXEL_DEG * KM_PER_LON) - 0.5]
        shift = [map_coordinates(noise, at, order=3, mode="nearest") for noise in (x_noise, y_noise)]
        return xy_km + np.column_stack(shift)

    return moved


def blob(rng: np.random.Generator, centre: Any, radii: Sequence[float], rough: float) -> shapely.Polygon:
    """Return an irregular closed curve (km) around ``centre``, about ``radii`` wide and high."""
    steps = max(40, int(math.pi * sum(radii) / 0.9))
    angle = np.linspace(0, 2 * np.pi, steps, endpoint=False)
    waves = np.arange(2, max(6, steps // 5))
    amplitude = rough * waves**-1.15 * normal(rng, waves.size)
    phase = 2 * np.pi * uniform(rng, waves.size)
    radius = 1 + amplitude @ np.cos(np.outer(waves, angle) + phase[:, None])
    ring = np.column_stack([radii[0] * radius * np.cos(angle), radii[1] * radius * np.sin(angle)])
    return shapely.Polygon(ring + np.asarray(centre))


def snapped(shape: shapely.Geometry, move: Any = None) -> shapely.Geometry:
    """Return a shape in km as one in degrees with its vertices on the snapping grid."""
    in_degrees = shapely.transform(shape, lambda xy: to_degrees(move(xy) if move else xy))
    parts = shapely.get_parts(shapely.make_valid(in_degrees))
    return shapely.set_precision(parts[np.argmax(shapely.area(parts))], SNAP_DEG)


def seeds_of_districts(rng: np.random.Generator, land: shapely.Geometry) -> Floats:
    """Spread the districts' centres (km): an even scatter, denser around the middle of the west."""
    trial = to_km(np.asarray(shapely.get_coordinates(shapely.envelope(land))))
    low, high = trial.min(axis=0), trial.max(axis=0)
    points = low + uniform(rng, 20000, 2) * (high - low)
    points = points[shapely.contains_xy(land, to_degrees(points))]
    dense = low + (high - low) * np.array([0.3, 0.5])
    keep = uniform(rng, len(points)) < 0.25 + np.exp(-(((points - dense) / 32.0) ** 2).sum(axis=1))
    points = points[keep]
    centres = points[:DISTRICTS].copy()
    for _ in range(4):  # a few of Lloyd's steps, stopped early so that sizes stay uneven
        nearest = cKDTree(centres).query(points)[1]
        centres = np.array([points[nearest == i].mean(axis=0) for i in range(DISTRICTS)])
    return centres


def district_shapes(centres: Floats, land: shapely.Geometry, move: Any) -> list[shapely.Geometry]:
    """Cut the land into one shape (degrees) per centre, neighbours sharing every vertex of their border."""
    middle = centres.mean(axis=0)
    ring = np.linspace(0, 2 * np.pi, 24, endpoint=False)
    far = middle + 400 * np.column_stack([np.cos(ring), np.sin(ring)])
    diagram = Voronoi(np.vstack([centres, far]))
    cells = [
        snapped(shapely.segmentize(shapely.Polygon(diagram.vertices[diagram.regions[i]]), 1.2), move)
        for i in diagram.point_region[: len(centres)]
    ]
    lines = shapely.union_all([c.boundary for c in cells] + [land.boundary], grid_size=SNAP_DEG)
    faces = [f for f in shapely.get_parts(shapely.polygonize([lines])) if land.contains(f.point_on_surface())]
    faces.sort(key=lambda face: (-face.area, face.bounds))
    anchors = shapely.points([face.point_on_surface().coords[0] for face in faces])
    owner = [int(np.argmin(shapely.distance(cells, anchor))) for anchor in anchors]
    largest: dict[int, int] = {}
    for k, district in enumerate(owner):
        largest.setdefault(district, k)
    for k, face in enumerate(faces):
        if largest[owner[k]] == k:
            continue
        shared = shapely.length(shapely.intersection(face.boundary, [f.boundary for f in faces]))
        shared[k] = 0.0
        if shared.max() > 0:  # a piece cut off by a bay joins the neighbour it is attached to
            owner[k] = owner[int(np.argmax(shared))]
    return [
        shapely.union_all([f for f, o in zip(faces, owner, strict=True) if o == d], grid_size=SNAP_DEG)
        for d in range(len(centres))
    ]


@dataclass(frozen=True)
class Province:
    """The invented land: district and lake shapes in degrees, and rasters of (ROWS, COLUMNS)."""

    districts: list[shapely.Geometry]
    zone: NDArray[np.intp]
    lakes: list[shapely.Geometry]
    district_at: NDArray[np.intp]  # 5 x 5 finer than the pixels; -1 at sea and on lakes
    coast_km: Floats  # distance to the coast, negative at sea
    km_to_water: Floats
    elevation: Floats
    wetness: Floats


def burn(shapes: Iterable[shapely.Geometry], finer: int) -> NDArray[np.intp]:
    """Burn the index of each shape into a raster ``finer`` times finer than the pixels, -1 elsewhere."""
    size = (ROWS * finer, COLUMNS * finer)
    grid = rasterize(
        [(shape, i + 1) for i, shape in enumerate(shapes)],
        out_shape=size,
        transform=TRANSFORM * Affine.scale(1 / finer),
        dtype="int32",
    )
    return np.asarray(grid, dtype=np.intp) - 1


def make_province(coast_rng: np.random.Generator, relief_rng: np.random.Generator) -> Province:
    """Draw coast, districts, lakes and relief."""
    move = warp(coast_rng)
    middle = np.array([COLUMNS * PIXEL_DEG * KM_PER_LON, ROWS * PIXEL_DEG * KM_PER_LAT]) / 2
    mainland = blob(coast_rng, middle, (83, 66), 0.19)
    islets = [
        blob(coast_rng, middle + at, size, 0.1) for at, size in (((66, 58), (7, 4)), ((-78, 46), (4, 5)))
    ]
    coast = [snapped(shape, move) for shape in [mainland, *islets]]
    land = shapely.union_all(coast, grid_size=SNAP_DEG)
    districts = district_shapes(seeds_of_districts(coast_rng, land), land, move)
    spots = (((-30, 12), (12, 6)), ((27, -22), (5, 9)), ((38, 21), (7, 4)))
    lakes = [snapped(blob(coast_rng, middle + at, size, 0.3), move) for at, size in spots]

    centroid = to_km(shapely.get_coordinates(shapely.centroid(districts)))
    spread = np.array([[-55, -25], [-35, 35], [5, -5], [45, -35], [50, 30]]) + middle
    zone = cdist(centroid, spread).argmin(axis=1)

    on_land = burn([land], 1) == 0
    coast_km = 0.92 * (distance_transform_edt(on_land) - distance_transform_edt(~on_land))
    x_km, y_km = pixel_xy_km()
    pixels = shapely.points(x_km.ravel(), y_km.ravel())
    water_km = [shapely.transform(lake, to_km) for lake in lakes]
    km_to_water = shapely.distance(pixels, shapely.union_all(water_km)).reshape(ROWS, COLUMNS)

    along = (x_km - middle[0]) * 0.82 - (y_km - middle[1]) * 0.57
    across = (x_km - middle[0]) * 0.57 + (y_km - middle[1]) * 0.82 + 7 * np.sin(along / 22)
    ridge = np.exp(-((across / 17) ** 2)) * (0.75 + 0.25 * smooth_noise(relief_rng, 6))
    hills = 0.30 + 0.16 * smooth_noise(relief_rng, 9) + 0.07 * smooth_noise(relief_rng, 2.5)
    rise = np.clip(coast_km / 30, 0, 1) ** 0.8 * (1 - 0.75 * np.exp(-km_to_water / 7))
    elevation = np.where(coast_km > 0, 2 + 1500 * rise * np.clip(0.8 * ridge + hills, 0.03, None), 0.0)
    soak = 0.9 - elevation / 420 + 1.3 * np.exp(-km_to_water / 8) + 0.9 * smooth_noise(relief_rng, 5)
    fine = burn(districts, 5)
    fine[burn(lakes, 5) >= 0] = -1
    return Province(
        districts, zone, lakes, fine, coast_km, km_to_water, np.round(elevation), np.round(expit(soak), 3)
    )


@dataclass(frozen=True)
class Settlements:
    """Villages and towns: position in degrees (n, 2), district index, inhabitants."""

    lonlat: Floats
    district: NDArray[np.intp]
    people: NDArray[np.int64]


def settle(rng: np.random.Generator, province: Province) -> Settlements:
    """Place settlements: more in low country, none closer than about 2.5 km to another."""
    home = province.district_at[2::5, 2::5]
    welcome = np.exp(-province.elevation / 450) * np.exp(0.5 * smooth_noise(rng, 5))
    welcome[(home < 0) | (province.coast_km < 1.2) | (province.km_to_water < 1.2)] = 0.0
    weight = np.array([welcome[home == d].sum() for d in range(DISTRICTS)])
    quota = 4 + np.floor((SETTLEMENTS - 4 * DISTRICTS) * weight / weight.sum()).astype(int)
    quota[np.argsort(-weight)[: SETTLEMENTS - quota.sum()]] += 1
    chosen: list[tuple[float, float]] = []
    owner: list[int] = []
    for d in range(DISTRICTS):
        rows, columns = np.nonzero((home == d) & (welcome > 0))
        # Sorting by exponential times is sampling without replacement with these weights.
        order = np.argsort(-np.log(uniform(rng, rows.size)) / welcome[rows, columns])
        offset = 0.2 + 0.6 * uniform(rng, rows.size, 2)
        found = 0
        for k in order:
            at = (columns[k] + offset[k, 0], rows[k] + offset[k, 1])
            if all(math.dist(at, other) > 2.7 for other in chosen):
                chosen.append(at)
                owner.append(d)
                found += 1
            if found == quota[d]:
                break
    at_px = np.array(chosen)
    lonlat = np.round(np.column_stack([WEST + at_px[:, 0] * PIXEL_DEG, NORTH - at_px[:, 1] * PIXEL_DEG]), 5)
    people = np.exp(7.2 + 0.75 * normal(rng, len(chosen)))
    people[np.argsort(-people)[:TOWNS]] *= 5.0
    return Settlements(lonlat, np.array(owner), np.maximum(150, np.round(people, -1)).astype(np.int64))


def count_children(rng: np.random.Generator, province: Province, villages: Settlements) -> Floats:
    """Spread children of 5 to 14 years around the settlements; high and marshy ground stays empty."""
    row, column = pixel_of(villages.lonlat)
    impulse = np.zeros((ROWS, COLUMNS))
    np.add.at(impulse, (row, column), 0.26 * villages.people)
    spread = 0.55 * gaussian_filter(impulse, 0.8) + 0.45 * gaussian_filter(impulse, 3.5)
    dry = (province.district_at >= 0).reshape(ROWS, 5, COLUMNS, 5).mean(axis=(1, 3))
    spread *= dry * np.exp(0.25 * smooth_noise(rng, 1.5))
    spread[(province.elevation > 1150) | (spread < 0.8)] = 0.0
    return np.round(spread, 1)
