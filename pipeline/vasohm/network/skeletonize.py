"""From a vessel mask to centre lines one pixel wide."""

from dataclasses import dataclass

import numpy as np
from scipy import ndimage
from skimage import morphology

from vasohm.arrays import BoolArray, Float32Array, IntArray, freeze
from vasohm.image.blocks import on_disk, release, working_blocks
from vasohm.image.prepare import PreparedImage, crop
from vasohm.image.segment import GIVEN, VesselMask
from vasohm.network.attach import attach_ends
from vasohm.network.bridges import unseen_pixels
from vasohm.network.tracing import END, JUNCTION, Trace, trace


@dataclass(frozen=True, slots=True)
class SkeletonizeSettings:
    """Dead ends shorter than `spur_radii` x local radius + `spur_px` are taken for noise of the outline."""

    spur_radii: float
    spur_px: float


@dataclass(frozen=True, slots=True, eq=False)
class Skeleton:
    """Centre lines (h, w) bool and the distance from each pixel to the mask's outline (h, w)."""

    pixels: BoolArray
    distance_px: Float32Array

    def __post_init__(self) -> None:
        freeze(self)


WIDEST_PX = 40.0  # of the vessels of a large picture whose centre lines do not depend on how it is cut into blocks
PRUNING_ROUNDS = 3  # a spur on a spur needs a second look; more never changed a picture in trials


def skeletonize(mask: VesselMask, prepared: PreparedImage, settings: SkeletonizeSettings) -> Skeleton:
    """Thin the mask to centre lines (Zhang & Suen, Commun ACM 1984;27:236) and drop the spurs of its outline.

    Parameters
    ----------
    mask : where vessels are. One made elsewhere is taken at its word.
    prepared : the picture: its signal shows where a vessel goes on in a gap of a mask of ours, and where that mask
        bridges background or follows an edge.
    settings : how long a spur may be.
    """
    if prepared.block_px:
        return _in_blocks(mask, prepared, settings)
    distance = ndimage.distance_transform_edt(np.pad(mask.pixels, 1))[1:-1, 1:-1].astype(np.float32)
    pixels = _thin(mask.pixels, distance, settings)
    if mask.source == GIVEN:
        return Skeleton(pixels, distance)
    whole, distance = attach_ends(mask.pixels, trace(pixels), distance, prepared.signal)
    if whole is not mask.pixels:
        pixels = _thin(whole, distance, settings)
    traced = trace(pixels)
    unseen = unseen_pixels(traced, distance, prepared)
    if unseen.any():
        pixels = pixels.copy()
        pixels[traced.row[unseen], traced.column[unseen]] = False
        pixels = _pruned(pixels, distance, settings)
    return Skeleton(pixels, distance)


def _in_blocks(mask: VesselMask, prepared: PreparedImage, settings: SkeletonizeSettings) -> Skeleton:
    """Thin a large mask block by block: what a pixel becomes is settled within a few widths of its vessel."""
    shape = prepared.fov.shape
    pixels, distance = on_disk(shape, np.bool_), on_disk(shape, np.float32)
    for block in working_blocks(shape, prepared.block_px, WIDEST_PX):
        inside = np.array(mask.pixels[block.window])
        if inside.any():
            piece = skeletonize(VesselMask(inside, mask.source), crop(prepared, block.window), settings)
            pixels[block.core] = piece.pixels[block.inner]
            distance[block.core] = piece.distance_px[block.inner]
        release(mask.pixels, pixels, distance)
    return Skeleton(pixels, distance)


def _thin(mask: BoolArray, distance: Float32Array, settings: SkeletonizeSettings) -> BoolArray:
    return _pruned(morphology.skeletonize(mask.copy()), distance, settings)  # it refuses read-only arrays


def _pruned(pixels: BoolArray, distance: Float32Array, settings: SkeletonizeSettings) -> BoolArray:
    for _ in range(PRUNING_ROUNDS):
        spurs = _spurs(trace(pixels), distance, settings)
        if not len(spurs[0]):
            break
        pixels = pixels.copy()
        pixels[spurs] = False
        pixels = morphology.skeletonize(pixels)
    return pixels


def _spurs(traced: Trace, distance: Float32Array, settings: SkeletonizeSettings) -> tuple[IntArray, IntArray]:
    """Pixels of dead ends that are no longer than the vessel they stand on is wide."""
    kind_a, kind_b = traced.node_kind[traced.node_a], traced.node_kind[traced.node_b]
    dangling = ((kind_a == END) & (kind_b == JUNCTION)) | ((kind_a == JUNCTION) & (kind_b == END))
    junction = np.where(kind_a == JUNCTION, traced.node_a, traced.node_b)
    row = np.rint(traced.node_row[junction]).astype(np.int64)
    column = np.rint(traced.node_column[junction]).astype(np.int64)
    reach = settings.spur_radii * distance[row, column] + settings.spur_px
    spur = dangling & (np.diff(traced.offsets) < reach)
    points = np.repeat(spur, np.diff(traced.offsets))
    return traced.row[points], traced.column[points]
