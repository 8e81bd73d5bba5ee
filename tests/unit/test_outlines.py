"""Lines thinned for a page look like the whole ones."""

import itertools

import numpy as np

from vasohm.results.outlines import seen_points

TOLERANCE = 0.3


def farthest(place: np.ndarray, kept: np.ndarray) -> float:
    """Largest distance of a line's points from the straight pieces between its kept ones, slowly and plainly."""
    knots, worst = np.flatnonzero(kept), 0.0
    for start, end in itertools.pairwise(knots):
        for point in place[start : end + 1]:
            along = place[end] - place[start]
            share = np.clip(np.dot(point - place[start], along) / max(np.dot(along, along), 1e-30), 0.0, 1.0)
            worst = max(worst, float(np.linalg.norm(point - place[start] - share * along)))
    return worst


def test_what_is_left_out_of_a_line_is_not_seen() -> None:
    """A page would show another course or width than was measured."""
    turn = np.linspace(0.0, 1.5 * np.pi, 400)
    bow = np.column_stack([80.0 * np.cos(turn), 80.0 * np.sin(turn), 4.0 + np.sin(5.0 * turn)])
    straight = np.column_stack([np.linspace(0.0, 50.0, 60), np.zeros(60), np.full(60, 2.0)])
    pair = np.array([[1.0, 2.0, 3.0], [4.0, 5.0, 6.0]])
    lines = [bow, straight, pair]
    place = np.concatenate(lines)
    offsets = np.concatenate([[0], np.cumsum([len(line) for line in lines])])
    kept = np.split(seen_points(*place.T, offsets, TOLERANCE), offsets[1:-1])
    assert [int(one.sum()) for one in kept[1:]] == [2, 2]
    assert kept[0][[0, -1]].all()
    assert kept[0].sum() < 60
    assert farthest(bow, kept[0]) <= TOLERANCE
    fewer = kept[0].copy()
    fewer[np.flatnonzero(fewer)[1:-1:2]] = False
    assert farthest(bow, fewer) > TOLERANCE  # teeth: half as many would be seen to be wrong
    assert not seen_points(*np.zeros((3, 0)), np.array([0]), TOLERANCE).size
