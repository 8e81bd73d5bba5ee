"""Scenes like the back of an eye: arteriolar and venular trees from an optic disc that cross each other."""

from dataclasses import dataclass, replace

import numpy as np

from vasohm_synthetic.clearance import Field
from vasohm_synthetic.errors import refuse
from vasohm_synthetic.scene import Circle, Scene
from vasohm_synthetic.trees import Root, TreeShape, grow_trees, tree_shape_problems

FUNDUS_TREE = TreeShape(root_radius_px=5.5, min_radius_px=1.2, length_ratio=12.0, margin_px=3.0)

MAX_TRUNKS = 12  # arteriolar ones that find room around a disc


@dataclass(frozen=True, slots=True)
class FundusShape:
    """How a fundus is laid out; fractions are of the picture's smaller side."""

    fov_radius: float = 0.48  # of the round field of view; 0: the whole picture
    disc_x: float = 0.27
    disc_y: float = 0.5
    disc_radius_px: float = 50.0
    centre_x: float = 0.6  # of the dark centre
    centre_y: float = 0.52
    centre_radius: float = 0.07
    trunks_deg: tuple[float, ...] = (-55.0, 55.0, -130.0, 130.0)  # headings of the arteriolar trunks
    venule_offset_deg: float = 27.0  # each venular trunk leaves beside an arteriolar one
    venule_ratio: float = 1.25  # radius of venular over arteriolar trunks
    tree: TreeShape = FUNDUS_TREE


def fundus_shape_problems(shape: FundusShape) -> list[str]:
    """Say everything that is impossible about a fundus; empty where nothing is."""
    checks = [
        (0 <= shape.fov_radius <= 1, f"fov_radius {shape.fov_radius:g} is not within 0 and 1"),
        (shape.disc_radius_px > 0, f"disc_radius_px {shape.disc_radius_px:g} is not positive"),
        (shape.centre_radius > 0, f"centre_radius {shape.centre_radius:g} is not positive"),
        (0 < len(shape.trunks_deg) <= MAX_TRUNKS, f"trunks_deg holds {len(shape.trunks_deg)}, not 1 to {MAX_TRUNKS}"),
        (shape.venule_ratio > 0, f"venule_ratio {shape.venule_ratio:g} is not positive"),
    ]
    problems = [problem for fine, problem in checks if not fine]
    return problems + [f"tree: {problem}" for problem in tree_shape_problems(shape.tree)]


def fundus_fit_problems(shape: FundusShape, size: tuple[int, int]) -> list[str]:
    """Say why a possible fundus does not fit into a picture of `size` (h, w); empty where it does."""
    if fundus_shape_problems(shape):
        return []
    disc, centre = _places(shape, size)
    field = _field_of_view(shape, size) or Circle(0.5 * size[1], 0.5 * size[0], 0.5 * min(size))
    trunk = shape.tree.root_radius_px * max(1.0, shape.venule_ratio)
    picture = f"{size[1]} x {size[0]} px"
    checks = [
        (
            8 * trunk < field.radius_px,
            f"a field of view of {field.radius_px:.0f} px in {picture} is too small for trunks of {trunk:g} px",
        ),
        (
            4 * disc.radius_px < 3 * field.radius_px,
            f"disc_radius_px {disc.radius_px:g} is too large for a field of view of {field.radius_px:.0f} px",
        ),
        (
            _within(disc, shape, size),
            f"disc_x {shape.disc_x:g}, disc_y {shape.disc_y:g} lies outside the field of view",
        ),
        (
            _within(centre, shape, size),
            f"centre_x {shape.centre_x:g}, centre_y {shape.centre_y:g} lies outside the field of view",
        ),
    ]
    return [problem for fine, problem in checks if not fine]


def _field_of_view(shape: FundusShape, size: tuple[int, int]) -> Circle | None:
    height, width = size
    return Circle(0.5 * (width - 1), 0.5 * (height - 1), shape.fov_radius * min(size)) if shape.fov_radius else None


def _places(shape: FundusShape, size: tuple[int, int]) -> tuple[Circle, Circle]:
    """Optic disc and dark centre."""
    height, width = size
    return (
        Circle(shape.disc_x * width, shape.disc_y * height, shape.disc_radius_px),
        Circle(shape.centre_x * width, shape.centre_y * height, shape.centre_radius * min(size)),
    )


def _within(place: Circle, shape: FundusShape, size: tuple[int, int]) -> bool:
    field = _field_of_view(shape, size)
    inside = 0 <= place.x_px < size[1] and 0 <= place.y_px < size[0]
    if field is not None:
        inside &= bool(np.hypot(place.x_px - field.x_px, place.y_px - field.y_px) < field.radius_px)
    return inside


def fundus_scene(shape: FundusShape, size: tuple[int, int], rng: np.random.Generator) -> Scene:
    """Lay out a fundus in a picture of `size` (h, w).

    Raises
    ------
    RecipeError
        When the shape is impossible or does not fit into the picture.
    """
    refuse(fundus_shape_problems(shape) + fundus_fit_problems(shape, size))
    fov = _field_of_view(shape, size)
    disc, centre = _places(shape, size)
    roots = []
    for number, heading_deg in enumerate(shape.trunks_deg):
        turn = 1.0 if number % 2 else -1.0
        roots.append(_trunk(disc, heading_deg, "arteriole"))
        roots.append(_trunk(disc, heading_deg + turn * shape.venule_offset_deg, "venule"))
    roots = [
        replace(root, radius_px=shape.tree.root_radius_px * (shape.venule_ratio if root.kin else 1.0)) for root in roots
    ]
    ground = Field(size, fov, shape.tree.margin_px)
    return grow_trees(roots, shape.tree, ground, rng, discs=(disc, centre))


def _trunk(disc: Circle, heading_deg: float, vessel_class: str) -> Root:
    heading = float(np.deg2rad(heading_deg))
    venous = vessel_class == "venule"
    return Root(
        x_px=disc.x_px + 0.9 * disc.radius_px * np.cos(heading),
        y_px=disc.y_px + 0.9 * disc.radius_px * np.sin(heading),
        heading=heading,
        vessel_class=vessel_class,
        layer=int(venous),
        flow_inwards=not venous,
        kin=int(venous),
    )
