"""Radius from the half-height width of averaged cross-profiles, with what it costs: the simple estimate."""

from dataclasses import dataclass

import numpy as np
from scipy import ndimage

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.image.prepare import PreparedImage
from vasohm.network.centreline import half_widths
from vasohm.network.graph import VesselGraph
from vasohm.network.lumenfit import LumenFit, RadiusSettings
from vasohm.network.paths import offsets_of, owner, position, running_median, smooth, tangents

WINDOW_PX = 7  # profiles averaged along the vessel: the length over which one radius's noise is shared
# Half-height width over true width: 1 for a slab, sqrt(3)/2 for a projected cylinder. Until the image tells which, the
# middle is taken and half the distance between both is a standard uncertainty shared by all vessels.
PROFILE_FACTOR = {"slab": 1.0, "cylinder": np.sqrt(3) / 2, "absorber": np.sqrt(3) / 2, "auto": (1 + np.sqrt(3) / 2) / 2}
PROFILE_LN_SE = np.log(2 / np.sqrt(3)) / 2
EDGE_PX = 3.0  # contrast over slope of an edge under the usual blur of about 1 px
QUANTISATION_PX = 0.05  # error of the interpolated half-height crossing on a noise-free tube
FAINT_SNR = 3.0


@dataclass(frozen=True, slots=True, eq=False)
class MovingWindowCovariance:
    """Random errors of means over a moving window: neighbours closer than the window share their noise."""

    offsets: IntArray
    se: FloatArray  # (n_points,) of ln r
    window: int

    def __post_init__(self) -> None:
        freeze(self)

    def segment_variance(self, gradient: FloatArray) -> FloatArray:
        """Variance (n_segments,) of sum(gradient * ln r) over each segment's points; gradient is (n_points,)."""
        counts = np.diff(self.offsets)
        padded = offsets_of(counts + 2 * self.window)
        inner = position(padded) - self.window
        values = np.zeros(padded[-1])
        values[(inner >= 0) & (inner < counts[owner(padded)])] = gradient * self.se
        shared = ndimage.uniform_filter1d(values, self.window) * self.window
        return np.bincount(owner(padded), shared**2, minlength=len(counts)) / self.window


def fit_half_heights(graph: VesselGraph, prepared: PreparedImage, settings: RadiusSettings) -> LumenFit:
    """Measure half-height widths along each segment.

    Notes
    -----
    The width of a blurred tube approaches the blur's own as the tube gets thin: vessels below about twice the blur are
    too wide here. Noise moves an edge by noise / slope; the slope is taken as contrast / (2 x edge width).
    """
    signal = ndimage.gaussian_filter(prepared.signal, 0.7, mode="nearest")
    tx, ty = tangents(smooth(graph.x_px, graph.offsets, 2.0), smooth(graph.y_px, graph.offsets, 2.0), graph.offsets)
    left, right = half_widths(
        signal, (graph.x_px, graph.y_px), (-ty, tx), (smooth(graph.seed_radius_px, graph.offsets, 2.0), graph.offsets)
    )
    width = np.minimum((left + right) / 2, 1.3 * np.minimum(left, right) + 0.5)
    width = smooth(running_median(width, graph.offsets, WINDOW_PX), graph.offsets, WINDOW_PX / 4)
    radius = np.maximum(width, 0.5) / PROFILE_FACTOR[settings.profile]
    at = (np.rint(graph.y_px).astype(np.int64), np.rint(graph.x_px).astype(np.int64))
    row, column = np.clip(at[0], 0, graph.shape[0] - 1), np.clip(at[1], 0, graph.shape[1] - 1)
    contrast = np.maximum(smooth(signal[row, column].astype(np.float64), graph.offsets, 2.0), 1e-12)
    noise = prepared.noise_sd[row, column].astype(np.float64)
    edge = EDGE_PX * noise / contrast / np.sqrt(WINDOW_PX) / np.sqrt(2)
    se = np.minimum(np.hypot(edge, QUANTISATION_PX) / radius, 1.0)
    causes = [np.full(graph.n_points, PROFILE_LN_SE)] if settings.profile == "auto" else []
    flags = np.where(contrast < FAINT_SNR * noise, Flag.FAINT, Flag.NONE)
    return LumenFit(
        ln_radius=np.log(radius), random_se=se, contrast=contrast, point_flags=flags.astype(np.int64),
        shared=np.column_stack(causes) if causes else np.zeros((graph.n_points, 0)),
        shared_causes=("profile",) if causes else (),
        covariance=MovingWindowCovariance(graph.offsets, se, WINDOW_PX), noise_sign=-1, blur_px=np.nan,
        profile=settings.profile, flags=Flag.PROFILE_ASSUMED if causes else Flag.NONE,
    )  # fmt: skip
