"""Branching trees that grow into free ground: radii after Murray's law with scatter, no overlap within a tree."""

import heapq
from dataclasses import dataclass

import numpy as np

from vasohm_synthetic.arrays import FloatArray
from vasohm_synthetic.clearance import Field, Ground, Path
from vasohm_synthetic.curves import Curve, arc_length, process, resample, wander
from vasohm_synthetic.errors import refuse
from vasohm_synthetic.scene import AXIS_STEP_PX, MAX_LN_SD, MAX_SIDE_PX, Circle, Scene, Vessel


@dataclass(frozen=True, slots=True)
class TreeShape:
    """How trees grow. r0^m = r1^m + r2^m at each branching, angles of least volume, lengths ~ (r r_root)^(1/2).

    Murray, Proc Natl Acad Sci USA 1926;12:207 (exponent 3) and J Gen Physiol 1926;9:835 (angles).
    """

    root_radius_px: float = 10.0
    min_radius_px: float = 2.0  # thinner vessels are not grown
    exponent: float = 3.0  # m
    exponent_sd: float = 0.15  # its scatter from branching to branching
    asymmetry: tuple[float, float] = (0.45, 1.0)  # range of r2 / r1, r2 the narrower child
    angle_sd_deg: float = 6.0
    length_ratio: float = 8.0  # median length over (r r_root)^(1/2)
    length_sd: float = 0.3  # of its logarithm
    bend_radius_px: float = 90.0  # typical; never below 0.4 of it
    variation_sd: float = 0.05  # of ln r along a segment
    variation_ratio: float = 8.0  # correlation length over r
    taper: float = 0.0  # relative loss of radius along a segment
    gap_px: float = 4.0  # between lumens
    margin_px: float = 4.0  # between lumens and the border
    gain_sd: float = 0.0  # scatter of the logarithm of a vessel's contrast
    draws: int = 40  # proposals for a branching before the tip is left an end


MAX_LENGTH_RATIO = 200.0  # longer segments leave every picture before they branch
MAX_DRAWS = 10_000
LEAST_RATIO = 0.5  # a radius cannot vary within a fraction of itself


def tree_shape_problems(shape: TreeShape) -> list[str]:
    """Say everything that is impossible about a tree's shape; empty where nothing is."""
    positive = {
        "root_radius_px": shape.root_radius_px,
        "min_radius_px": shape.min_radius_px,
        "length_ratio": shape.length_ratio,
        "bend_radius_px": shape.bend_radius_px,
        "variation_ratio": shape.variation_ratio,
    }
    at_most = {
        "exponent_sd": (shape.exponent_sd, 1.0),
        "angle_sd_deg": (shape.angle_sd_deg, 45.0),
        "length_sd": (shape.length_sd, MAX_LN_SD),
        "variation_sd": (shape.variation_sd, MAX_LN_SD),
        "gap_px": (shape.gap_px, float(MAX_SIDE_PX)),
        "margin_px": (shape.margin_px, float(MAX_SIDE_PX)),
        "gain_sd": (shape.gain_sd, MAX_LN_SD),
    }
    problems = [f"{name} {value:g} is not positive" for name, value in positive.items() if not value > 0]
    problems += [
        f"{name} {value:g} is not within 0 and {most:g}"
        for name, (value, most) in at_most.items()
        if not 0 <= value <= most
    ]
    checks = [
        (
            shape.min_radius_px <= shape.root_radius_px,
            f"min_radius_px {shape.min_radius_px:g} is above root_radius_px {shape.root_radius_px:g}",
        ),
        (
            shape.bend_radius_px > shape.root_radius_px,
            f"bend_radius_px {shape.bend_radius_px:g} is not above root_radius_px {shape.root_radius_px:g}",
        ),
        (
            shape.variation_ratio >= LEAST_RATIO,
            f"variation_ratio {shape.variation_ratio:g} is below {LEAST_RATIO:g}",
        ),
        (shape.length_ratio <= MAX_LENGTH_RATIO, f"length_ratio {shape.length_ratio:g} is above {MAX_LENGTH_RATIO:g}"),
        (2.0 <= shape.exponent <= 5.0, f"exponent {shape.exponent:g} is not within 2 and 5"),
        (
            0 < shape.asymmetry[0] <= shape.asymmetry[1] <= 1,
            f"asymmetry {list(shape.asymmetry)} is no range within 0 and 1",
        ),
        (0 <= shape.taper < 1, f"taper {shape.taper:g} is not within 0 and 1"),
        (1 <= shape.draws <= MAX_DRAWS, f"draws {shape.draws} is not within 1 and {MAX_DRAWS}"),
    ]
    return problems + [problem for fine, problem in checks if not fine]


@dataclass(frozen=True, slots=True)
class Root:
    """Where a tree starts: its trunk leaves x, y along `heading` (radians, from right towards down)."""

    x_px: float
    y_px: float
    heading: float
    vessel_class: str
    layer: int
    flow_inwards: bool = True  # blood enters here; else it leaves here (a venule)
    kin: int = 0  # trees of one kin do not touch, those of different kin may cross
    crop_px: float = 0.0  # length of trunk outside the field
    radius_px: float | None = None  # None: the shape's root_radius_px


@dataclass(frozen=True, slots=True)
class _Tip:
    """Where a branch wants to start."""

    x: float
    y: float
    heading: float
    radius: float
    node: int
    root: Root


@dataclass(frozen=True, slots=True, eq=False)
class _Limb:
    """A grown piece of axis and its radius along it."""

    x: FloatArray
    y: FloatArray
    radius: FloatArray
    leaves: bool = False  # its end lies outside the field

    def path(self, kin: int) -> Path:
        x, y = resample(self.x, self.y, 1.0)
        return Path(x, y, float(self.radius.max()), kin)


class _Bed:
    """What has grown so far: nodes, vessels, tips by falling radius, and the ground they take."""

    def __init__(self, field: Field, shape: TreeShape, rng: np.random.Generator) -> None:
        self.shape = shape
        self.rng = rng
        self.ground = Ground(field, shape.gap_px)
        self.nodes: list[tuple[float, float]] = []
        self.vessels: list[Vessel] = []
        self.tips: list[tuple[float, int, _Tip]] = []

    def keep(self, limb: _Limb, node: int, root: Root) -> None:
        """Accept a limb: it takes its ground, becomes a vessel, and its end a tip."""
        self.ground.take(limb.path(root.kin))
        far = len(self.nodes)
        self.nodes.append((float(limb.x[-1]), float(limb.y[-1])))
        turn = slice(None) if root.flow_inwards else slice(None, None, -1)
        self.vessels.append(
            Vessel(
                x_px=limb.x[turn].copy(),
                y_px=limb.y[turn].copy(),
                radius_px=limb.radius[turn].copy(),
                node_a=node if root.flow_inwards else far,
                node_b=far if root.flow_inwards else node,
                layer=root.layer,
                vessel_class=root.vessel_class,
                gain=float(np.exp(self.shape.gain_sd * self.rng.standard_normal())),
            )
        )
        if limb.leaves:
            return
        heading = float(np.arctan2(limb.y[-1] - limb.y[-4], limb.x[-1] - limb.x[-4]))
        nominal = float(np.median(limb.radius)) * (1.0 - 0.5 * self.shape.taper)
        tip = _Tip(float(limb.x[-1]), float(limb.y[-1]), heading, nominal, far, root)
        heapq.heappush(self.tips, (-nominal, far, tip))


def branching_angles(parent: float, child_1: float, child_2: float) -> tuple[float, float]:
    """Angles in radians between the parent's direction and each child, for least volume (Murray 1926)."""
    p, a, b = parent**4, child_1**4, child_2**4
    cos_1 = (p + a - b) / (2 * parent**2 * child_1**2)
    cos_2 = (p + b - a) / (2 * parent**2 * child_2**2)
    angles = np.arccos(np.clip([cos_1, cos_2], -1.0, 1.0))
    return float(angles[0]), float(angles[1])


def grow_trees(
    roots: list[Root], shape: TreeShape, field: Field, rng: np.random.Generator, *, discs: tuple[Circle, ...] = ()
) -> Scene:
    """Grow trees from their roots, the widest tip first, until no branch finds room.

    Parameters
    ----------
    roots : list[Root]
        Trees whose `layer` is the same join where they touch; whose `kin` is the same keep apart.
    field : Field
        Picture, field of view and margin.
    discs : tuple[Circle, ...]
        Optic disc and dark centre to be put into the scene; the trees do not heed them.

    Raises
    ------
    RecipeError
        When a trunk finds no room.
    """
    bed = _Bed(field, shape, rng)
    roomless = []
    for number, root in enumerate(roots, 1):
        trunk = _grow_trunk(root, shape, bed.ground, rng)
        if trunk is None:
            roomless.append(
                f"trunk {number} of {len(roots)}, from x {root.x_px:.0f}, y {root.y_px:.0f} px, finds no room: "
                "move it, make it narrower or the picture larger, or change the seed"
            )
            continue
        bed.nodes.append((float(trunk.x[0]), float(trunk.y[0])))
        bed.keep(trunk, len(bed.nodes) - 1, root)
    refuse(roomless)
    while bed.tips:
        tip = heapq.heappop(bed.tips)[2]
        for limb in _branch(tip, shape, bed.ground, rng):
            bed.keep(limb, tip.node, tip.root)
    xy = np.array(bed.nodes, float).reshape(-1, 2)
    return Scene(
        field.shape,
        xy[:, 0].copy(),
        xy[:, 1].copy(),
        tuple(bed.vessels),
        fov=field.fov,
        disc=discs[0] if discs else None,
        centre=discs[1] if len(discs) > 1 else None,
    )


def _grow_trunk(root: Root, shape: TreeShape, ground: Ground, rng: np.random.Generator) -> _Limb | None:
    """First limb of a tree; the part outside the field is straight and never checked."""
    for _ in range(shape.draws):
        radius = shape.root_radius_px if root.radius_px is None else root.radius_px
        limb = _propose((root.x_px, root.y_px, root.heading), radius, shape, rng)
        path = limb.path(root.kin)
        skip = int(np.ceil(2 * path.radius_px + shape.margin_px))
        if len(path.x_px) <= skip + 4:
            continue
        inner = ground.field.exit(path.x_px[skip:], path.y_px[skip:], path.radius_px)
        if inner == (len(path.x_px) - skip,) * 2 and ground.fits(path, 0.0):
            return _lead_in(limb, root)
    return None


def _lead_in(limb: _Limb, root: Root) -> _Limb:
    """Lengthen a trunk backwards out of the field."""
    if root.crop_px == 0:
        return limb
    back = root.crop_px * np.array([-1.0, 0.0])
    lead: Curve = resample(root.x_px + back * np.cos(root.heading), root.y_px + back * np.sin(root.heading))
    return _Limb(
        np.concatenate((lead[0][:-1], limb.x)),
        np.concatenate((lead[1][:-1], limb.y)),
        np.concatenate((np.full(len(lead[0]) - 1, limb.radius[0]), limb.radius)),
    )


def _propose(start: tuple[float, float, float], radius: float, shape: TreeShape, rng: np.random.Generator) -> _Limb:
    median = shape.length_ratio * np.sqrt(radius * shape.root_radius_px)
    length = median * np.exp(shape.length_sd * rng.standard_normal())
    x, y = wander(start, max(length, 4 * radius + 6), shape.bend_radius_px, rng)
    s = arc_length(x, y)
    wave = shape.variation_sd * process(len(s), s[-1] / (len(s) - 1), shape.variation_ratio * radius, rng)
    return _Limb(x, y, radius * (1.0 - shape.taper * (s / s[-1] - 0.5)) * np.exp(np.clip(wave, -0.5, 0.5)))


def _branch(tip: _Tip, shape: TreeShape, ground: Ground, rng: np.random.Generator) -> tuple[_Limb, ...]:
    """Two children that find room, the roomiest of ten pairs; none where fewer than two do."""
    best: tuple[_Limb, ...] = ()
    best_room, found = -np.inf, 0
    for _ in range(shape.draws):
        ratio = rng.uniform(*shape.asymmetry)
        exponent = max(2.0, shape.exponent + shape.exponent_sd * rng.standard_normal())
        child_1 = tip.radius * (1.0 + ratio**exponent) ** (-1.0 / exponent)
        child_2 = ratio * child_1
        if child_2 < shape.min_radius_px:
            continue
        angles = np.array(branching_angles(tip.radius, child_1, child_2))
        angles = np.maximum(angles + np.deg2rad(shape.angle_sd_deg) * rng.standard_normal(2), 0.0)
        side = rng.choice([-1.0, 1.0])
        first = _propose((tip.x, tip.y, tip.heading + side * angles[0]), child_1, shape, rng)
        second = _propose((tip.x, tip.y, tip.heading - side * angles[1]), child_2, shape, rng)
        limbs = (_cut(first, ground.field), _cut(second, ground.field))
        if not _finds_room(limbs, tip, float(angles.sum()), ground):
            continue
        room = sum(ground.room(float(limb.x[-1]), float(limb.y[-1])) for limb in limbs)
        found += 1
        if room > best_room:
            best, best_room = limbs, room
        if found == 10:
            break
    return best


def _cut(limb: _Limb, field: Field) -> _Limb:
    """End a limb outside the field where it leaves it, led straight out where it ends too near the border.

    One that runs along the border is cut to nothing.
    """
    radius = float(limb.radius.max())
    way_out = field.exit(limb.x, limb.y, radius)
    if way_out is None:
        limb = _lead_out(limb, 3 * (field.margin_px + 2 * radius))
        way_out = field.exit(limb.x, limb.y, radius)
    if way_out is None:
        return _Limb(limb.x[:2], limb.y[:2], limb.radius[:2])
    if way_out[0] == len(limb.x):
        return limb
    end = way_out[1] + 1
    return _Limb(limb.x[:end], limb.y[:end], limb.radius[:end], leaves=True)


def _lead_out(limb: _Limb, length_px: float) -> _Limb:
    """Lengthen a limb straight on, at the radius of its end."""
    n = int(np.ceil(length_px / AXIS_STEP_PX))
    step = np.arange(1, n + 1) * AXIS_STEP_PX
    heading = np.arctan2(limb.y[-1] - limb.y[-4], limb.x[-1] - limb.x[-4])
    return _Limb(
        np.concatenate((limb.x, limb.x[-1] + step * np.cos(heading))),
        np.concatenate((limb.y, limb.y[-1] + step * np.sin(heading))),
        np.concatenate((limb.radius, np.full(n, limb.radius[-1]))),
    )


def _finds_room(limbs: tuple[_Limb, _Limb], tip: _Tip, between: float, ground: Ground) -> bool:
    """Whether two children stay clear of everything and, once apart, of each other."""
    if between < np.deg2rad(30.0):
        return False
    first, second = (limb.path(tip.root.kin) for limb in limbs)
    apart = (first.radius_px + second.radius_px + ground.gap_px) / (2 * np.sin(0.5 * min(between, np.pi)))
    free = 1.2 * max(apart, tip.radius + max(first.radius_px, second.radius_px) + ground.gap_px)
    for path in (first, second):
        way_out = ground.field.exit(path.x_px, path.y_px, path.radius_px) if len(path.x_px) > 2 else None
        if way_out is None or way_out[0] < free + 8:
            return False
    skip = int(np.ceil(free))
    distance = np.hypot(first.x_px[skip:, None] - second.x_px[skip:], first.y_px[skip:, None] - second.y_px[skip:])
    if distance.min() < first.radius_px + second.radius_px + ground.gap_px:
        return False
    return ground.fits(first, free) and ground.fits(second, free)
