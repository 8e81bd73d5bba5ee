"""From rows of vessels and networks to one value an image and class, with its uncertainty."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from vasohm.arrays import AnyArray, FloatArray
from vasohm.results.column import Column
from vasohm.results.schema import outcome_columns

# How quantities go with the edge of a pixel: by unit, and of numbers without one. Resistance is length over the fourth
# power of radius; flows and velocities are those at a given drop of pressure.
PIXEL_POWERS: Mapping[str, float] = {
    "um": 1.0,
    "um2": 2.0,
    "um3": 3.0,
    "/mm": -1.0,
    "/mm2": -2.0,
    "/um": -1.0,
    "Pa.s/m3": -3.0,
    "nL/min": 3.0,
    "mm/s": 1.0,
}
PIXEL_POWERS_BY_NAME: Mapping[str, float] = {"reynolds": 2.0, "womersley": 1.0}
RESISTANCE = "resistance_pa_s_m3"
HYDRAULIC = "radius_hydraulic_um"
ROUNDING = 1e-12  # relative; what is left of equal squares
RADIUS_POWER = 4.0  # resistance goes with the inverse fourth power of radius
SUMMED_UNITS = ("um", "um2", "um3", "nL/min")  # of a network: lengths, areas, volumes, flows add up
# Names with a blank, which no column of the results has.
VALUE, REL_SE, SHARED_REL_SE = "the value", "its relative se", "its shared relative se"
ZONE_OF_IMAGE = ("disc_x_px", "disc_y_px", "zone_inner_px", "zone_outer_px")
VALUES = ("image_id", "vessel_class", VALUE, REL_SE, SHARED_REL_SE)


@dataclass(frozen=True, slots=True)
class Outcome:
    """A column of the results, of one range of calibre where that is asked for."""

    name: str  # table.column
    radius_um: tuple[float, float] | None = None

    @property
    def table(self) -> str:
        return self.name.partition(".")[0]

    @property
    def column(self) -> Column:
        name = self.name.partition(".")[2]
        return next(column for column in outcome_columns(self.table) if column.name == name)

    @property
    def calibre_class(self) -> str:
        if self.radius_um is None:
            return ""
        low, high = self.radius_um
        return f"{low:g}-{high:g}" if np.isfinite(high) else f"{low:g}-"


def columns_needed(outcomes: Sequence[Outcome]) -> dict[str, set[str]]:
    """Columns of each table that `image_values` reads; images are always needed."""
    needed: dict[str, set[str]] = {
        "image": {"image_id", "pixel_size_um", "pixel_size_se_um", "pixel_size_source", "flags"}
    }
    for outcome in outcomes:
        if outcome.table == "zone":  # made from the images' own tables
            needed["image"] |= set(ZONE_OF_IMAGE)
            continue
        name = outcome.column.name
        own = {"image_id", name, *_se_names(outcome.table, name)}
        if outcome.table != "image":
            own |= {"vessel_class", "length_um"}
        if outcome.radius_um is not None:
            own.add("radius_mean_um")
        needed.setdefault(outcome.table, set()).update(own)
    return needed


def image_values(outcome: Outcome, tables: Mapping[str, pd.DataFrame]) -> pd.DataFrame:
    """Bring an outcome to one value an image and class.

    Parameters
    ----------
    outcome : what is asked for.
    tables : `image` and the outcome's own, with the columns of `columns_needed`, of all images.

    Returns
    -------
    DataFrame
        the columns VALUES; the relative standard uncertainties are of the measurement's own and of the pixel size.
        Rows without a value are left out.

    Notes
    -----
    Conductances of the networks of an image are summed, as of networks side by side; their lengths, areas, volumes,
    flows and counts are summed too. Everything else, and all of segments, is a mean weighted by length: of logarithms
    where no value is 0 or below. Random uncertainty shrinks with the number of vessels, what an image shares does not
    (JCGM 100:2008, eq. 13 and 5.2.2). Where a class is said of any vessel of the study, those without one are left out.
    """
    rows = tables[outcome.table]
    name = outcome.column.name
    rows = rows[np.isfinite(rows[name])]
    if outcome.radius_um is not None:
        low, high = outcome.radius_um
        rows = rows[(rows["radius_mean_um"] >= low) & (rows["radius_mean_um"] < high)]
    if outcome.table != "image":
        if (rows["vessel_class"] != "").any():
            rows = rows[rows["vessel_class"] != ""]
        rows = rows[rows["length_um"] > 0]
    pixel_rel = _pixel_rel_se(tables["image"])
    power = PIXEL_POWERS_BY_NAME.get(name, PIXEL_POWERS.get(outcome.column.unit, 0.0))
    classes = (
        rows["vessel_class"].to_numpy(dtype=object) if outcome.table != "image" else np.full(len(rows), "", object)
    )
    image_ids = rows["image_id"].to_numpy(dtype=object)
    calibration_se = np.abs(power) * pixel_rel.reindex(image_ids).to_numpy(np.float64)
    own_se, common_se = _own_and_common(rows, outcome.table, name, calibration_se)
    combine = _rule(outcome, rows[name].to_numpy(np.float64))
    found = []
    keys = pd.DataFrame({"image_id": image_ids, "vessel_class": classes})
    length = rows["length_um"].to_numpy(np.float64) if outcome.table != "image" else np.ones(len(rows))
    value = rows[name].to_numpy(np.float64)
    groups: Mapping[Any, Any] = keys.groupby(["image_id", "vessel_class"], sort=True).indices
    for (image_id, vessel_class), place in groups.items():
        total, weight = combine(value[place], length[place])
        own = np.hypot(np.sqrt(np.sum(np.square(weight * own_se[place]))), np.sum(weight * common_se[place]))
        shared = np.abs(power) * pixel_rel.get(image_id, 0.0)
        found.append((image_id, vessel_class, total, own, shared))
    return pd.DataFrame(found, columns=list(VALUES))


def _rule(outcome: Outcome, value: FloatArray) -> Any:
    """How values of one image and class become one, and the weight of each in its relative change."""
    if outcome.table == "networks" and outcome.column.name.startswith(RESISTANCE):
        return _side_by_side
    if outcome.table == "networks" and (outcome.column.type == "integer" or outcome.column.unit in SUMMED_UNITS):
        return _summed
    return _geometric if bool((value > 0).all()) else _arithmetic


def _side_by_side(value: FloatArray, _length: FloatArray) -> tuple[float, FloatArray]:
    conductance = 1 / value
    total = float(conductance.sum())
    return 1 / total, conductance / total


def _summed(value: FloatArray, _length: FloatArray) -> tuple[float, FloatArray]:
    total = float(value.sum())
    return total, value / total if total > 0 else np.zeros(len(value))


def _geometric(value: FloatArray, length: FloatArray) -> tuple[float, FloatArray]:
    weight = length / length.sum()
    return float(np.exp(weight @ np.log(value))), weight


def _arithmetic(value: FloatArray, length: FloatArray) -> tuple[float, FloatArray]:
    weight = length / length.sum()
    total = float(weight @ value)
    return total, weight * value / total if total != 0 else np.zeros(len(value))


def _pixel_rel_se(images: pd.DataFrame) -> "pd.Series[float]":
    relative = (images["pixel_size_se_um"] / images["pixel_size_um"]).fillna(0.0)
    return pd.Series(relative.to_numpy(np.float64), index=images["image_id"].to_numpy())


def _se_names(table: str, name: str) -> tuple[str, ...]:
    """Columns that tell the uncertainty of another one."""
    known = {column.name for column in outcome_columns(table)}
    resistive = ("ln_resistance_random_se", "ln_resistance_shared_se")
    if name == RESISTANCE:
        return resistive
    stem, _, unit = name.rpartition("_")
    told = tuple(one for one in (f"{stem}_se_{unit}", f"{name}_se") if one in known)
    return (*told, resistive[0]) if name == HYDRAULIC else told


def _own_and_common(rows: pd.DataFrame, table: str, name: str, calibration_se: FloatArray) -> tuple[AnyArray, AnyArray]:
    """Relative uncertainty of each row: random, and common to its image without the pixel size."""
    told = [rows[one].fillna(0.0).to_numpy(np.float64) for one in _se_names(table, name)]
    if not told:
        return np.zeros(len(rows)), np.zeros(len(rows))
    if name == RESISTANCE:
        return told[0], _without(told[1], calibration_se)
    size = np.abs(rows[name].to_numpy(np.float64))
    whole = _without(np.divide(told[0], size, out=np.zeros(len(rows)), where=size > 0), calibration_se)
    if name == HYDRAULIC:
        random = np.minimum(told[1] / RADIUS_POWER, whole)
        return random, _without(whole, random)
    return whole, np.zeros(len(rows))


def _without(whole: FloatArray, part: FloatArray) -> FloatArray:
    left = np.square(whole) - np.square(part)
    return np.sqrt(np.where(left > ROUNDING * np.square(whole), left, 0.0))
