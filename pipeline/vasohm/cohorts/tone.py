"""How much the vessels of a pair of images, and of a group of subjects, changed: one value a subject."""

from typing import Any

import numpy as np
import pandas as pd
from scipy import stats

from vasohm.arrays import BoolArray, FloatArray
from vasohm.cohorts.common_networks import CommonNetworks
from vasohm.cohorts.common_part import CommonPart, is_short, segment_rows
from vasohm.cohorts.states import State, ratio_shared_se, shared_causes
from vasohm.results.columns_vessels import CLASSES
from vasohm.uncertainty import ln_interval

LEAST_SUBJECTS = 2  # from which a spread between subjects can be told


def pair_tone(a: State, b: State, common: CommonPart, networks: CommonNetworks) -> list[dict[str, Any]]:
    """Change of one pair of images: all vessels together, then each class that occurs.

    Notes
    -----
    ln of the radius ratio is averaged over the common length, without stretches shorter than they are wide. Networks
    lie in parallel: conductances add. Noise averages out, what the pair has in common does not.
    """
    of_segment = segment_rows(a, b, common)["vessel_class"].to_numpy(object)
    of_network = a.tables["networks"]["vessel_class"].to_numpy(object)
    rows = []
    for name in ("", *CLASSES):
        chosen = ((of_segment == name) | (name == "")) & ~is_short(a, b, common)
        if not chosen.any():
            continue
        radius = _radius_change(a, b, common, chosen)
        resistance = _resistance_change(a, b, networks, (of_network == name) | (name == ""))
        rows.append(
            {
                "unit": "pair",
                "vessel_class": name,
                "n_subjects": 1,
                "n_segments": int(chosen.sum()),
                "common_length_um": float(common.length_um[chosen].sum()),
                **_cells("radius", *radius),
                **_cells("resistance", *resistance),
            }
        )
    return rows


def group_tone(pairs: pd.DataFrame) -> pd.DataFrame:
    """Change of each group: the subject is the unit, its eyes are averaged first.

    Parameters
    ----------
    pairs : rows of `pair_tone` with group, subject, eye, condition_a and condition_b.

    Returns
    -------
    One row a group, pair of conditions and class. A group of one subject has a ratio and no interval.
    """
    rows = []
    for key, held in pairs.groupby(["group", "condition_a", "condition_b", "vessel_class"], sort=True):
        row = dict(zip(("group", "condition_a", "condition_b", "vessel_class"), key, strict=True))
        row |= {
            "unit": "group",
            "subject": "",
            "eye": "",
            "n_subjects": held["subject"].nunique(),
            "n_segments": int(held["n_segments"].sum()),
            "common_length_um": float(held["common_length_um"].sum()),
        }
        for name in ("radius", "resistance"):
            of_subject = np.log(held[f"{name}_ratio"]).groupby(held["subject"]).mean().dropna().to_numpy()
            row |= _t_cells(name, of_subject)
        rows.append(row)
    return pd.DataFrame(rows)


def _radius_change(a: State, b: State, common: CommonPart, chosen: BoolArray) -> tuple[float, float]:
    """Mean of ln(radius ratio) over the common length, and its standard uncertainty."""
    weight = common.length_um[chosen] / common.length_um[chosen].sum()
    random = np.sqrt(np.nansum(np.square(weight * common.radius_random_se[chosen])))
    of_a, of_b = (weight @ causes[chosen] for causes in (common.of_radius_a, common.of_radius_b))
    shared = float(ratio_shared_se(of_a, of_b, shared_causes(a, b)))
    return float(weight @ common.ln_radius_ratio[chosen]), float(np.hypot(random, shared))


def _resistance_change(a: State, b: State, networks: CommonNetworks, chosen: BoolArray) -> tuple[float, float]:
    """Change of ln R of networks in parallel, and its standard uncertainty; NaN where none has a resistance."""
    chosen = chosen & np.isfinite(networks.resistance_a) & np.isfinite(networks.resistance_b)
    if not chosen.any():
        return np.nan, np.nan
    conductances = [1.0 / resistance[chosen] for resistance in (networks.resistance_a, networks.resistance_b)]
    weight_a, weight_b = (one / one.sum() for one in conductances)
    random = np.sqrt(np.sum(np.square(np.maximum(weight_a, weight_b) * networks.random_se[chosen])))
    of_a, of_b = weight_a @ networks.of_a[chosen], weight_b @ networks.of_b[chosen]
    shared = float(ratio_shared_se(of_a, of_b, shared_causes(a, b)))
    return float(np.log(conductances[0].sum() / conductances[1].sum())), float(np.hypot(random, shared))


def _cells(name: str, ln_ratio: float, se: float) -> dict[str, float]:
    ratio = np.exp(np.array([ln_ratio]))
    low, high = ln_interval(ratio, np.array([se]))
    return {f"{name}_ratio": float(ratio[0]), f"{name}_ratio_lo": float(low[0]), f"{name}_ratio_hi": float(high[0])}


def _t_cells(name: str, ln_ratios: FloatArray) -> dict[str, float]:
    """Geometric mean, 95 % interval by Student's t and p of no change."""
    n = len(ln_ratios)
    mean = float(ln_ratios.mean()) if n else np.nan
    ends, p = (np.nan, np.nan), np.nan
    if n >= LEAST_SUBJECTS:
        se = float(ln_ratios.std(ddof=1) / np.sqrt(n))
        reach = float(stats.t.ppf(0.975, n - 1)) * se
        ends = (float(np.exp(mean - reach)), float(np.exp(mean + reach)))
        p = float(2.0 * stats.t.sf(abs(mean) / se, n - 1)) if se > 0 else np.nan
    return {
        f"{name}_ratio": float(np.exp(mean)),
        f"{name}_ratio_lo": ends[0],
        f"{name}_ratio_hi": ends[1],
        f"{name}_p": p,
    }
