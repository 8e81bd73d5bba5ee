"""Where vessels merely cross in the picture: two branchings a short bridge apart, or one node of four arms."""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.image.prepare import PreparedImage
from vasohm.network.crossing_features import (
    FEATURES,
    Arms,
    Meetings,
    Overlap,
    crossing_points,
    describe,
    find_meetings,
    look_along_arms,
    look_at_overlaps,
)
from vasohm.network.crossing_weights import WITH_CORE, WITHOUT_CORE
from vasohm.network.graph import Crossings, VesselGraph, in_fixed_order
from vasohm.network.joining import join_ends

FORCE_REACH_PX = 10.0  # as every point of an edits file
# Of the fainter vessel's depth. Where light adds, the overlap has an excess of 1 over the deeper vessel; where one
# hides the other, it has the depth of the upper one. Depths of one vessel differ by some tenths from place to place.
HIDES_BELOW = 0.3
TOLD_APART = 0.5


@dataclass(frozen=True, slots=True)
class CrossingSettings:
    """When a place counts as a crossing."""

    threshold: float  # of the probability
    overlap_adds: bool = True  # where vessels cross, their light adds; it does not in a maximum projection


@dataclass(frozen=True, slots=True, eq=False)
class Candidates:
    """Places where four arms meet, how probably two vessels cross there, and which of them is seen to lie over."""

    meetings: Meetings
    arms: Arms
    x_px: FloatArray  # (n,) where the two ways through meet
    y_px: FloatArray
    probability: FloatArray
    over: IntArray  # 0: the vessel of arms 0 and 2; 1: that of arms 1 and 3; -1: cannot be told

    def __post_init__(self) -> None:
        freeze(self)


def resolve_crossings(
    graph: VesselGraph,
    prepared: PreparedImage,
    settings: CrossingSettings,
    forced: Sequence[tuple[float, float, bool]] = (),
) -> tuple[VesselGraph, tuple[bool, ...]]:
    """Join the arms of vessels that cross and take the node away.

    Parameters
    ----------
    graph : nodes and segments as traced.
    prepared : the picture: the overlap of two vessels is deeper than either.
    settings : the probability asked for.
    forced : a person's word at (x_px, y_px): True for a crossing, False for a branching.

    Returns
    -------
    The graph in its fixed order, with `crossings` filled; and for each forced place whether four arms meet near it.
    """
    found = find_candidates(graph, prepared, settings)
    word, met = _words(found, forced)
    wanted = np.where(word == 0, found.probability >= settings.threshold, word > 0)
    taken: set[int] = set()
    accepted = []
    for place in np.lexsort((found.x_px, found.y_px, -found.probability, -word)).tolist():
        nodes = found.meetings.nodes[place].tolist()
        if wanted[place] and taken.isdisjoint(nodes):
            taken.update(nodes)
            accepted.append(place)
    if not accepted:
        return graph, met
    chosen = np.array(accepted)
    ends = found.meetings.ends[chosen]
    pairs = np.concatenate((ends[:, [0, 2]], ends[:, [1, 3]]))
    partner = dict(np.concatenate((pairs, pairs[:, ::-1])).tolist())
    bridges = set(found.meetings.bridge[chosen].tolist()) - {-1}
    joined, new_of = join_ends(graph, partner, bridges, found.arms.inside)
    probability = np.where(word[chosen] > 0, 1.0, found.probability[chosen])
    crossings = _table(found, chosen, new_of[ends % graph.n_segments], probability)
    return in_fixed_order(replace(joined, crossings=crossings)), met


def find_candidates(graph: VesselGraph, prepared: PreparedImage, settings: CrossingSettings) -> Candidates:
    """List the places where four arms meet, directly or across a short bridge, and judge each by itself."""
    arms = look_along_arms(graph)
    meetings = find_meetings(graph, arms)
    overlap = look_at_overlaps(meetings, arms, prepared)
    weights = WITH_CORE if settings.overlap_adds else WITHOUT_CORE
    features = describe(meetings, arms, overlap)
    logit = weights["intercept"] + features @ np.array([weights[name] for name in FEATURES])
    x, y = crossing_points(meetings, arms)
    over = _over(overlap) if settings.overlap_adds else np.full(len(x), -1)
    return Candidates(meetings, arms, x, y, 1 / (1 + np.exp(-np.clip(logit, -500, 500))), over)


def _words(found: Candidates, forced: Sequence[tuple[float, float, bool]]) -> tuple[IntArray, tuple[bool, ...]]:
    """A person's word on each candidate (n,): 1 crossing, -1 branching, 0 none; and which places were near one."""
    word = np.zeros(len(found.x_px), np.int64)
    met = []
    for x, y, is_crossing in forced:
        distance = np.hypot(found.x_px - x, found.y_px - y)
        near = bool(len(distance)) and bool(distance.min() <= FORCE_REACH_PX)
        met.append(near)
        if near:
            word[distance.argmin()] = 1 if is_crossing else -1
    return word, tuple(met)


def _over(overlap: Overlap) -> IntArray:
    """Which vessel hides the other: the one whose depth the overlap has, where both depths differ enough to tell."""
    vessel, core = overlap.vessel_depth, overlap.core_depth
    fainter, deeper = vessel.min(axis=1), vessel.max(axis=1)
    adds = core - deeper > HIDES_BELOW * fainter
    apart = deeper - fainter > TOLD_APART * fainter
    shows_fainter = core - fainter < 0.5 * (deeper - fainter)
    upper = np.where(shows_fainter, vessel.argmin(axis=1), vessel.argmax(axis=1))
    return np.where(apart & ~adds, upper, -1)


def _table(found: Candidates, chosen: IntArray, segment: IntArray, probability: FloatArray) -> Crossings:
    """Crossings of the joined graph; `segment` (n, 4) holds the new segment of each arm."""
    over = found.over[chosen]
    first, second = segment[:, 0], segment[:, 1]
    turned = over == 1
    told: BoolArray = over >= 0
    return Crossings(
        found.x_px[chosen], found.y_px[chosen], np.where(turned, second, first), np.where(turned, first, second),
        probability, told,
    )  # fmt: skip
