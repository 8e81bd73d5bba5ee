"""What neighbours say of each other's class: exact on trees, by rounds of messages where vessels form loops."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.network.graph import VesselGraph, branch_directions

ROUNDS = 200
SETTLED = 1e-4
DAMPING = 0.5
STRAIGHT = 0.97  # probability that the straightest pair of arms at a branching is one vessel
SIDE = 0.90  # and that a side arm belongs to it: else it merely ends there, or passes over
ACROSS = 0.6  # that two straight pairs at one node are one vessel's: mostly they cross
AT_DISC = 0.6  # that arms which meet inside an optic disc belong together
OPPOSITE = 0.85  # that vessels which cross are of different class, where the crossing is sure
STRAIGHT_COSINE = 0.5  # arms straighter than 60 degrees go on through each other


@dataclass(frozen=True, slots=True, eq=False)
class Links:
    """Pairs of vertices and the probability that they are of one class; vertices are segments, then junctions."""

    a: IntArray  # (n_links,)
    b: IntArray
    same: FloatArray  # (n_links,)
    n_vertices: int

    def __post_init__(self) -> None:
        freeze(self)


def links_of(graph: VesselGraph, at_disc: BoolArray) -> Links:
    """Links of segments through branchings and crossings.

    Parameters
    ----------
    graph : resolved crossings are segments that go on and a row of `crossings`.
    at_disc : (n_nodes,) whether a node lies inside the optic disc, where vessels lie over each other unresolved.
    """
    n = graph.n_segments
    node, _, towards = branch_directions(graph)
    order = np.argsort(node, kind="stable")
    first = np.concatenate(([0], np.cumsum(np.bincount(node, minlength=graph.n_nodes))))
    links: list[tuple[int, int, float]] = []
    vertices = n
    for k in range(graph.n_nodes):
        ends = order[first[k] : first[k + 1]]
        if len(ends) < 2:
            continue
        pairs, alone = _straight_pairs(towards[ends])
        stems = []
        for i, j in pairs:
            links += [(int(ends[end] % n), vertices, AT_DISC if at_disc[k] else STRAIGHT) for end in (i, j)]
            stems.append(vertices)
            vertices += 1
        if not stems:
            stems, vertices = [vertices], vertices + 1
        links += [(stems[0], other, AT_DISC if at_disc[k] else ACROSS) for other in stems[1:]]
        links += [(int(ends[end] % n), stems[0], AT_DISC if at_disc[k] else SIDE) for end in alone]
    found = graph.crossings
    for over, under, sure in zip(found.segment_over, found.segment_under, found.probability, strict=True):
        if over != under:
            links.append((int(over), int(under), 0.5 - (OPPOSITE - 0.5) * float(sure)))
    a, b, same = (np.array(column) for column in zip(*links, strict=True)) if links else (np.zeros(0),) * 3
    return Links(a.astype(np.int64), b.astype(np.int64), same.astype(np.float64), vertices)


def _straight_pairs(towards: FloatArray) -> tuple[list[tuple[int, int]], list[int]]:
    """Pair the arms of a node that go on through each other best, and list those left."""
    cosine = -(towards @ towards.T)
    left = list(range(len(towards)))
    pairs = []
    while len(left) > 1:
        best = max(((i, j) for i in left for j in left if i < j), key=lambda pair: cosine[pair])
        if cosine[best] < STRAIGHT_COSINE:
            break
        pairs.append(best)
        left = [arm for arm in left if arm not in best]
    return pairs, left


def infer(links: Links, log_odds: FloatArray) -> FloatArray:
    """Probability (n_segments,) of the second class, from each segment's own log odds and its neighbours'.

    Sums of messages along links (Pearl, Probabilistic Reasoning in Intelligent Systems, 1988, ch. 4): exact on a tree;
    with loops a settled approximation (Murphy, Weiss & Jordan, Proc UAI 1999;15:467-475).
    """
    own = np.zeros(links.n_vertices)
    own[: len(log_odds)] = log_odds
    source = np.concatenate((links.a, links.b))
    target = np.concatenate((links.b, links.a))
    back = np.concatenate((np.arange(len(links.a)) + len(links.a), np.arange(len(links.a))))
    pull = np.tile(2 * links.same - 1, 2)
    message = np.zeros(len(source))
    for _ in range(ROUNDS):
        total = own + np.bincount(target, message, links.n_vertices)
        cavity = total[source] - message[back]
        new = 2 * np.arctanh(pull * np.tanh(np.clip(cavity / 2, -20, 20)))
        if np.abs(new - message).max(initial=0) < SETTLED:
            break
        message = DAMPING * message + (1 - DAMPING) * new
    total = own + np.bincount(target, message, links.n_vertices)
    probability: FloatArray = 1 / (1 + np.exp(-np.clip(total[: len(log_odds)], -50, 50)))
    return probability
