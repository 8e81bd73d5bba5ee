"""From a prepared picture to a vessel mask, by a registered method."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

import numpy as np

from vasohm.arrays import BoolArray, freeze
from vasohm.errors import ImageError, PluginError
from vasohm.image.blocks import Block, on_disk, release, working_blocks
from vasohm.image.prepare import PreparedImage, crop
from vasohm.image.segmenters import hessian, ridge
from vasohm.plugins import PluginKind, load_plugin, plugin_names, refuse_plugin

SAMPLED_BLOCKS = 5  # of a large picture that are asked for what all its blocks share
SAMPLED_PX = 1500  # edge of the piece of each that is looked at
FULL_SHARE = 0.98  # of the field: a mask that holds everything holds no vessel


@dataclass(frozen=True, slots=True)
class SegmentSettings:
    """Which method looks for vessels, of which radii, how strictly."""

    method: str
    radius_um: tuple[float, float]
    false_alarms_per_mpx: float  # pixels of false centreline that noise alone may give in a megapixel
    parameters: Mapping[str, float]  # a plug-in's own; empty for ours


@dataclass(frozen=True, slots=True, eq=False)
class VesselMask:
    """Where vessels are: bool (h, w)."""

    pixels: BoolArray
    source: str  # the method's name, or GIVEN

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True)
class Segmenter:
    """A method that finds vessels: `find(prepared, parameters) -> bool mask (h, w)`, and where it was published.

    A large picture is searched in blocks. `learn(prepared, parameters)` reads from one of them what all should share;
    the medians over some blocks are added to the parameters of `find`.
    """

    find: Callable[[PreparedImage, Mapping[str, float]], BoolArray]
    citation: str
    learn: Callable[[PreparedImage, Mapping[str, float]], Mapping[str, float]] | None = None


SEGMENTERS = {
    "ridge": Segmenter(ridge.segment_ridges, ridge.CITATION, ridge.learn_ridges),
    "hessian": Segmenter(hessian.segment_hessian, hessian.CITATION, hessian.learn_hessian),
}
MASK_METHOD = "mask"  # the sheet's mask_file
GIVEN = "mask_file"  # source of a mask made elsewhere
PLUGINS = PluginKind("vasohm.segmenters", "segmenter", (*SEGMENTERS, MASK_METHOD))


def segmenter_names() -> tuple[str, ...]:
    """Names that a study may give as `[segment] method`; plug-ins are named without being imported."""
    return plugin_names(PLUGINS)


def segment(prepared: PreparedImage, settings: SegmentSettings, given: BoolArray | None) -> VesselMask:
    """Find the vessels of a prepared picture.

    Parameters
    ----------
    prepared : the prepared picture.
    settings : the method and what it looks for.
    given : (h, w) bool mask made elsewhere; it is used instead of segmentation.

    Raises
    ------
    PluginError : the method is not registered, fails to load, or returns something else than a mask.
    ImageError : method "mask" without a mask, or a mask that covers the whole field of view.
    """
    if given is not None:
        inside: BoolArray = np.logical_and(given, prepared.fov)
        return _checked(inside, prepared, GIVEN)
    if settings.method == MASK_METHOD:
        msg = 'method = "mask" needs a mask_file in the image sheet for this image.'
        raise ImageError(msg)
    if not np.any(prepared.signal):
        return VesselMask(np.zeros(prepared.fov.shape, dtype=bool), settings.method)
    pixel = prepared.pixel_size_um
    parameters = {
        **settings.parameters,
        "radius_lo_px": settings.radius_um[0] / pixel,
        "radius_hi_px": settings.radius_um[1] / pixel,
        "false_alarms_per_mpx": settings.false_alarms_per_mpx,
    }
    segmenter = _checking(get_segmenter(settings.method), settings.method)
    find = _find_in_blocks if prepared.block_px else _find_at_once
    return _checked(find(prepared, segmenter, parameters), prepared, settings.method)


def _checking(segmenter: Segmenter, name: str) -> Segmenter:
    """Return the method with a look at what it returns, cut to the field of view."""

    def find(prepared: PreparedImage, parameters: Mapping[str, float]) -> BoolArray:
        mask = segmenter.find(prepared, parameters)
        if not isinstance(mask, np.ndarray) or mask.shape != prepared.fov.shape or mask.dtype != np.bool_:
            msg = f"segmenter {name!r} must return a bool array of shape {prepared.fov.shape}."
            raise PluginError(msg)
        return np.asarray(mask & prepared.fov, dtype=np.bool_)

    return replace(segmenter, find=find)


def _find_at_once(prepared: PreparedImage, segmenter: Segmenter, parameters: Mapping[str, float]) -> BoolArray:
    return segmenter.find(prepared, parameters)


def _find_in_blocks(prepared: PreparedImage, segmenter: Segmenter, parameters: Mapping[str, float]) -> BoolArray:
    """Search a large picture block by block, each with enough around it, with what some of them tell together."""
    blocks = working_blocks(prepared.fov.shape, prepared.block_px, parameters["radius_hi_px"])
    blocks = [block for block in blocks if prepared.fov[block.core].any()]
    release(prepared.fov)
    if segmenter.learn is not None:
        rank = np.linspace(0, len(blocks) - 1, min(len(blocks), SAMPLED_BLOCKS)).round().astype(int)
        told = [segmenter.learn(crop(prepared, _middle(blocks[k])), parameters) for k in rank]
        parameters = {**parameters, **{key: float(np.nanmedian([one[key] for one in told])) for key in told[0]}}
    mask: BoolArray = on_disk(prepared.fov.shape, np.bool_)
    for block in blocks:
        piece = crop(prepared, block.window)
        if np.any(piece.signal):
            mask[block.core] = segmenter.find(piece, parameters)[block.inner]
        release(mask)
    return mask


def _middle(block: Block) -> tuple[slice, slice]:
    """Window around the middle of a block, large enough to tell what is to be learnt."""
    rows, columns = (
        slice(
            max(part.start, (part.start + part.stop - SAMPLED_PX) // 2),
            min(part.stop, (part.start + part.stop + SAMPLED_PX) // 2),
        )
        for part in block.window
    )
    return rows, columns


def get_segmenter(name: str) -> Segmenter:
    """Look a segmenter up by name, importing a plug-in only now that a study asks for it.

    Raises
    ------
    PluginError : nobody has this name, two have it, or it fails to load; "mask" is none, the sheet gives it.
    """
    value = load_plugin(PLUGINS, name)
    if value is None and name in SEGMENTERS:
        return SEGMENTERS[name]
    if isinstance(value, Segmenter):
        return value
    if value is None:
        msg = f"{name!r} is the sheet's mask_file and no segmenter; there are {', '.join(SEGMENTERS)}."
        raise PluginError(msg)
    if not callable(value):
        raise refuse_plugin(PLUGINS, name, value, "a function or a Segmenter")
    return Segmenter(value, "no source given")


def _checked(mask: BoolArray, prepared: PreparedImage, source: str) -> VesselMask:
    share = mask.sum() / prepared.fov.sum()
    if share > FULL_SHARE:
        msg = f"the vessel mask covers {share:.0%} of the field of view: no background is left to measure against."
        raise ImageError(msg)
    return VesselMask(mask, source)
