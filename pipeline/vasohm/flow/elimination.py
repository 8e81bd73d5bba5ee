"""The same network under many sets of conductances: nodes taken out one by one, for all sets at once."""

from dataclasses import dataclass
from heapq import heapify, heappop, heappush

import numpy as np

from vasohm.arrays import FloatArray, IntArray


@dataclass(frozen=True, slots=True, eq=False)
class _Step:
    """One node taken out: the pairs of nodes it joins to its neighbours, and the pairs that its neighbours make."""

    own: IntArray  # (d,) slots of its pairs
    first: IntArray  # (d (d - 1) / 2,) index in `own` of the neighbours of each new pair
    second: IntArray
    pairs: IntArray  # (d (d - 1) / 2,) slots of the new pairs


@dataclass(frozen=True, slots=True, eq=False)
class Elimination:
    """The order in which the inner nodes of a network are taken out, and what each leaves; numbers come later."""

    steps: tuple[_Step, ...]
    slot_of_segment: IntArray  # (n_segments,) -1 for one that leaves and returns at the same node
    n_slots: int
    kept: tuple[IntArray, IntArray, IntArray]  # of the pairs that are left: place of both nodes in `keep`, and slot
    n_kept: int

    @property
    def work(self) -> int:
        """Products a set of conductances takes."""
        return int(sum(step.pairs.size + step.own.size for step in self.steps))


def plan_elimination(ends: tuple[IntArray, IntArray], n_nodes: int, keep: IntArray, most_work: float) -> Elimination:
    """Order the nodes that are not kept, those with the fewest neighbours first.

    Parameters
    ----------
    ends : two (n_segments,) int arrays
        The nodes each segment joins; any number of segments may join the same two.
    n_nodes : int
        Number of nodes.
    keep : (n_kept,) array
        Nodes that stay, all different.
    most_work : float
        Products a set of conductances may take.

    Returns
    -------
    Elimination

    Raises
    ------
    OverflowError
        It would take more than `most_work`.

    References
    ----------
    Tinney WF, Walker JW (1967) Direct solutions of sparse network equations by optimally ordered triangular
    factorization. Proc IEEE 55:1801-1809, doi:10.1109/PROC.1967.6011 (order by fewest neighbours).
    """
    slots: dict[tuple[int, int], int] = {}

    def slot(one: int, other: int) -> int:
        return slots.setdefault((one, other) if one < other else (other, one), len(slots))

    neighbours: list[set[int]] = [set() for _ in range(n_nodes)]
    slot_of_segment = np.full(len(ends[0]), -1)
    for segment, (a, b) in enumerate(zip(ends[0].tolist(), ends[1].tolist(), strict=True)):
        if a != b:
            slot_of_segment[segment] = slot(a, b)
            neighbours[a].add(b)
            neighbours[b].add(a)
    stays = set(keep.tolist())
    queue = [(len(around), node) for node, around in enumerate(neighbours) if node not in stays]
    heapify(queue)
    done: set[int] = set()
    steps, work = [], 0
    while queue:
        degree, node = heappop(queue)
        if node in done or degree != len(neighbours[node]):
            continue  # its number of neighbours has changed since; it stands in the queue again
        done.add(node)
        around = sorted(neighbours[node])
        work += len(around) * (len(around) + 1) // 2
        if work > most_work:
            raise OverflowError
        first, second = np.triu_indices(len(around), 1)
        pairs = [slot(around[i], around[j]) for i, j in zip(first.tolist(), second.tolist(), strict=True)]
        steps.append(
            _Step(
                np.array([slot(node, other) for other in around], dtype=np.int64),
                first,
                second,
                np.array(pairs, dtype=np.int64),
            )
        )
        for other in around:
            neighbours[other].discard(node)
            neighbours[other].update(around)
            neighbours[other].discard(other)
            if other not in stays:
                heappush(queue, (len(neighbours[other]), other))
    place = {node: at for at, node in enumerate(keep.tolist())}
    left = [(place[a], place[b], k) for (a, b), k in slots.items() if a in place and b in place]
    kept = np.array(left, dtype=np.int64).reshape(-1, 3)
    return Elimination(tuple(steps), slot_of_segment, len(slots), (kept[:, 0], kept[:, 1], kept[:, 2]), len(keep))


def reduce_to_kept(plan: Elimination, conductance: FloatArray) -> FloatArray:
    """Conductances between the kept nodes that act as the whole network does.

    Parameters
    ----------
    plan : Elimination
        Of the network.
    conductance : (n_segments, n_sets) array
        0 or more.

    Returns
    -------
    (n_sets, n_kept, n_kept) array, symmetric, 0 on the diagonal.

    Notes
    -----
    Taking out a node with conductances g_i to its neighbours adds g_i g_j / Σ g between each two of them (the Schur
    complement of the Laplacian, term by term): products and sums of positive numbers only, so that no digit is lost
    whatever the range of conductances.
    """
    values = np.zeros((plan.n_slots, conductance.shape[1]))
    real = plan.slot_of_segment >= 0
    np.add.at(values, plan.slot_of_segment[real], conductance[real])
    for step in plan.steps:
        own = values[step.own]
        total = own.sum(axis=0)
        share = np.divide(own, total, out=np.zeros(own.shape), where=total > 0)
        values[step.pairs] += own[step.first] * share[step.second]
    whole = np.zeros((conductance.shape[1], plan.n_kept, plan.n_kept))
    a, b, slot = plan.kept
    whole[:, a, b] = whole[:, b, a] = values[slot].T
    return whole
