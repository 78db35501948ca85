"""The map of the report page: shaded ground at screen scale, and lines in the picture's own coordinates."""

from __future__ import annotations

import base64
import math
import os
import warnings
from collections.abc import Sequence
from typing import Any

import numpy as np
import pyproj
import rasterio
import rasterio.warp
import shapely
from rasterio.crs import CRS as RasterCRS
from rasterio.errors import NotGeoreferencedWarning
from rasterio.io import MemoryFile
from rasterio.transform import Affine

from terrain2q.errors import InputError
from terrain2q.ground.layers import read_layer
from terrain2q.ground.terrain import Terrain
from terrain2q.output.folder import OutputFolder

LONG_SIDE = 10_000
"""Of the map in its own whole-numbered coordinates."""

_PIXELS = 1100
_TOLERANCE = 5.0
_CELLS_AT_ONCE = 24_000_000
_LIGHTEST, _DARKEST, _NO_GROUND = 252.0, 120.0, 244.0


class _Frame:
    """The part of the plane that the map shows, and the way from there to the picture."""

    def __init__(self, bounds: Sequence[float], crs: pyproj.CRS) -> None:
        left, bottom, right, top = bounds
        middle = 0.5 * (bottom + top)
        # degrees of longitude are shorter than those of latitude: draw them so
        self.squeeze = max(math.cos(math.radians(middle)), 0.01) if crs.is_geographic else 1.0
        width, height = (right - left) * self.squeeze, top - bottom
        margin = 0.05 * max(width, height, 1e-9)
        width, height = width + 2 * margin, height + 2 * margin
        wanted = min(max(height / width, 0.5), 1.05)
        width, height = max(width, height / wanted), max(height, width * wanted)
        centre = 0.5 * (left + right)
        self.left, self.right = centre - 0.5 * width / self.squeeze, centre + 0.5 * width / self.squeeze
        self.bottom, self.top = middle - 0.5 * height, middle + 0.5 * height
        self.scale = LONG_SIDE / max(width, height)
        self.width, self.height = round(width * self.scale), round(height * self.scale)
        self.crs = crs

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        return self.left, self.bottom, self.right, self.top

    def place(self, points: np.ndarray) -> np.ndarray:
        """Return points of the plane in the picture's coordinates, shape (n, 2)."""
        x = (points[:, 0] - self.left) * self.squeeze * self.scale
        return np.column_stack([x, (self.top - points[:, 1]) * self.scale])

    def bring(self, geometry: Any) -> Any:
        """Return a geometry, or an array of them, in the picture's coordinates and thinned."""
        moved = shapely.transform(shapely.force_2d(geometry), self.place)
        return shapely.simplify(moved, _TOLERANCE, preserve_topology=False)

    def metres(self) -> float:
        """Return ground metres in one unit of the picture, at its middle."""
        to_degrees = pyproj.Transformer.from_crs(self.crs, self.crs.geodetic_crs, always_xy=True)
        middle, reach = 0.5 * (self.bottom + self.top), 0.1 * (self.right - self.left)
        centre = 0.5 * (self.left + self.right)
        longitude, latitude = to_degrees.transform([centre - reach, centre + reach], [middle, middle])
        length = self.crs.get_geod().inv(longitude[0], latitude[0], longitude[1], latitude[1])[2]
        return length / (2 * reach * self.squeeze * self.scale)


def make_map(source: OutputFolder) -> dict[str, Any]:
    """Return the map: its size, lines, streams, extents, crossings, the shaded ground and notes.

    What is not there is left out, and ``notes`` says so where it should have been.
    """
    out: dict[str, Any] = {
        "width": 0, "height": 0, "lines": [], "streams": [], "extents": [], "low": [], "crossings": [],
        "bar": None, "hillshade": None, "notes": [],
    }  # fmt: skip
    frame = _frame(source)
    if frame is None:
        out["notes"].append("There is no map: no section has a place.")
        return out
    out["width"], out["height"] = frame.width, frame.height
    out["lines"] = _cut_lines(source, frame)
    out["streams"] = _streams(source, frame, out["notes"])
    out["extents"] = _areas(source, "flood_extent", frame)
    out["low"] = _areas(source, "low_not_joined", frame)
    out["crossings"] = _points(source, frame)
    out["bar"] = _scale_bar(source, frame)
    out["hillshade"] = _hillshade(source, frame, out["notes"])
    return out


def _frame(source: OutputFolder) -> _Frame | None:
    boxes = []
    for name in ("sections", "flood_extent", "crossings"):
        table = source.layers.get(name)
        if table is not None and "geometry" in table:
            found = shapely.bounds(np.asarray(table["geometry"], dtype=object))
            boxes.append(found[np.isfinite(found).all(axis=1)])
    boxes = np.concatenate(boxes) if boxes else np.zeros((0, 4))
    if not len(boxes):
        return None
    return _Frame([*boxes[:, :2].min(axis=0), *boxes[:, 2:].max(axis=0)], source.crs)


def path_text(geometry: Any) -> str:
    """Return the path of lines or polygons in SVG's words, in whole numbers.

    Examples
    --------
    >>> path_text(shapely.LineString([(0, 0), (10, 4), (10, 9)]))
    'M0 0l10 4 0 5'
    """
    text = []
    for part in shapely.get_parts(geometry):
        is_area = shapely.get_type_id(part) == 3
        rings = [shapely.get_exterior_ring(part), *part.interiors] if is_area else [part]
        for ring in rings:
            points = np.round(shapely.get_coordinates(ring)).astype(int)
            steps = np.diff(points, axis=0)
            steps = steps[(steps != 0).any(axis=1)]
            if not len(steps):
                continue
            if is_area:
                steps = steps[:-1]
            words = " ".join(f"{x} {y}" for x, y in steps)
            text.append(f"M{points[0][0]} {points[0][1]}l{words}{'z' if is_area else ''}")
    return "".join(text)


def _cut_lines(source: OutputFolder, frame: _Frame) -> list[dict]:
    """Return each line that has a place, with its number among the sections and its wetted parts."""
    table, stages = source.layers["sections"], source.layers.get("design_stages")
    wet: dict[tuple[str, str], str] = {}
    if stages is not None and "geometry" in stages:
        for name, event, geometry in zip(
            stages["section_id"], stages["event"], stages["geometry"], strict=True
        ):
            if geometry is not None and not shapely.is_empty(geometry):
                wet[name, event] = path_text(frame.bring(geometry))
    out = []
    for i, (name, geometry) in enumerate(zip(table["section_id"], table["geometry"], strict=True)):
        if geometry is None or shapely.is_empty(geometry):
            continue
        line = frame.bring(geometry)
        ends = np.round(shapely.get_coordinates(line)[[0, -1]]).astype(int).ravel().tolist()
        out.append({
            "section": i, "d": path_text(line), "ends": ends,
            "wet": [wet.get((name, event), "") for event in source.events],
        })  # fmt: skip
    return out


def _streams(source: OutputFolder, frame: _Frame, notes: list[str]) -> list[dict]:
    asked = source.settings.get("streams")
    if not asked:
        return []
    try:
        table = read_layer(
            asked["path"],
            purpose="streams",
            geometry="line",
            crs=source.crs,
            id_field=asked.get("id_field"),
            repeated_ids=True,
        )
    except InputError as error:
        notes.append(f"The map has no streams: {error.what}.")
        return []
    box = shapely.box(*frame.bounds)
    out = []
    for name, geometry in zip(table["feature_id"], table.geometry, strict=True):
        if geometry is None or not np.isfinite(shapely.bounds(geometry)).all():
            continue
        inside = shapely.intersection(shapely.force_2d(geometry), box)
        parts = [p for p in shapely.get_parts(inside) if shapely.get_type_id(p) == 1]
        if parts:
            out.append({"name": str(name), "d": path_text(frame.bring(shapely.multilinestrings(parts)))})
    return out


def _areas(source: OutputFolder, layer: str, frame: _Frame) -> list[str]:
    """Return the outline at each event, empty where the layer has none; no list where there is no layer."""
    table = source.layers.get(layer)
    if table is None or not len(table):
        return []
    found = dict(zip(table["event"], table["geometry"], strict=True))
    out = []
    for event in source.events:
        geometry = found.get(event)
        if geometry is None:
            out.append("")
            continue
        parts = shapely.get_parts(frame.bring(geometry))
        parts = parts[(shapely.get_type_id(parts) == 3) & (shapely.area(parts) > 4 * _TOLERANCE**2)]
        out.append("".join(path_text(part) for part in parts))
    return out


def _points(source: OutputFolder, frame: _Frame) -> list[dict]:
    table = source.layers.get("crossings")
    if table is None or "geometry" not in table:
        return []
    out = {}
    for name, geometry in zip(table["crossing_id"], table["geometry"], strict=True):
        if geometry is not None and not shapely.is_empty(geometry) and name not in out:
            x, y = np.round(frame.place(shapely.get_coordinates(geometry))[0]).astype(int).tolist()
            out[name] = {"id": name, "x": x, "y": y}
    return list(out.values())


def _scale_bar(source: OutputFolder, frame: _Frame) -> dict | None:
    """Return a round length, in words, and how long it is on the map."""
    unit = source.units.symbol("length")
    ground = frame.metres() * source.units.per_si("length")
    if not math.isfinite(ground) or ground <= 0:
        return None
    about = 0.22 * frame.width * ground
    power = 10.0 ** math.floor(math.log10(about))
    length = max(step * power for step in (1, 2, 5) if step * power <= about)
    return {"length": round(length / ground), "text": f"{length:g} {unit}"}


# --------------------------------------------------------------------------------------------------
# Shaded ground


def _hillshade(source: OutputFolder, frame: _Frame, notes: list[str]) -> str | None:
    """Return the shaded ground as a data address, None where the terrain cannot be had."""
    asked = source.settings.get("terrain", {})
    paths = asked.get("dem") or ()
    paths = [paths] if isinstance(paths, str) else list(paths)
    if not paths:
        notes.append("The map is plain: the terrain is not known.")
        return None
    try:
        terrain = Terrain(paths if len(paths) > 1 else paths[0], elevation_unit=asked.get("elevation_unit"))
        shades = _shades(terrain, frame)
    except InputError as error:
        notes.append(f"The map is plain, without the shape of the ground: {error.what}.")
        return None
    if shades is None:
        notes.append("The map is plain: the terrain has no ground here, or too much of it to be shaded.")
        return None
    recorded = {e["path"]: e["bytes"] for e in source.record.get("inputs", ()) if e["key"] == "terrain.dem"}
    if any(os.path.isfile(path) and os.path.getsize(path) != recorded.get(path) for path in paths):
        notes.append("The terrain has changed since the run; the shape of the ground is today’s.")
    return _picture(shades)


def _shades(terrain: Terrain, frame: _Frame) -> np.ndarray | None:
    """Return light and shade at screen scale, bytes of shape (rows, columns)."""
    grid = _PIXELS / max(frame.width, frame.height)
    width, height = max(round(frame.width * grid), 2), max(round(frame.height * grid), 2)
    there = rasterio.warp.transform_bounds(
        _raster_crs(frame.crs), _raster_crs(terrain.crs), *frame.bounds, densify_pts=21
    )
    coarse = _coarse(terrain, there)
    if coarse is None:
        return None
    ground = np.full((height, width), np.nan, dtype=np.float32)
    rasterio.warp.reproject(
        coarse[0], ground, src_transform=coarse[1], src_crs=_raster_crs(terrain.crs), src_nodata=np.nan,
        dst_transform=_grid(frame, width, height), dst_crs=_raster_crs(frame.crs),
        dst_nodata=np.nan, resampling=rasterio.warp.Resampling.bilinear,
    )  # fmt: skip
    return shade(ground, frame.metres() / grid)


def _grid(frame: _Frame, columns: int, rows: int) -> Affine:
    across, down = (frame.right - frame.left) / columns, (frame.top - frame.bottom) / rows
    return Affine(across, 0.0, frame.left, 0.0, -down, frame.top)


def _coarser(transform: Affine, step: int) -> Affine:
    a, b, c, d, e, f = transform[:6]
    return Affine(a * step, b * step, c, d * step, e * step, f)


def _raster_crs(crs: pyproj.CRS) -> RasterCRS:
    return RasterCRS.from_wkt(crs.to_wkt())


def _coarse(terrain: Terrain, bounds: Sequence[float]) -> tuple[np.ndarray, Affine] | None:
    """Return the terrain about some bounds at about screen scale, however many cells it has there."""
    a, b, _, d, e, _ = terrain.transform[:6]
    left, bottom, right, top = (
        max(bounds[0], terrain.bounds[0]), max(bounds[1], terrain.bounds[1]),
        min(bounds[2], terrain.bounds[2]), min(bounds[3], terrain.bounds[3]),
    )  # fmt: skip
    if left >= right or bottom >= top:
        return None
    columns, rows = (right - left) / math.hypot(a, d), (top - bottom) / math.hypot(b, e)
    step = max(int(max(columns, rows) / _PIXELS), 1)
    if columns * rows <= _CELLS_AT_ONCE:
        cells, transform = terrain.read_window((left, bottom, right, top), np.float32)
        return (block_means(cells, step), _coarser(transform, step)) if cells.size else None
    if b or d:
        return None  # strips of a turned raster overlap
    # strips from the first row on, each of whole blocks, so that means do not depend on the strips
    height = step * max(int(_CELLS_AT_ONCE / columns / step), 1)
    first = (
        math.floor((top - terrain.transform.f) / e)
        if e < 0
        else math.floor((bottom - terrain.transform.f) / e)
    )
    strips, transform = [], None
    for row in range(first, first + math.ceil(rows) + 1, height):
        edges = sorted(terrain.transform.f + e * r for r in (row, min(row + height, terrain.height)))
        cells, place = terrain.read_window((left, edges[0], right, edges[1]), np.float32)
        if cells.size:
            transform = transform or place
            strips.append(block_means(cells, step))
    return (np.concatenate(strips), _coarser(transform, step)) if strips else None


def block_means(cells: np.ndarray, step: int) -> np.ndarray:
    """Return means over blocks of `step` by `step` cells, gaps left out; NaN where a block is all gap.

    Examples
    --------
    >>> block_means(np.array([[1.0, 3.0, 5.0], [np.nan, 5.0, 7.0]]), 2)
    array([[3., 6.]])
    """
    if step == 1:
        return cells
    rows, columns = (-(-n // step) for n in cells.shape)
    whole = np.full((rows * step, columns * step), np.nan, dtype=cells.dtype)
    whole[: cells.shape[0], : cells.shape[1]] = cells
    blocks = whole.reshape(rows, step, columns, step)
    known = np.isfinite(blocks)
    total = np.where(known, blocks, 0).sum(axis=(1, 3))
    count = known.sum(axis=(1, 3))
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def shade(ground: np.ndarray, cell: float) -> np.ndarray | None:
    """Return light and shade of the ground, pale so that lines stand out; even where there is no ground.

    Light comes mostly from the north-west, which people read as above, and a little from the west and the
    north, so that no slope is lost. Flat valleys are drawn steeper than they are.

    Parameters
    ----------
    ground : ndarray, shape (rows, columns)
        Metres, the first row in the north.
    cell : float
        Metres from one to the next.
    """
    known = np.isfinite(ground)
    if not known.any() or min(ground.shape) < 2:
        return None
    filled = np.where(known, ground, np.float32(np.nanmean(ground)))
    down, east = np.gradient(filled, cell)
    inner = known & (np.hypot(east, down) < 20)
    usual = float(np.percentile(np.hypot(east, down)[inner], 85)) if inner.any() else 0.0
    steeper = min(max(0.45 / max(usual, 1e-6), 1.0), 12.0)
    east, north = east * steeper, -down * steeper
    length = np.sqrt(1.0 + east**2 + north**2)
    light = np.zeros(ground.shape)
    for azimuth, weight in ((315.0, 0.6), (270.0, 0.2), (0.0, 0.2)):
        toward = math.radians(azimuth)
        flat = -(east * math.sin(toward) + north * math.cos(toward))
        light += weight * np.clip((flat * math.cos(math.pi / 4) + math.sin(math.pi / 4)) / length, 0.0, 1.0)
    shades = _DARKEST + (_LIGHTEST - _DARKEST) * light
    return np.where(known, shades, _NO_GROUND).astype(np.uint8)


def _picture(shades: np.ndarray) -> str:
    """Return a picture as a data address of about half a megabyte at most."""
    for quality in (82, 65, 45, 25):
        with warnings.catch_warnings(), MemoryFile() as memory:
            warnings.simplefilter("ignore", NotGeoreferencedWarning)
            rows, columns = shades.shape
            with memory.open(
                driver="JPEG", width=columns, height=rows, count=1, dtype="uint8", quality=quality
            ) as target:
                target.write(shades, 1)
            raw = memory.read()
        if len(raw) < 400_000:
            break
    return "data:image/jpeg;base64," + base64.b64encode(raw).decode()
