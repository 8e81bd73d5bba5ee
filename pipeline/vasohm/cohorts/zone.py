"""Vessels inside the zone around the optic disc, which images of different crop have in common."""

import numpy as np
import pandas as pd

from vasohm.arrays import FloatArray, IntArray
from vasohm.results.columns_cohorts import ZONE
from vasohm.units import M_PER_UM, PA_S_PER_MPA_S

RINGS = 10  # into which the zone is cut: between two of them few vessels begin or end
POINTS = ("segment_id", "x_px", "y_px", "s_um", "radius_um")
SEGMENTS = (
    "segment_id",
    "vessel_class",
    "viscosity_mpa_s",
    "ln_resistance_random_se",
    "ln_resistance_shared_se",
)


def zone_rows(image: "pd.Series[float]", points: pd.DataFrame, segments: pd.DataFrame) -> pd.DataFrame:
    """Sum up the vessels of each class inside the zone of one image.

    Parameters
    ----------
    image : row of the image, with `image_id`, the disc's centre and the zone's radii, in px.
    points, segments : its tables, with the columns POINTS and SEGMENTS.

    Returns
    -------
    DataFrame
        The columns of the table `zone`; vessels without a class have a row of their own. Where in some ring of the zone
        no vessel leads outwards there is no resistance.

    Notes
    -----
    The zone is cut into rings. In a ring vessels lie side by side, the rings are in series. A vessel that leads through
    a part f of a ring's width, with resistance R there, counts as conductance f (f / R): whole where it crosses,
    nothing where it runs along. R is Poiseuille's (Sutera and Skalak, Annu Rev Fluid Mech 1993;25:1-20, eq. 1, applied
    locally), with the segment's apparent viscosity.
    """
    inner, outer = float(image["zone_inner_px"]), float(image["zone_outer_px"])
    steps = _steps(points)
    away = np.hypot(steps["x_px"] - image["disc_x_px"], steps["y_px"] - image["disc_y_px"])
    inside = (away >= inner) & (away < outer) & np.isfinite(steps["radius_um"])
    held = steps[inside].merge(segments[list(SEGMENTS)], on="segment_id", how="inner")
    ring = np.minimum((away[inside].to_numpy() - inner) / (outer - inner) * RINGS, RINGS - 1).astype(np.int64)
    outward = _outward(held, image)
    rows = []
    for vessel_class in sorted(held["vessel_class"].unique()):
        own = (held["vessel_class"] == vessel_class).to_numpy()
        chosen = held[own]
        length = chosen["ds_um"].to_numpy(np.float64)
        resistance, random_se, shared_se = _resistance(chosen, ring[own], outward[own], (outer - inner) / RINGS)
        rows.append(
            {
                "image_id": image["image_id"],
                "vessel_class": vessel_class,
                "n_segments": chosen["segment_id"].nunique(),
                "length_um": float(length.sum()),
                "radius_um": float(np.exp(np.average(np.log(chosen["radius_um"]), weights=length))),
                "resistance_pa_s_m3": resistance,
                "ln_resistance_random_se": random_se,
                "ln_resistance_shared_se": shared_se,
            }
        )
    return pd.DataFrame(rows, columns=[column.name for column in ZONE])


def _steps(points: pd.DataFrame) -> pd.DataFrame:
    """Steps between neighbouring points of a segment: their middle, length and radius."""
    before, after = points.iloc[:-1].reset_index(drop=True), points.iloc[1:].reset_index(drop=True)
    steps = (before + after) / 2
    steps["segment_id"] = before["segment_id"]
    steps["ds_um"] = after["s_um"] - before["s_um"]
    steps["dx_px"], steps["dy_px"] = after["x_px"] - before["x_px"], after["y_px"] - before["y_px"]
    return steps[(before["segment_id"] == after["segment_id"]) & (steps["ds_um"] > 0)].reset_index(drop=True)


def _outward(steps: pd.DataFrame, image: "pd.Series[float]") -> FloatArray:
    """How far each step leads away from the disc, in px."""
    x, y = steps["x_px"] - image["disc_x_px"], steps["y_px"] - image["disc_y_px"]
    return np.asarray((x * steps["dx_px"] + y * steps["dy_px"]) / np.hypot(x, y), dtype=np.float64)


def _resistance(
    steps: pd.DataFrame, ring: IntArray, outward: FloatArray, width_px: float
) -> tuple[float, float, float]:
    """Resistance of the zone with its random and shared uncertainty, as of ln; NaN where a ring is empty."""
    viscosity_pa_s = steps["viscosity_mpa_s"].to_numpy(np.float64) * PA_S_PER_MPA_S
    radius_m, ds_m = (steps[name].to_numpy(np.float64) * M_PER_UM for name in ("radius_um", "ds_um"))
    parts = pd.DataFrame(
        {
            "segment_id": steps["segment_id"],
            "ring": ring,
            "outward": outward,
            "resistance": 8 * viscosity_pa_s * ds_m / (np.pi * radius_m**4),
            "random": steps["ln_resistance_random_se"],
            "shared": steps["ln_resistance_shared_se"],
        }
    )
    runs = parts.groupby(["ring", "segment_id"], as_index=False).agg(
        {"outward": "sum", "resistance": "sum", "random": "first", "shared": "first"}
    )
    share = np.minimum(np.abs(runs["outward"]) / width_px, 1.0)
    conductance = np.square(share) / runs["resistance"]
    of_ring = conductance.groupby(runs["ring"]).sum().reindex(range(RINGS), fill_value=0.0)
    if not (of_ring > 0).all() or not np.isfinite(of_ring).all():
        return np.nan, np.nan, np.nan
    total = float((1 / of_ring).sum())
    weight = conductance / np.square(of_ring.loc[runs["ring"]].to_numpy()) / total
    of_segment = weight.groupby(runs["segment_id"]).sum()
    random = runs.groupby("segment_id")["random"].first().fillna(0.0)
    return (
        total,
        float(np.sqrt(np.sum(np.square(of_segment * random)))),
        float(np.sum(weight * runs["shared"].fillna(0.0))),
    )
