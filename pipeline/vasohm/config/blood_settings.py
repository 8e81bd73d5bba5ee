"""What a study says of blood: checked against itself, and turned into settings."""

from collections.abc import Iterator, Mapping
from typing import Any

from vasohm.errors import Problem
from vasohm.flow.rheology import LAWS, BloodSettings

SCALED = "red-cell-volume"


def blood_settings(values: Mapping[str, Any]) -> BloodSettings:
    """Settings of blood from the resolved keys of a study."""
    return BloodSettings(
        law=values["blood.law"],
        hematocrit=values["blood.hematocrit"],
        hematocrit_se=values["blood.hematocrit_se"],
        plasma_viscosity_mpa_s=values["blood.plasma_viscosity_mpa_s"],
        viscosity_mpa_s=values["blood.viscosity_mpa_s"],
        parameters=values["blood.parameters"],
        plasma_viscosity_se_mpa_s=values["blood.plasma_viscosity_se_mpa_s"],
        red_cell_volume_fl=values["blood.red_cell_volume_fl"] if values["blood.diameter_scaling"] == SCALED else None,
        split_law=values["blood.split_law"] if values["blood.hematocrit_split"] else None,
        density_kg_m3=values["blood.density_kg_m3"],
        heart_rate_per_min=values["blood.heart_rate_per_min"],
    )


def blood_problems(values: Mapping[str, Any], file: str) -> Iterator[Problem]:
    """Constants that the law or the scaling needs and the study does not give."""
    if values["blood.diameter_scaling"] == SCALED and values["blood.red_cell_volume_fl"] is None:
        message = f"is missing: diameter_scaling = {SCALED!r} needs it. Give the cells' mean volume (human 92, rat 55)."
        yield Problem(file, message, column="blood.red_cell_volume_fl")
    law = LAWS.get(values["blood.law"])
    given = {"viscosity_mpa_s", *values["blood.parameters"]}
    for name in law.example_parameters if law is not None else ():
        if name not in given:
            message = f"is missing: law {values['blood.law']!r} needs it. Give it in [blood.parameters]."
            yield Problem(file, message, column=f"blood.parameters.{name}")


def blood_warnings(values: Mapping[str, Any]) -> Iterator[str]:
    """What a study says of blood without effect."""
    if values["blood.red_cell_volume_fl"] is not None and values["blood.diameter_scaling"] != SCALED:
        yield f"red_cell_volume_fl has no effect without diameter_scaling = {SCALED!r}."
