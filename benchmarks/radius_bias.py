"""Bias of the radius against the true radius: the fit beside half-height widths and the distance to an outline.

Usage: python benchmarks/radius_bias.py OUT.png

Bright projected cylinders (blur 1 px, contrast-to-noise 20 at 5 px of radius) at random angles, measured by the whole
program; the two simple estimates are given what they cannot know on real pictures: the true axis, and a threshold at
exactly half of each vessel's true height.
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure
from scipy import ndimage

import vasohm
from vasohm_synthetic.optics import Camera, Optics
from vasohm_synthetic.render import render
from vasohm_synthetic.scene import Scene
from vasohm_synthetic.tubes import Tube, tube_scene

RADII_PX = (1.0, 1.5, 2.0, 3.0, 4.0, 6.0, 8.0, 10.0)
ANGLES_DEG = (4.0, 17.0, -9.0)
SHAPE = (430, 420)
OPTICS = Optics("cylinder", "bright", contrast=0.4, reference_radius_px=10.0, camera=Camera(noise_sd=0.01, bits=16))
REACH_PX = 25
AWAY_FROM_ENDS_PX = 20


def picture(angle_deg: float, seed: int) -> tuple[Scene, np.ndarray]:
    """Draw one tube of each radius at an angle."""
    rows = np.linspace(45, SHAPE[0] - 45, len(RADII_PX))
    tubes = [Tube(SHAPE[1] / 2, y, r, 300.0, angle_deg) for y, r in zip(rows, RADII_PX, strict=True)]
    scene = tube_scene(tubes, SHAPE)
    return scene, render(scene, OPTICS, np.random.default_rng(seed))


def simple_radii(scene: Scene, light: np.ndarray) -> tuple[list[float], list[float]]:
    """Half of the half-height width, and the distance to the outline at half height, by tube."""
    background = float(np.median(light))
    widths, distances = [], []
    for vessel in scene.vessels:
        inner = slice(AWAY_FROM_ENDS_PX, -AWAY_FROM_ENDS_PX)
        x, y = vessel.x_px[inner], vessel.y_px[inner]
        along = np.array([x[-1] - x[0], y[-1] - y[0]]) / np.hypot(x[-1] - x[0], y[-1] - y[0])
        span = np.arange(-REACH_PX, REACH_PX + 0.25, 0.25)
        at = [y[:, None] + span * along[0], x[:, None] - span * along[1]]
        mean = ndimage.map_coordinates(light, at, order=3).mean(axis=0) - background
        half = mean[np.abs(span) < 1].max() / 2
        high = np.flatnonzero(mean >= half)
        widths.append((span[high[-1]] - span[high[0]]) / 2)
        outline = ndimage.distance_transform_edt(light - background >= half)
        distances.append(float(np.median(ndimage.map_coordinates(outline, [y, x], order=1))))
    return widths, distances


def fitted_radii(scene: Scene, light: np.ndarray) -> list[float]:
    """Median radius of the points nearest to each tube's axis, by the whole program."""
    measured = vasohm.measure_image(light, pixel_size_um=1.0, preset="fluorescence", segment={"radius_um": [0.8, 20.0]})
    points, found = measured.points, []
    for vessel in scene.vessels:
        normal = np.array([vessel.y_px[0] - vessel.y_px[-1], vessel.x_px[-1] - vessel.x_px[0]])
        away = (points.x_px - vessel.x_px[0]) * normal[0] + (points.y_px - vessel.y_px[0]) * normal[1]
        near = np.abs(away / np.hypot(*normal)) < max(2.0, float(vessel.radius_px.mean()))
        found.append(float(points.radius_um[near].median()))
    return found


def main(out: Path) -> None:
    rows = []
    for seed, angle_deg in enumerate(ANGLES_DEG):
        scene, light = picture(angle_deg, seed)
        rows.append((*simple_radii(scene, light), fitted_radii(scene, light)))
    bias = 100 * (np.mean(rows, axis=0) / np.array(RADII_PX) - 1)
    figure = Figure(figsize=(6.4, 4.2), layout="constrained")
    axes = figure.subplots()
    for values, label, style in zip(
        bias, ("half of the half-height width", "distance to the outline", "vasohm"), ("s--", "^:", "o-"), strict=True
    ):
        axes.plot(RADII_PX, values, style, label=label)
        print(label, *(f"r {r:g}: {value:+.1f} %" for r, value in zip(RADII_PX, values, strict=True)), sep="  ")
    axes.axhline(0, color="0.7", zorder=0)
    axes.set(xlabel="true radius (px)", ylabel="bias of the radius (%)", xscale="log", ylim=(-30, 20))
    axes.set_xticks(RADII_PX, [f"{r:g}" for r in RADII_PX])
    axes.legend()
    figure.savefig(out, dpi=150)


if __name__ == "__main__":
    main(Path(sys.argv[1]))
