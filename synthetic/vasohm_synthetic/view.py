"""Another picture of the same bed: moved, turned and enlarged before anything is drawn, so that truth stays exact."""

from dataclasses import dataclass, replace

import numpy as np

from vasohm_synthetic.arrays import FloatArray
from vasohm_synthetic.scene import Circle, Scene


@dataclass(frozen=True, slots=True)
class View:
    """Where the camera looks: the bed is turned and enlarged about the picture's middle, then shifted."""

    shift_x_px: float = 0.0  # of what is seen, to the right
    shift_y_px: float = 0.0  # downwards
    turn_deg: float = 0.0  # from the x axis towards the y axis
    zoom: float = 1.0  # pixels of this picture for one of the bed: its pixel size is that much smaller
    margin_px: int = 0  # cut off on every side, so that a moved picture does not show where the bed ends


STILL = View()


def view_problems(view: View, size: tuple[int, int]) -> list[str]:
    """Say everything that is impossible about a view of a bed of (height, width); empty where nothing is."""
    height, width = size
    checks = [
        (abs(view.shift_x_px) < width, f"shift_x_px {view.shift_x_px:g} is not within the picture's width {width}"),
        (abs(view.shift_y_px) < height, f"shift_y_px {view.shift_y_px:g} is not within the picture's height {height}"),
        (abs(view.turn_deg) <= 180, f"turn_deg {view.turn_deg:g} is not within -180 and 180"),
        (0.5 <= view.zoom <= 2, f"zoom {view.zoom:g} is not within 0.5 and 2"),
        (
            0 <= 2 * view.margin_px <= min(size) - 16,
            f"margin_px {view.margin_px} leaves less than 16 px of {width} x {height}",
        ),
    ]
    return [problem for fine, problem in checks if not fine]


def look(scene: Scene, view: View) -> Scene:
    """Move everything that belongs to the bed; the field of view belongs to the camera and stays."""
    if view == STILL:
        return scene
    vessels = []
    for vessel in scene.vessels:
        x, y = moved(scene, view, vessel.x_px, vessel.y_px)
        vessels.append(replace(vessel, x_px=x, y_px=y, radius_px=vessel.radius_px * view.zoom))
    node_x, node_y = moved(scene, view, scene.node_x_px, scene.node_y_px)
    fov, margin = scene.fov, view.margin_px
    height, width = scene.shape
    return replace(
        scene,
        shape=(height - 2 * margin, width - 2 * margin),
        node_x_px=node_x,
        node_y_px=node_y,
        vessels=tuple(vessels),
        fov=None if fov is None else Circle(fov.x_px - margin, fov.y_px - margin, fov.radius_px - margin),
        disc=_moved_circle(scene, view, scene.disc),
        centre=_moved_circle(scene, view, scene.centre),
    )


def moved(scene: Scene, view: View, x_px: FloatArray, y_px: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Where points of the bed lie in the picture."""
    middle_x, middle_y = 0.5 * (scene.shape[1] - 1), 0.5 * (scene.shape[0] - 1)
    cosine, sine = view.zoom * np.cos(np.deg2rad(view.turn_deg)), view.zoom * np.sin(np.deg2rad(view.turn_deg))
    x, y = x_px - middle_x, y_px - middle_y
    return (
        middle_x + view.shift_x_px - view.margin_px + cosine * x - sine * y,
        middle_y + view.shift_y_px - view.margin_px + sine * x + cosine * y,
    )


def _moved_circle(scene: Scene, view: View, circle: Circle | None) -> Circle | None:
    if circle is None:
        return None
    x, y = moved(scene, view, np.array([circle.x_px]), np.array([circle.y_px]))
    return Circle(float(x[0]), float(y[0]), circle.radius_px * view.zoom)
