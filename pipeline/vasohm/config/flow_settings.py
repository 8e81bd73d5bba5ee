"""What a study says of unknown ends and of scenarios: checked against itself, and turned into settings."""

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from vasohm.config.study_model import ScenarioTable
from vasohm.errors import Problem
from vasohm.flow.estimated_ends import EndTargets
from vasohm.flow.scenarios import Scenario
from vasohm.network.graph import VesselClass
from vasohm.results.columns_vessels import CLASSES

TARGETS = ("target_wall_shear_pa", "target_pressure_mmhg")
TARGET_SD = 0.5  # of a target, where the study says no other: pressures and shears of a bed scatter about so far


def scenario_problems(scenarios: Sequence[ScenarioTable], file: str) -> Iterator[Problem]:
    """Names that occur twice, and questions that no vessel or no factor can answer."""
    names: set[str] = set()
    for at, scenario in enumerate(scenarios, start=1):
        if scenario.name in names:
            message = f"{scenario.name!r} occurs twice. Name each scenario otherwise."
            yield Problem(file, message, column=f"scenario[{at}].name", value=scenario.name)
        names.add(scenario.name)
        if (scenario.radius_factor is None) == (scenario.wanted_ratio is None):
            message = "give either radius_factor, or wanted_ratio to be told the factor that brings it about."
            yield Problem(file, message, column=f"scenario[{at}]", value=scenario.name)
        below, above = scenario.where.radius_um_below, scenario.where.radius_um_above
        if below is not None and above is not None and above >= below:
            message = f"no radius is above {above:g} and below {below:g} um."
            yield Problem(file, message, column=f"scenario[{at}].where", value=f"{above:g}, {below:g}")


def scenarios_asked(tables: Sequence[ScenarioTable]) -> tuple[Scenario, ...]:
    """Settings of the scenarios, in the study's order."""
    return tuple(
        Scenario(
            name=table.name,
            radius_factor=table.radius_factor,
            radius_um_below=table.where.radius_um_below,
            radius_um_above=table.where.radius_um_above,
            vessel_class=table.where.vessel_class,
            wanted_ratio=table.wanted_ratio,
        )
        for table in tables
    )


def end_targets(values: Mapping[str, Any]) -> EndTargets | None:
    """What estimates are drawn to; a class without a target takes the mean of those given."""
    given = {name: values[f"network.{name}"] for name in TARGETS}
    if values["network.terminals"] != "estimate" or None in given.values():
        return None
    by_class, sd = [], []
    for (name, target), unit in zip(given.items(), ("pa", "mmhg"), strict=True):
        known = target if isinstance(target, Mapping) else dict.fromkeys(CLASSES, target)
        mean = sum(known.values()) / len(known)
        by_class.append(tuple(known.get(kind.name.lower(), mean) for kind in VesselClass))
        sd.append(values[f"network.{name.removesuffix(unit)}sd_{unit}"] or TARGET_SD * mean)
    return EndTargets(by_class[0], sd[0], by_class[1], sd[1])


def target_problems(values: Mapping[str, Any], file: str) -> Iterator[Problem]:
    """Targets that estimates need and the study does not give."""
    for name in TARGETS:
        if values["network.terminals"] == "estimate" and values[f"network.{name}"] is None:
            message = f'is missing: terminals = "estimate" draws the flows at unknown ends towards it. Give {name}.'
            yield Problem(file, message, column=f"network.{name}")
