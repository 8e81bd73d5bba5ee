"""Arteriole, venule or capillary: from a label image made elsewhere, or from colour."""

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from vasohm.arrays import BoolArray, IntArray
from vasohm.image.disc import OpticDisc
from vasohm.image.prepare import PreparedImage
from vasohm.image.read import RawImage
from vasohm.network.class_evidence import Circumstances, weigh_colours
from vasohm.network.class_inference import infer, links_of
from vasohm.network.colours import measure_colours
from vasohm.network.graph import VesselClass, VesselGraph
from vasohm.network.groups import median_by
from vasohm.network.paths import owner
from vasohm.network.radius import MeasuredGraph

LEAST_SHARE = 0.5  # of a segment's points must say one class
SIDE = np.array([0, -1, 1, 0])  # of the two classes told apart, by VesselClass
SUREST = 0.999  # a person's word, for the neighbours


def classes_from_labels(graph: VesselGraph, labels: IntArray) -> VesselGraph:
    """Give each segment the class that most of its points lie on; the share of points is its probability.

    Parameters
    ----------
    graph : the graph, in pixels of the label image.
    labels : (h, w) int, 0 not said, 1 arteriole, 2 venule, 3 capillary.
    """
    if graph.n_segments == 0:
        return graph
    height, width = labels.shape
    row = np.clip(np.rint(graph.y_px), 0, height - 1).astype(np.int64)
    column = np.clip(np.rint(graph.x_px), 0, width - 1).astype(np.int64)
    votes = np.zeros((graph.n_segments, len(VesselClass)))
    np.add.at(votes, (owner(graph.offsets), labels[row, column]), 1)
    share = votes[:, 1:] / np.diff(graph.offsets)[:, None]
    best = share.argmax(axis=1)
    said = share[np.arange(len(best)), best] > LEAST_SHARE
    return replace(
        graph,
        vessel_class=np.where(said, best + 1, VesselClass.NONE),
        class_probability=np.where(said, share[np.arange(len(best)), best], np.nan),
    )


@dataclass(frozen=True, slots=True)
class ClassSettings:
    """Whether colour tells arterioles from venules, and how sure it must be."""

    method: Literal["colour", "none"]
    probability: float  # below it no class is said


def classify_vessels(
    measured: MeasuredGraph, raw: RawImage, prepared: PreparedImage, disc: OpticDisc | None, settings: ClassSettings
) -> tuple[MeasuredGraph, tuple[str, ...]]:
    """Tell arterioles from venules by their colour, and by that of the vessels they belong to.

    Parameters
    ----------
    measured : segments with their radii; classes that a person gave stay, and speak for their neighbours.
    raw : the picture; red, green and blue.
    prepared : its field of view and polarity.
    disc : the optic disc, where one is known.
    settings : method and threshold.

    Returns
    -------
    The graph with classes, and a note that says what was done. `class_probability` is the probability of the likelier
    class, also where it is too small for that class to be said.
    """
    if settings.method == "none" or measured.graph.n_segments == 0:
        return measured, ()
    graph = measured.graph
    given = graph.vessel_class != VesselClass.NONE
    person = f"{given.sum()} of {len(given)} segments told by class file or edits" if given.any() else ""
    if given.all():
        return measured, (f"classes: {person}",)
    person += "; " if person else ""
    fault = _no_colour(raw, prepared)
    if fault:
        return measured, (f"classes: {person}none from colour: {fault}",)
    around, at_disc = _circumstances(measured, disc)
    told = SIDE[graph.vessel_class]
    colours = measure_colours(measured, raw.pixels, prepared.fov & ~prepared.clipped, raw.white_level)
    links = links_of(graph, at_disc)
    evidence = weigh_colours(colours, around, links, told)
    if evidence.fault:
        return measured, (f"classes: {person}none from colour: {evidence.fault}",)
    sure = np.clip(np.where(told == 0, 0.5, graph.class_probability), 0.5, SUREST)
    own = np.where(given, told * np.log(sure / (1 - sure)), evidence.log_odds)
    venule, _ = infer(links, own)
    likelier = np.where(venule > 0.5, VesselClass.VENULE, VesselClass.ARTERIOLE)
    probability = np.maximum(venule, 1 - venule)
    said = np.where(probability >= settings.probability, likelier, VesselClass.NONE)
    new = replace(
        graph,
        vessel_class=np.where(given, graph.vessel_class, said),
        class_probability=np.where(given, graph.class_probability, probability),
    )
    n_said = int((said[~given] != VesselClass.NONE).sum())
    others = f"{n_said} of {int((~given).sum())} {'others' if person else 'segments'} told by colour"
    return replace(measured, graph=new), (f"classes: {person}{others}, its groups {evidence.distance:.1f} sd apart",)


def _no_colour(raw: RawImage, prepared: PreparedImage) -> str:
    """Say why the picture's colours tell no classes; empty where they may."""
    if prepared.polarity != "dark":
        return "vessels are bright: their colour is not that of blood"
    if raw.pixels.ndim != 3 or raw.pixels.shape[2] < 3:
        return "the picture is grey"
    red, green = raw.pixels[..., 0], raw.pixels[..., 1]
    return "red and green are equal everywhere" if np.array_equal(red, green) else ""


def _circumstances(measured: MeasuredGraph, disc: OpticDisc | None) -> tuple[Circumstances, BoolArray]:
    graph = measured.graph
    segment, n = owner(graph.offsets), graph.n_segments
    radius = median_by(segment, measured.radius_um / measured.pixel_size_um, n)
    place = np.column_stack([median_by(segment, at, n) for at in (graph.x_px, graph.y_px)])
    if disc is None:
        return Circumstances(radius, place, None), np.zeros(graph.n_nodes, dtype=bool)
    distance = np.hypot(place[:, 0] - disc.x_px, place[:, 1] - disc.y_px)
    at_disc = np.hypot(graph.node_x_px - disc.x_px, graph.node_y_px - disc.y_px) < disc.radius_px
    return Circumstances(radius, place, distance), at_disc
