"""Which ground is taken: new vessels keep their distance from those of their own layer and cross others squarely."""

from dataclasses import dataclass

import numpy as np
from scipy.spatial import cKDTree

from vasohm_synthetic.arrays import BoolArray, FloatArray, IntArray
from vasohm_synthetic.scene import Circle

MIN_CROSSING_DEG = 35.0  # flatter crossings overlap so long that nobody could tell them
OUTSIDE_PX = 8.0  # a vessel that leaves goes on so far beyond the border, for the blur
MAX_EXIT = 1.5  # length of the way out over the width of the border's margin: nothing runs along the border
CROSSING_MARGIN = 1.3  # of the length over which two lumens overlap, kept free of nodes and other vessels


@dataclass(frozen=True, slots=True)
class Field:
    """Where vessels may run."""

    shape: tuple[int, int]  # (h, w)
    fov: Circle | None
    margin_px: float

    def depth(self, x_px: FloatArray, y_px: FloatArray) -> FloatArray:
        """Distance of points from the nearest border, positive inside, (n,)."""
        height, width = self.shape
        depth = np.minimum(np.minimum(x_px, width - 1 - x_px), np.minimum(y_px, height - 1 - y_px))
        if self.fov is not None:
            from_rim = self.fov.radius_px - np.hypot(x_px - self.fov.x_px, y_px - self.fov.y_px)
            depth = np.minimum(depth, from_rim)
        return depth

    def exit(self, x_px: FloatArray, y_px: FloatArray, radius_px: float) -> tuple[int, int] | None:
        """Where a polyline comes too near the border, and where it is out; both its length where it stays inside.

        None where it runs along the border, or comes near without leaving.
        """
        depth = self.depth(x_px, y_px)
        near, out = depth < self.margin_px + radius_px, depth < -(radius_px + OUTSIDE_PX)
        if not near.any():
            return len(x_px), len(x_px)
        first = int(np.argmax(near))
        if not out.any():
            return None
        last = int(np.argmax(out))
        along = float(np.sum(np.hypot(np.diff(x_px[first : last + 1]), np.diff(y_px[first : last + 1]))))
        band = self.margin_px + 2 * radius_px + OUTSIDE_PX
        return (first, last) if along <= MAX_EXIT * band else None


@dataclass(frozen=True, slots=True, eq=False)
class Path:
    """A vessel proposed or accepted, sampled about every pixel."""

    x_px: FloatArray
    y_px: FloatArray
    radius_px: float  # its widest
    kin: int  # paths of one kin must not touch; others may cross

    @property
    def tangent(self) -> FloatArray:
        """Unit direction at every point, (n, 2)."""
        step = np.column_stack((np.gradient(self.x_px), np.gradient(self.y_px)))
        unit: FloatArray = step / np.linalg.norm(step, axis=1, keepdims=True)
        return unit


class Ground:
    """The paths accepted so far. Grows with `take`; everything else only looks."""

    def __init__(self, field: Field, gap_px: float) -> None:
        self.field = field
        self.gap_px = gap_px
        self._paths: list[Path] = []
        self._look_up: dict[int, tuple[cKDTree, IntArray]] = {}

    def take(self, path: Path) -> None:
        """Accept a path."""
        self._paths.append(path)
        self._look_up.clear()

    def room(self, x_px: float, y_px: float) -> float:
        """Distance of a point from the nearest accepted axis or border."""
        distances = [float(self.field.depth(np.array([x_px]), np.array([y_px]))[0])]
        for kin in {path.kin for path in self._paths}:
            tree, _ = self._points(kin)
            distances.append(float(np.min(tree.query(np.array([[x_px, y_px]]))[0])))
        return min(distances)

    def fits(self, path: Path, free_px: float) -> bool:
        """Whether a path is clear of its kin beyond its first `free_px` and crosses others well."""
        s = np.arange(len(path.x_px), dtype=float)  # sampled about every pixel
        for kin in {other.kin for other in self._paths}:
            touch, owner, at = self._touching(path, kin)
            if kin == path.kin:
                if (touch & (s > free_px)).any():
                    return False
            elif not self._crosses_well(path, touch, owner, at):
                return False
        return True

    def _points(self, kin: int) -> tuple[cKDTree, IntArray]:
        if kin not in self._look_up:
            chosen = [(i, path) for i, path in enumerate(self._paths) if path.kin == kin]
            xy = np.concatenate([np.column_stack((p.x_px, p.y_px)) for _, p in chosen])
            owner = np.concatenate(
                [np.column_stack((np.full(len(p.x_px), i), np.arange(len(p.x_px)))) for i, p in chosen]
            )
            self._look_up[kin] = (cKDTree(xy), owner.astype(np.int64))
        return self._look_up[kin]

    def _touching(self, path: Path, kin: int) -> tuple[BoolArray, IntArray, IntArray]:
        """Which points of a path come too near, and to which point of which accepted path."""
        tree, owner = self._points(kin)
        k = min(6, len(owner))
        _, nearest = tree.query(np.column_stack((path.x_px, path.y_px)), k=k)
        nearest = np.asarray(nearest).reshape(len(path.x_px), k)
        others, at = owner[nearest, 0], owner[nearest, 1]
        radii = np.array([other.radius_px for other in self._paths])
        xy = np.asarray(tree.data)[nearest]
        free = np.hypot(xy[..., 0] - path.x_px[:, None], xy[..., 1] - path.y_px[:, None])
        free = free - radii[others] - path.radius_px
        closest = np.argmin(free, axis=1)
        row = np.arange(len(path.x_px))
        return free[row, closest] < self.gap_px, others[row, closest], at[row, closest]

    def _crosses_well(self, path: Path, touch: BoolArray, owner: IntArray, at: IntArray) -> bool:
        """Whether every overlap with another kin is one square crossing, far from nodes and from the next one."""
        if not touch.any():
            return True
        edges = np.flatnonzero(np.diff(np.concatenate(([False], touch, [False])).astype(int)))
        for start, stop in zip(edges[::2], edges[1::2], strict=True):
            if len(set(owner[start:stop].tolist())) != 1:
                return False
            other = self._paths[int(owner[start])]
            distance = np.hypot(
                other.x_px[at[start:stop]] - path.x_px[start:stop],
                other.y_px[at[start:stop]] - path.y_px[start:stop],
            )
            best = start + int(np.argmin(distance))
            here = int(at[best])
            cosine = abs(float(path.tangent[best] @ other.tangent[here]))
            if distance.min() > 1.0 or cosine > np.cos(np.deg2rad(MIN_CROSSING_DEG)):
                return False
            overlap = CROSSING_MARGIN * (path.radius_px + other.radius_px + self.gap_px) / np.sqrt(1 - cosine**2)
            if min(best, len(path.x_px) - 1 - best, here, len(other.x_px) - 1 - here) < overlap:
                return False
            if stop - start > 2 * overlap:
                return False
        return True
