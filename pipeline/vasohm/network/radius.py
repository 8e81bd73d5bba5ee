"""From a graph to a measured one: length, local radius and their uncertainty; micrometres from here on."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.flags import Flag
from vasohm.image.prepare import PreparedImage
from vasohm.network.graph import NodeKind, VesselGraph, shift_sideways
from vasohm.network.groups import median_by
from vasohm.network.lumen import leave_parents
from vasohm.network.lumenfit import DrawnCovariance, LumenFit, RadiusCovariance, RadiusSettings, fit_lumens
from vasohm.network.paths import arc_length, owner
from vasohm.uncertainty import quadrature

TIGHT_BEND_PX = 5.0  # bends tighter than this radius lose 6 to 19 % of their length to any smoother
BEND_WINDOW_PX = 4  # curvature is read over this many points to either side
SHORT_RADII = 2.0  # shorter than its own width
END_SE_PX = 0.4  # standard uncertainty of where a free end or a rim lies (measured on phantoms: 0.3 to 0.6)
NODE_SE_PX, NODE_SE_RADII = 0.5, 0.3  # and of where a branch begins, the larger the wider the widest vessel there is
SHARP_PX = 1.5  # a well sampled sharp picture has a blur of 0.5 to 1.5 px: that much is never out of focus
UNRESOLVED_SE = 0.25  # of ln r


@dataclass(frozen=True, slots=True, eq=False)
class MeasuredGraph:
    """A graph with its lumen radii. Random and shared parts of the doubt are kept apart.

    `shared` holds one column a cause that all segments have in common (blur, profile, contrast prior, plasma
    layer): the change of each point's ln r for one standard uncertainty of that cause; columns are independent.
    The pixel size is not among them. `noise_sign` is +1 where `radius_um` is the mode of a posterior of ln r
    (mean of r^-4 is above the mode's), -1 where it is an independent estimate (r^-4 of it is biased upwards).
    """

    graph: VesselGraph
    pixel_size_um: float
    pixel_size_rel_se: float  # NaN where not known
    s_um: FloatArray  # (n_points,) arc length from the segment's first point
    radius_um: FloatArray  # (n_points,)
    column: FloatArray  # (n_points,) share of each radius that was measured, the rest is a plasma layer; 1 without one
    ln_radius_random_se: FloatArray  # (n_points,)
    shared: FloatArray  # (n_points, n_causes)
    shared_causes: tuple[str, ...]
    covariance: RadiusCovariance
    noise_sign: int
    contrast: FloatArray  # (n_points,)
    point_flags: IntArray  # (n_points,)
    length_um: FloatArray  # (n_segments,)
    length_random_se_um: FloatArray
    chord_um: FloatArray
    segment_flags: IntArray  # (n_segments,)
    blur_px: float  # of the optics alone
    blur_se_px: float
    profile: str
    image_contrast: float  # median over the points, in units of the prepared signal; NaN without vessels
    flags: Flag  # of the image

    def __post_init__(self) -> None:
        freeze(self)


def measure_radii(graph: VesselGraph, prepared: PreparedImage, settings: RadiusSettings) -> MeasuredGraph:
    """Measure radius and length of every segment.

    Parameters
    ----------
    graph : refined centrelines that run into their nodes.
    prepared : the picture they were found in.
    settings : profile, blur and plasma layer, as far as the study says.

    Returns
    -------
    The measured graph; children begin where they leave their parent's lumen.
    """
    fit = fit_lumens(graph, prepared, settings)
    cut, kept = leave_parents(shift_sideways(graph, fit.offset_px), np.exp(fit.ln_radius))
    pixel = prepared.pixel_size_um
    s_px = arc_length(cut.x_px, cut.y_px, cut.offsets)
    length_px = s_px[cut.offsets[1:] - 1] if cut.n_segments else np.zeros(0)
    first, last = cut.offsets[:-1], cut.offsets[1:] - 1
    chord_px = np.hypot(cut.x_px[last] - cut.x_px[first], cut.y_px[last] - cut.y_px[first])
    radius_um = np.exp(fit.ln_radius[kept]) * pixel + settings.plasma_layer_um
    column = 1 - settings.plasma_layer_um / radius_um
    random_se, shared, causes = _with_plasma_layer(fit, kept, radius_um, column, settings)
    flags = fit.point_flags[kept]
    return MeasuredGraph(
        graph=cut,
        pixel_size_um=pixel,
        pixel_size_rel_se=prepared.pixel_size_se_um / pixel,
        s_um=s_px * pixel,
        radius_um=radius_um,
        column=column,
        ln_radius_random_se=random_se,
        shared=shared,
        shared_causes=causes,
        covariance=DrawnCovariance(fit.covariance, len(kept), np.nonzero(kept)[0], column),
        noise_sign=fit.noise_sign,
        contrast=fit.contrast[kept],
        point_flags=flags,
        length_um=length_px * pixel,
        length_random_se_um=length_se_px(cut, radius_um / pixel) * pixel,
        chord_um=chord_px * pixel,
        segment_flags=segment_flags(cut, flags, length_px, radius_um / pixel, quadrature(random_se, *shared.T)),
        blur_px=fit.blur_px,
        blur_se_px=fit.blur_se_px,
        profile=fit.profile,
        image_contrast=float(np.median(fit.contrast[kept])) if kept.any() else np.nan,
        flags=fit.flags | _focus(fit, settings, pixel),
    )


def length_se_px(graph: VesselGraph, radius_px: FloatArray) -> FloatArray:
    """Standard uncertainty (n_segments,) of the lengths, which is that of their two ends."""
    radius = median_by(owner(graph.offsets), radius_px, graph.n_segments)
    widest = np.zeros(graph.n_nodes)
    nodes = np.column_stack((graph.node_a, graph.node_b))
    np.maximum.at(widest, nodes, radius[:, None])
    at_branching = graph.node_kind[nodes] == NodeKind.BRANCHING
    end_se = np.where(at_branching, np.hypot(NODE_SE_PX, NODE_SE_RADII * widest[nodes]), END_SE_PX)
    return np.hypot(end_se[:, 0], end_se[:, 1])


def _focus(fit: LumenFit, settings: RadiusSettings, pixel_size_um: float) -> Flag:
    sharp_px = max(SHARP_PX, settings.least_radius_um / pixel_size_um)
    return Flag.OUT_OF_FOCUS if fit.blur_px > sharp_px else Flag.NONE


def _with_plasma_layer(
    fit: LumenFit, kept: BoolArray, radius_um: FloatArray, column: FloatArray, settings: RadiusSettings
) -> tuple[FloatArray, FloatArray, tuple[str, ...]]:
    """Relative doubt of the lumen from that of the red-cell column and of the layer around it."""
    random_se, shared, causes = fit.random_se[kept] * column, fit.shared[kept] * column[:, None], fit.shared_causes
    if settings.plasma_layer_se_um > 0:
        shared = np.column_stack((shared, settings.plasma_layer_se_um / radius_um))
        causes = (*causes, "plasma layer")
    return random_se, shared, causes


def segment_flags(
    graph: VesselGraph, point_flags: IntArray, length_px: FloatArray, radius_px: FloatArray, total_se: FloatArray
) -> IntArray:
    """What most of a segment's points say, and what its ends and its shape say."""
    n = graph.n_segments
    segment = owner(graph.offsets)
    counts = np.maximum(np.diff(graph.offsets), 1)
    flags = graph.segment_flags.copy()
    for flag in (Flag.FAINT, Flag.BLURRED, Flag.INFERRED, Flag.CLIPPED, Flag.UNRESOLVED):
        share = np.bincount(segment, (point_flags & flag) != 0, n) / counts
        flags[share > 0.5] |= flag
    mean_radius = np.bincount(segment, radius_px, n) / counts
    flags[length_px < SHORT_RADII * mean_radius] |= Flag.SHORT
    flags[np.bincount(segment, total_se, n) / counts > UNRESOLVED_SE] |= Flag.UNRESOLVED
    rim = (graph.node_kind[graph.node_a] == NodeKind.RIM) | (graph.node_kind[graph.node_b] == NodeKind.RIM)
    flags[rim] |= Flag.RIM
    flags[(graph.node_a == graph.node_b) & (graph.node_kind[graph.node_a] == NodeKind.BRANCHING)] |= Flag.SELF_LOOP
    flags[_tightest_bend(graph) < TIGHT_BEND_PX] |= Flag.TIGHT_BEND
    return flags


def _tightest_bend(graph: VesselGraph) -> FloatArray:
    """Smallest radius of curvature (n_segments,) of the smoothed centreline; infinite for a straight or tiny one."""
    tightest = np.full(graph.n_segments, np.inf)
    segment, step = owner(graph.offsets), BEND_WINDOW_PX
    middle = np.arange(step, graph.n_points - step)
    middle = middle[segment[middle - step] == segment[middle + step]]
    if len(middle) == 0:
        return tightest
    before = np.arctan2(graph.y_px[middle] - graph.y_px[middle - step], graph.x_px[middle] - graph.x_px[middle - step])
    after = np.arctan2(graph.y_px[middle + step] - graph.y_px[middle], graph.x_px[middle + step] - graph.x_px[middle])
    turn = np.abs(np.angle(np.exp(1j * (after - before))))
    np.minimum.at(tightest, segment[middle], step / np.maximum(turn, 1e-9))
    return tightest
