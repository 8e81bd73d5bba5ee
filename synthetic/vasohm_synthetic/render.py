"""From a scene to a picture: exact profiles on a fine grid, joined, blurred, averaged over pixels; then the camera."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.ndimage import distance_transform_edt, gaussian_filter
from scipy.spatial import cKDTree

from vasohm_synthetic.arrays import BoolArray, FloatArray, IntArray
from vasohm_synthetic.backdrop import expose, illuminate
from vasohm_synthetic.errors import refuse
from vasohm_synthetic.optics import Optics, optics_problems
from vasohm_synthetic.profile import cell_mean, loses_light, smear_variance
from vasohm_synthetic.scene import Scene, Vessel

TILE_PX = 256  # memory is bounded by a tile's fine grid, whatever the picture's size
BLUR_REACH = 5.0  # the Gaussian is cut where 6e-7 of it is left
MAX_LOSS = 1.0 - 1e-9  # so that the density of lost light stays finite


@dataclass(frozen=True, slots=True)
class _Tile:
    """Part of the picture with a rim for the blur; pixel rows y..y+h, columns x..x+w."""

    x: int
    y: int
    w: int
    h: int


def render(scene: Scene, optics: Optics, rng: np.random.Generator) -> FloatArray:
    """Picture of a scene as the camera gives it, before digits.

    Returns
    -------
    FloatArray
        [y, x] or [y, x, colour], fraction of full scale; not cut to 0..1.

    Raises
    ------
    RecipeError
        When the optics are impossible.
    """
    refuse(optics_problems(optics))
    shade = illuminate(scene, optics.backdrop, rng)
    planes = []
    for channel, vessels in zip(optics.channels, render_vessels(scene, optics), strict=True):
        if optics.polarity == "bright":
            light = shade * (channel.background + vessels)
        else:
            light = shade * channel.background * vessels
        planes.append(expose(light, scene, optics.camera, rng))
    return planes[0] if len(planes) == 1 else np.stack(planes, axis=-1)


def render_vessels(scene: Scene, optics: Optics) -> tuple[FloatArray, ...]:
    """What the vessels alone do to the light, one plane [y, x] a channel, after blur and pixel, free of noise.

    Bright vessels: added light, 0 beside them. Dark ones: transmitted fraction, 1 beside them.
    """
    height, width = scene.shape
    planes = tuple(np.empty(scene.shape) for _ in optics.channels)
    trees = [cKDTree(np.column_stack((v.x_px, v.y_px))) for v in scene.vessels]
    rim = int(np.ceil(BLUR_REACH * optics.blur_px)) + 1
    for y in range(0, height, TILE_PX):
        for x in range(0, width, TILE_PX):
            h, w = min(TILE_PX, height - y), min(TILE_PX, width - x)
            tile = _Tile(x - rim, y - rim, w + 2 * rim, h + 2 * rim)
            for plane, fine in zip(planes, _fine_fields(scene, trees, tile, optics), strict=True):
                plane[y : y + h, x : x + w] = _develop(fine, optics)[rim : rim + h, rim : rim + w]
    return planes


def _develop(fine: FloatArray, optics: Optics) -> FloatArray:
    """Blur a fine field of P, average it over pixels and turn it into light."""
    n = optics.supersample
    if loses_light(optics):
        fine = np.exp(-fine)
    if optics.blur_px > 0:
        left = np.sqrt(optics.blur_px**2 - smear_variance(optics))
        fine = gaussian_filter(fine, left * n, mode="nearest", truncate=BLUR_REACH)
    pixels: FloatArray = fine.reshape(fine.shape[0] // n, n, fine.shape[1] // n, n).mean(axis=(1, 3))
    return np.exp(-pixels) if optics.polarity == "dark" and not loses_light(optics) else pixels


def _fine_fields(scene: Scene, trees: Sequence["cKDTree[Any, Any]"], tile: _Tile, optics: Optics) -> list[FloatArray]:
    """Profile P of all vessels on the tile's fine grid, one a channel: union within a layer, sum over layers."""
    n, degree = optics.supersample, scene.degree
    shape = (tile.h * n, tile.w * n)
    totals = [np.zeros(shape) for _ in optics.channels]
    for layer in sorted({vessel.layer for vessel in scene.vessels}):
        fields = [np.zeros(shape) for _ in optics.channels]
        for vessel, tree in zip(scene.vessels, trees, strict=True):
            if vessel.layer != layer:
                continue
            open_ends = (degree[vessel.node_a] == 1, degree[vessel.node_b] == 1)
            for cells in _cells(vessel, tree, tile, n, open_ends):
                for field, channel in zip(fields, optics.channels, strict=True):
                    gain = vessel.gain * channel.gains.get(vessel.vessel_class, 1.0)
                    value = cells.cover * cell_mean(cells.distance_px, cells.radius_px, cells.cosine, optics, gain)
                    np.maximum.at(field.reshape(-1), cells.index, value)
        for index, field in enumerate(fields):
            if loses_light(optics):
                field = -np.log1p(-np.minimum(field, MAX_LOSS))  # noqa: PLW2901  (the same field as density)
            totals[index] = _add(totals[index], field, optics)
    return totals


def _add(below: FloatArray, above: FloatArray, optics: Optics) -> FloatArray:
    """Join two layers: profiles add, but for an absorber the chords do."""
    if optics.profile == "absorber":
        return below + above - below * above / optics.contrast
    return below + above


@dataclass(frozen=True, slots=True, eq=False)
class _Cells:
    """Fine cells near one vessel."""

    index: IntArray  # into the tile's flattened fine grid
    distance_px: FloatArray  # from the axis
    radius_px: FloatArray  # of the lumen there
    cosine: FloatArray  # of the axis's angle with the rows
    cover: FloatArray  # share of the cell before the vessel's square-cut end


CHUNK = 400_000  # cells looked up at once


def _cells(
    vessel: Vessel, tree: "cKDTree[Any, Any]", tile: _Tile, n: int, open_ends: tuple[bool, bool]
) -> Iterator[_Cells]:
    """Find the fine cells that a vessel may touch, in chunks."""
    ys, xs = np.nonzero(_near_pixels(vessel, tile))
    if not len(ys):
        return
    sub = np.arange(n)
    rows = (ys[:, None, None] * n + sub[:, None]).repeat(n, axis=2).reshape(-1)
    columns = (xs[:, None, None] * n + sub).repeat(n, axis=1).reshape(-1)
    for start in range(0, len(rows), CHUNK):
        row, column = rows[start : start + CHUNK], columns[start : start + CHUNK]
        x = tile.x + (column + 0.5) / n - 0.5
        y = tile.y + (row + 0.5) / n - 0.5
        distance, radius, cosine, before_end = _project(vessel, tree, x, y, open_ends)
        hit = (distance < radius + 1.25 / n) & (before_end > -0.5 / n)
        yield _Cells(
            index=(row * (tile.w * n) + column)[hit],
            distance_px=distance[hit],
            radius_px=radius[hit],
            cosine=cosine[hit],
            cover=np.clip(0.5 + before_end[hit] * n, 0.0, 1.0),
        )


def _near_pixels(vessel: Vessel, tile: _Tile) -> BoolArray:
    """Pixels of the tile that a vessel may touch, [y, x]."""
    near = np.zeros((tile.h, tile.w), bool)
    reach = vessel.radius_px.max() + 2.0
    x, y = vessel.x_px - tile.x, vessel.y_px - tile.y
    inside = (x > -reach) & (x < tile.w + reach) & (y > -reach) & (y < tile.h + reach)
    if not inside.any():
        return near
    pad = int(np.ceil(reach)) + 1
    x0, x1 = int(max(x[inside].min(), 0)), int(min(x[inside].max() + 1, tile.w))
    y0, y1 = int(max(y[inside].min(), 0)), int(min(y[inside].max() + 1, tile.h))
    left, right = max(x0 - pad, 0), min(x1 + pad, tile.w)
    top, bottom = max(y0 - pad, 0), min(y1 + pad, tile.h)
    seeds = np.ones((bottom - top + 2 * pad, right - left + 2 * pad), bool)
    row = np.rint(y[inside] - top).astype(int) + pad
    column = np.rint(x[inside] - left).astype(int) + pad
    kept = (row >= 0) & (row < seeds.shape[0]) & (column >= 0) & (column < seeds.shape[1])
    seeds[row[kept], column[kept]] = False
    box = distance_transform_edt(seeds)[pad:-pad, pad:-pad] <= reach
    near[top:bottom, left:right] = box
    return near


def _project(
    vessel: Vessel, tree: "cKDTree[Any, Any]", x: FloatArray, y: FloatArray, open_ends: tuple[bool, bool]
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Distance of points from a vessel's axis, its radius and cosine there, and how far before an open end they lie."""
    last = len(vessel.x_px) - 1
    _, nearest = tree.query(np.column_stack((x, y)))
    nearest = np.asarray(nearest, np.int64)
    best = np.full(len(x), np.inf)
    radius, cosine = np.empty(len(x)), np.empty(len(x))
    before_end = np.full(len(x), np.inf)
    for piece in (np.maximum(nearest - 1, 0), np.minimum(nearest, last - 1)):
        ax, ay = vessel.x_px[piece], vessel.y_px[piece]
        dx, dy = vessel.x_px[piece + 1] - ax, vessel.y_px[piece + 1] - ay
        length2 = dx**2 + dy**2
        t = ((x - ax) * dx + (y - ay) * dy) / length2
        inside = np.clip(t, 0.0, 1.0)
        if open_ends[0]:
            first = piece == 0
            before_end[first] = np.minimum(before_end[first], (t * np.sqrt(length2))[first])
            inside = np.where(first & (t < 0), t, inside)
        if open_ends[1]:
            final = piece == last - 1
            before_end[final] = np.minimum(before_end[final], ((1.0 - t) * np.sqrt(length2))[final])
            inside = np.where(final & (t > 1), t, inside)
        distance = np.hypot(x - ax - inside * dx, y - ay - inside * dy)
        nearer = distance < best
        best = np.where(nearer, distance, best)
        clipped = np.clip(inside, 0.0, 1.0)
        here = vessel.radius_px[piece] * (1.0 - clipped) + vessel.radius_px[piece + 1] * clipped
        radius = np.where(nearer, here, radius)
        cosine = np.where(nearer, dx / np.sqrt(length2), cosine)
    return best, radius, cosine, before_end
