"""The same bed in another state of tone: some radii multiplied, nothing else moved."""

from collections.abc import Sequence
from dataclasses import dataclass, replace

from vasohm_synthetic.scene import CLASSES, Scene


@dataclass(frozen=True, slots=True)
class Tone:
    """Multiply the radius of the chosen vessels; None and "" mean that a condition does not matter."""

    radius_factor: float = 1.0
    vessel_class: str = ""
    radius_um_below: float | None = None  # of the vessel's mean radius before the change
    radius_um_above: float | None = None


def tone_problems(tone: Tone) -> list[str]:
    """Say everything that is impossible about a change of tone; empty where nothing is."""
    checks = [
        (0.1 <= tone.radius_factor <= 5, f"radius_factor {tone.radius_factor:g} is not within 0.1 and 5"),
        (tone.vessel_class in CLASSES, f"vessel_class {tone.vessel_class!r} is none of {CLASSES}"),
    ]
    low, high = tone.radius_um_above, tone.radius_um_below
    checks += [
        (low is None or low >= 0, f"radius_um_above {low} is negative"),
        (high is None or high > 0, f"radius_um_below {high} is not positive"),
        (low is None or high is None or low < high, f"radius_um_above {low} is not less than radius_um_below {high}"),
    ]
    return [problem for fine, problem in checks if not fine]


def retone(scene: Scene, tones: Sequence[Tone], pixel_size_um: float) -> Scene:
    """Apply changes of tone one after the other; lengths and positions stay."""
    for tone in tones:
        vessels = []
        for vessel in scene.vessels:
            mean_um = float(vessel.radius_px.mean()) * pixel_size_um
            chosen = tone.vessel_class in ("", vessel.vessel_class)
            chosen &= tone.radius_um_below is None or mean_um < tone.radius_um_below
            chosen &= tone.radius_um_above is None or mean_um >= tone.radius_um_above
            vessels.append(replace(vessel, radius_px=vessel.radius_px * tone.radius_factor) if chosen else vessel)
        scene = replace(scene, vessels=tuple(vessels))
    return scene
