"""From a graph and its picture to lumen radii in pixels: what the fit of tubes is told, and what it hands over."""

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from vasohm.arrays import FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.image.prepare import PreparedImage
from vasohm.network.graph import NodeKind, VesselGraph
from vasohm.network.grouped import fit_in_groups
from vasohm.network.learn import TubeSettings
from vasohm.network.paths import offsets_of, owner, position
from vasohm.network.strips import TubeLines
from vasohm.network.tubes import TubeImage, fit_tubes

TIP_PX = 5  # beside a vessel's end, blur mixes vessel and background along it: no tube is imaged there


@dataclass(frozen=True, slots=True)
class RadiusSettings:
    """How a tube is imaged, as far as the study says."""

    profile: str  # auto | slab | cylinder | absorber
    blur_px: float | None  # None: the image tells
    plasma_layer_um: float  # added to the radius of a red-cell column
    plasma_layer_se_um: float
    least_radius_um: float  # thinnest vessels asked for: tells what blur is out of focus


class RadiusCovariance(Protocol):
    """What is known of the random errors of ln r along each segment."""

    def segment_variance(self, gradient: FloatArray) -> FloatArray:
        """Variance (n_segments,) of sum(gradient * ln r) over each segment's points; gradient is (n_points,)."""
        ...


@dataclass(frozen=True, slots=True, eq=False)
class LumenFit:
    """Lumen radii along a graph, in pixels; `noise_sign`, `shared` and `covariance` as in `MeasuredGraph`."""

    ln_radius: FloatArray  # (n_points,)
    random_se: FloatArray  # (n_points,) of ln r
    offset_px: FloatArray  # (n_points,) of the axis from the given centreline, along (-dy, dx)
    contrast: FloatArray  # (n_points,)
    point_flags: IntArray  # (n_points,)
    shared: FloatArray  # (n_points, n_causes)
    shared_causes: tuple[str, ...]
    covariance: RadiusCovariance
    noise_sign: int
    blur_px: float  # NaN where it is not known
    blur_se_px: float
    profile: str
    flags: Flag  # of the image

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class DrawnCovariance:
    """The covariance of points each of which takes its ln r, times a weight, from one point of a fit."""

    whole: RadiusCovariance
    n_fitted: int
    source: IntArray  # (n_points,) the fitted point each was drawn from
    weight: FloatArray  # (n_points,)

    def segment_variance(self, gradient: FloatArray) -> FloatArray:
        """Variance (n_segments,) of sum(gradient * ln r) over each segment's points; gradient is (n_points,)."""
        return self.whole.segment_variance(np.bincount(self.source, gradient * self.weight, self.n_fitted))


def fit_lumens(graph: VesselGraph, prepared: PreparedImage, settings: RadiusSettings) -> LumenFit:
    """Fit how tubes are imaged to the picture along all segments.

    The last points before a free end are left out of the fit and take the radius of the nearest point in it.
    """
    fitted, offsets = _away_from_ends(graph)
    image = TubeImage(prepared.signal, prepared.noise_sd, prepared.fov, prepared.clipped)
    lines = TubeLines(
        graph.x_px[fitted],
        graph.y_px[fitted],
        offsets,
        graph.seed_radius_px[fitted],
        graph.vessel_class,
        graph.node_a,
        graph.node_b,
    )
    asked = TubeSettings(settings.profile, settings.blur_px, dark=prepared.polarity == "dark")
    covariance: RadiusCovariance
    if prepared.block_px:
        found, covariance = fit_in_groups(image, lines, asked)
    else:
        found = fit_tubes(image, lines, asked)
        covariance = found.covariance
    source = np.searchsorted(fitted, np.arange(graph.n_points))
    segment = owner(graph.offsets)
    source = np.clip(source, offsets[segment], offsets[segment + 1] - 1)
    outside = fitted[source] != np.arange(graph.n_points)
    return LumenFit(
        ln_radius=found.ln_radius[source],
        random_se=found.ln_radius_random_se[source],
        offset_px=np.where(outside, 0.0, found.offset_px[source]),
        contrast=found.contrast[source],
        point_flags=found.point_flags[source] | np.where(outside, int(Flag.INFERRED), 0),
        shared=found.shared[source],
        shared_causes=found.shared_causes,
        covariance=DrawnCovariance(covariance, len(fitted), source, np.ones(graph.n_points)),
        noise_sign=1,
        blur_px=found.blur_px,
        blur_se_px=found.blur_se_px,
        profile=found.profile,
        flags=found.flags,
    )


def _away_from_ends(graph: VesselGraph) -> tuple[IntArray, IntArray]:
    """Points of the fit, and the offsets of the segments among them; a short segment keeps its middle half."""
    count = np.diff(graph.offsets)[:, None]
    is_end = graph.node_kind[np.column_stack((graph.node_a, graph.node_b))] == NodeKind.END
    tip = np.minimum(np.where(is_end, TIP_PX, 0), (count - 1) // 4)
    segment, k = owner(graph.offsets), position(graph.offsets)
    inside = (k >= tip[segment, 0]) & (count[segment, 0] - 1 - k >= tip[segment, 1])
    return np.nonzero(inside)[0], offsets_of(np.bincount(segment[inside], minlength=graph.n_segments))
