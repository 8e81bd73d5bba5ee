"""The published baseline: a Hessian ridge filter with one threshold, for comparison."""

from collections.abc import Mapping

import numpy as np
from skimage import filters, morphology  # they load their parts at first use; the filters' take half a second

from vasohm.arrays import BoolArray, Float32Array
from vasohm.image.prepare import PreparedImage

CITATION = "Sato Y et al., Med Image Anal 1998;2:143-168, doi:10.1016/S1361-8415(98)80009-1"

MAD_TO_SD = 1 / 0.6744897501960817
LOW, HIGH = 4.0, 8.0  # in robust standard deviations of the filter's own response
LEAST_PX = 20
N_SCALES = 5
LARGEST_SIGMA_PX = 8.0


def segment_hessian(prepared: PreparedImage, parameters: Mapping[str, float]) -> BoolArray:
    """Find vessels with the Sato filter and hysteresis; parameters as in the default segmenter."""
    response = _response(prepared, parameters)
    middle, unit = (parameters.get(key, value) for key, value in _levels(response[prepared.fov]).items())
    level = (response - middle) / unit
    mask = filters.apply_hysteresis_threshold(np.where(prepared.fov, level, 0), LOW, HIGH)
    return np.asarray(morphology.remove_small_objects(mask, max_size=LEAST_PX), dtype=bool)


def learn_hessian(prepared: PreparedImage, parameters: Mapping[str, float]) -> Mapping[str, float]:
    """Read the level and the unit in which the filter's response is counted, for other blocks of the same picture."""
    return _levels(_response(prepared, parameters)[prepared.fov])


def _levels(inside: Float32Array) -> dict[str, float]:
    middle = float(np.median(inside))
    return {"hessian_middle": middle, "hessian_unit": MAD_TO_SD * float(np.median(np.abs(inside - middle))) or 1.0}


def _response(prepared: PreparedImage, parameters: Mapping[str, float]) -> Float32Array:
    even = prepared.signal / np.maximum(prepared.noise_sd, np.float32(1e-30))
    lowest = max(1.0, 0.6 * parameters["radius_lo_px"])
    highest = min(LARGEST_SIGMA_PX, max(lowest * 1.5, 0.6 * parameters["radius_hi_px"]))
    return np.asarray(filters.sato(even, sigmas=np.geomspace(lowest, highest, N_SCALES), black_ridges=False))
