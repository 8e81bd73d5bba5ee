"""Shape of segments, branchings, networks and the whole image."""

from dataclasses import dataclass
from typing import Literal

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.image.disc import OpticDisc
from vasohm.network.along import arc_shares
from vasohm.network.branchings import Branchings, find_branchings
from vasohm.network.calibre_equivalents import Equivalents, find_equivalents
from vasohm.network.classed import (
    ClassShape,
    GroupShape,
    SegmentShapes,
    describe_classes,
    seen_lengths,
    summarise,
)
from vasohm.network.densities import Filling, describe_filling
from vasohm.network.graph import label_networks
from vasohm.network.groups import mean_by, sum_by
from vasohm.network.orders import Orders, Rooting, find_orders
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph
from vasohm.network.tortuosity import Curves, describe_curves


@dataclass(frozen=True, slots=True)
class ShapeSettings:
    """The optic disc, where calibre equivalents are measured, by which formula; limits between classes of calibre."""

    zone_dd: tuple[float, float]  # disc diameters from the disc's margin
    calibre_formula: str  # knudtson | parr-hubbard
    calibre_um: tuple[float, ...]  # radii, ascending
    disc: Literal["find", "none"]  # whether a disc that the sheet does not tell is looked for


@dataclass(frozen=True, slots=True, eq=False)
class Surroundings:
    """What shape is read against: the picture, and what flow knows of the graph."""

    vessels: BoolArray  # (h, w) the mask
    fov: BoolArray  # (h, w)
    disc: OpticDisc | None
    role: IntArray  # (n_nodes,) +1 inlet, -1 outlet, 0 neither
    flow_nl_min: FloatArray  # (n_segments,) from node_a to node_b, NaN where not known
    resistance_pa_s_m3: FloatArray  # (n_segments,)
    ln_resistance_random_se: FloatArray  # (n_segments,)
    ln_resistance_shared_se: FloatArray

    def __post_init__(self) -> None:
        freeze(self)


@dataclass(frozen=True, slots=True, eq=False)
class Morphometry:
    """Geometry in numbers; lengths and areas in micrometres."""

    branchings: Branchings
    curves: Curves
    orders: Orders
    # segments
    radius_mean_um: FloatArray  # (n_segments,)
    radius_sd_um: FloatArray  # measurement noise taken out
    tortuosity: FloatArray
    # networks (index as in node_network)
    node_network: IntArray
    segment_network: IntArray
    network_length_um: FloatArray
    network_area_um2: FloatArray
    network_volume_um3: FloatArray
    network_loops: IntArray
    # the image
    fov_area_um2: float
    vessel_area_um2: float
    length_um: float
    whole: GroupShape
    filling: Filling
    classes: tuple[ClassShape, ...]
    disc: OpticDisc | None
    equivalents: Equivalents | None  # None without an optic disc

    def __post_init__(self) -> None:
        freeze(self)


def describe_shape(measured: MeasuredGraph, around: Surroundings, settings: ShapeSettings) -> Morphometry:
    """Measure the shape of segments, branchings, networks and the image.

    Parameters
    ----------
    measured : MeasuredGraph
        Centrelines and radii.
    around : Surroundings
        Vessel pixels, field of view (areas and boxes count inside it alone), optic disc, and the flow where known.
    settings : ShapeSettings
        Zone, formula, classes of calibre.

    Returns
    -------
    Morphometry

    Notes
    -----
    `radius_mean_um` weighs the points by arc length. `radius_sd_um` is r times the spread of ln r along the segment
    with the measurement's part taken out: independent estimates scatter more than the vessel does, by the mean variance
    of a point less that of the segment's mean; a posterior's mode scatters less, by the same amount.
    `tortuosity` is arc over chord, NaN for closed rings. A network's area is ∫ 2 r ds, its volume ∫ π r² ds, its loops
    segments - nodes + 1. The rest: see `find_branchings`, `describe_curves`, `find_orders`, `describe_filling`,
    `describe_classes`, `find_equivalents`.
    """
    graph, n = measured.graph, measured.graph.n_segments
    segment, share = owner(graph.offsets), arc_shares(measured)
    node_network, segment_network = label_networks(graph)
    n_networks = int(segment_network.max(initial=-1)) + 1
    length = measured.length_um
    radius_mean = mean_by(segment, measured.radius_um, share, n)
    mean_square = mean_by(segment, np.square(measured.radius_um), share, n)
    is_open = (graph.node_a != graph.node_b) & (measured.chord_um > 0)
    tortuosity = np.divide(length, measured.chord_um, out=np.full(n, np.nan), where=is_open)
    pixel_um2 = measured.pixel_size_um**2
    edges = np.bincount(segment_network, minlength=n_networks)
    curves = describe_curves(measured)
    shapes = SegmentShapes(radius_mean, tortuosity, curves, seen_lengths(measured, around.fov))
    doubt = (around.ln_resistance_random_se, around.ln_resistance_shared_se)
    rooting = Rooting(segment_network, node_network, around.role, radius_mean, around.resistance_pa_s_m3, *doubt)
    field = (around.vessels, around.fov)
    calibre = (settings.calibre_formula, settings.zone_dd)
    return Morphometry(
        branchings=find_branchings(measured, around.flow_nl_min),
        curves=curves,
        orders=find_orders(measured, rooting),
        radius_mean_um=radius_mean,
        radius_sd_um=radius_mean * _ln_radius_sd(measured),
        tortuosity=tortuosity,
        node_network=node_network,
        segment_network=segment_network,
        network_length_um=sum_by(segment_network, length, n_networks),
        network_area_um2=sum_by(segment_network, 2.0 * length * radius_mean, n_networks),
        network_volume_um3=sum_by(segment_network, np.pi * length * mean_square, n_networks),
        network_loops=edges - np.bincount(node_network, minlength=n_networks) + 1,
        fov_area_um2=float(np.count_nonzero(around.fov) * pixel_um2),
        vessel_area_um2=float(np.count_nonzero(around.vessels & around.fov) * pixel_um2),
        length_um=float(length.sum()),
        whole=summarise(shapes, np.ones(n, dtype=bool)),
        filling=describe_filling(*field, measured.pixel_size_um),
        classes=describe_classes(measured, shapes, field, settings.calibre_um),
        disc=around.disc,
        equivalents=find_equivalents(measured, around.fov, around.disc, calibre) if around.disc else None,
    )


def _ln_radius_sd(measured: MeasuredGraph) -> FloatArray:
    segment, n, share = owner(measured.graph.offsets), measured.graph.n_segments, arc_shares(measured)
    ln_radius = np.log(measured.radius_um)
    ln_mean = mean_by(segment, ln_radius, share, n)
    spread = mean_by(segment, np.square(ln_radius - ln_mean[segment]), share, n)
    point_variance = mean_by(segment, np.square(measured.ln_radius_random_se), share, n)
    noise = point_variance - measured.covariance.segment_variance(share)
    return np.sqrt(np.maximum(spread + measured.noise_sign * np.maximum(noise, 0.0), 0.0))
