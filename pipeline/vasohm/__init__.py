"""Vascular resistance with honest uncertainty, from images of vessel beds.

For research: results are no basis for the diagnosis or treatment of a person; local rules and licensed practice come
first.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from vasohm.cohorts.compare import compare_groups
    from vasohm.flow.hydraulics import solve_network
    from vasohm.flow.poiseuille import segment_resistance
    from vasohm.flow.rheology import apparent_viscosity
    from vasohm.study.single import measure_image

__all__ = ["apparent_viscosity", "compare_groups", "measure_image", "segment_resistance", "solve_network"]

HOMES = {
    "apparent_viscosity": "vasohm.flow.rheology",
    "compare_groups": "vasohm.cohorts.compare",
    "measure_image": "vasohm.study.single",
    "segment_resistance": "vasohm.flow.poiseuille",
    "solve_network": "vasohm.flow.hydraulics",
}


def __getattr__(name: str) -> Any:
    """Import a public name when it is first asked for, so that the command line starts fast."""
    if name not in HOMES:
        msg = f"module 'vasohm' has no attribute {name!r}; public are {', '.join(__all__)}"
        raise AttributeError(msg)
    return getattr(import_module(HOMES[name]), name)
