"""What neighbours say of each other's class: exact on trees, by rounds of messages where vessels form loops."""

from dataclasses import dataclass

import numpy as np

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.network.graph import VesselGraph, branch_directions

ROUNDS = 200
SETTLED = 1e-4
DAMPING = 0.3
MOST_ODDS = 30.0
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


def infer(links: Links, log_odds: FloatArray, rounds: int = ROUNDS) -> tuple[FloatArray, float]:
    """Sum up messages along links (Pearl, Probabilistic Reasoning in Intelligent Systems, 1988, ch. 4).

    Exact on a tree; with loops a settled approximation (Yedidia, Freeman & Weiss, IEEE Trans Inf Theory
    2005;51:2282-2312).

    Parameters
    ----------
    links : of segments and junctions.
    log_odds : (n_segments,) each segment's own, of the second class.
    rounds : of messages, at most.

    Returns
    -------
    The probability (n_segments,) of the second class, and the logarithm of the mean of exp(own log odds of those that
    are of the second class) over all ways to class the vessels that the links allow.
    """
    own = np.zeros(links.n_vertices)
    own[: len(log_odds)] = np.clip(log_odds, -MOST_ODDS, MOST_ODDS)
    n_links = len(links.a)
    source, target = np.concatenate((links.a, links.b)), np.concatenate((links.b, links.a))
    back = np.concatenate((np.arange(n_links) + n_links, np.arange(n_links)))
    pull = np.tile(2 * links.same - 1, 2)
    message, cavity = np.zeros(2 * n_links), own[source]
    for _ in range(rounds):
        new = 2 * np.arctanh(pull * np.tanh(0.5 * cavity))
        change = np.abs(new - message).max(initial=0)
        message = DAMPING * message + (1 - DAMPING) * new
        total = own + np.bincount(target, message, links.n_vertices)
        cavity = np.clip(total[source] - message[back], -MOST_ODDS, MOST_ODDS)
        if change < SETTLED:
            break
    total = own + np.bincount(target, message, links.n_vertices)
    # each message as two shares: the logarithm of that of the first class is -softplus(message)
    at_vertices = np.logaddexp(0.0, total).sum() - np.logaddexp(0.0, message).sum()
    one, other = _sigmoid(cavity[:n_links]), _sigmoid(cavity[n_links:])
    agree = one * other + (1 - one) * (1 - other)
    at_links = np.log(links.same * agree + (1 - links.same) * (1 - agree)).sum()
    free = (links.n_vertices - n_links) * np.log(2.0)
    return _sigmoid(total[: len(log_odds)]), float(at_vertices - at_links - free)


def _sigmoid(log_odds: FloatArray) -> FloatArray:
    return np.asarray(1 / (1 + np.exp(-log_odds)))
