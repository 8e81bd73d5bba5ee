"""What becomes of the network when some vessels change their radius."""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Scenario:
    """Multiply the radius of the chosen vessels; None in a condition means it does not matter."""

    name: str
    radius_factor: float
    radius_um_below: float | None
    radius_um_above: float | None
    vessel_class: str | None
