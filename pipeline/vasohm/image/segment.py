"""From a prepared picture to a vessel mask, by a registered method."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, freeze
from vasohm.errors import ImageError, PluginError
from vasohm.image.prepare import PreparedImage
from vasohm.image.segmenters import hessian, ridge
from vasohm.plugins import PluginKind, load_plugin, plugin_names, refuse_plugin

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
    """A method that finds vessels: `find(prepared, parameters) -> bool mask (h, w)`, and where it was published."""

    find: Callable[[PreparedImage, Mapping[str, float]], BoolArray]
    citation: str


SEGMENTERS = {
    "ridge": Segmenter(ridge.segment_ridges, ridge.CITATION),
    "hessian": Segmenter(hessian.segment_hessian, hessian.CITATION),
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
        return _checked(given & prepared.fov, prepared, GIVEN)
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
    mask = get_segmenter(settings.method).find(prepared, parameters)
    if not isinstance(mask, np.ndarray) or mask.shape != prepared.fov.shape or mask.dtype != np.bool_:
        msg = f"segmenter {settings.method!r} must return a bool array of shape {prepared.fov.shape}."
        raise PluginError(msg)
    return _checked(mask & prepared.fov, prepared, settings.method)


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
