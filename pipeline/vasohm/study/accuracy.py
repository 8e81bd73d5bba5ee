"""From the deviations of all images to what can be said of them: by class of radius, by image, and in one word."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
import pandas as pd

from vasohm.arrays import FloatArray
from vasohm.results.columns_appraisal import APPRAISAL
from vasohm.study.deviations import Deviations
from vasohm.uncertainty import COVERAGE_FACTOR_95

CLASS_EDGES_PX = (0.0, 1.0, 1.5, 2.5, 4.5, 9.0, np.inf)  # true radius
FINE_EDGES_PX = 0.5 * 2.0 ** (np.arange(25) / 3.0)  # thirds of an octave up to 128 px
LEAST_POINTS = 30  # of a class, from which its median error is told
LARGEST_LN_SE = 0.25  # a radius known no better is unresolved
NORMAL_MAD = 1.482602218505602  # standard deviation over median absolute deviation of normal errors


@dataclass(frozen=True, slots=True, eq=False)
class Appraisal:
    """How far measured is from truth, over all images of a study.

    `radius`, `segments`, `networks` and `images` have the columns of the files `appraisal_*.csv`; the last row of
    `radius` is all vessels together. `resolution` is `radius` in thirds of an octave, with the 16 and 84 % quantiles of
    ln(measured over true radius). `points` has one row a measured point with a true one: radius_px (true), across_px,
    ln_ratio, ln_se, ln_se_exact_scale. `summary` is what `appraisal.json` holds.
    """

    radius: pd.DataFrame
    resolution: pd.DataFrame
    segments: pd.DataFrame
    networks: pd.DataFrame
    images: pd.DataFrame
    points: pd.DataFrame
    summary: Mapping[str, Any]
    notes: tuple[str, ...]  # what was left out, and why


def sum_up(images: Sequence[Deviations], notes: Sequence[str]) -> Appraisal:
    """Put the deviations of all images together.

    Parameters
    ----------
    images : at least one.
    notes : what else was there and is not in `images`.
    """
    everything = _pooled(images)
    sizes_um = [image.pixel_size_um for image in images]
    radius = _by_radius(everything, sizes_um[0] if np.ptp(sizes_um) == 0 else np.nan)
    resolution = _resolution(everything.points)
    table = pd.DataFrame([_image_row(image) for image in images])
    return Appraisal(
        radius=_framed("appraisal_radius", radius),
        resolution=resolution,
        segments=_framed("appraisal_segments", everything.segments),
        networks=_framed("appraisal_networks", everything.networks),
        images=_framed("appraisal_images", table),
        points=everything.points,
        summary=_summary(everything, radius, resolution, sizes_um),
        notes=tuple(notes),
    )


def _pooled(images: Sequence[Deviations]) -> Deviations:
    """All images as if they were one."""

    def joined(name: str) -> pd.DataFrame:
        frames = [getattr(image, name) for image in images]
        return pd.concat([frame for frame in frames if len(frame)] or frames[:1], ignore_index=True)

    return Deviations(
        image_id="",
        pixel_size_um=np.nan,
        points=joined("points"),
        true_length=joined("true_length"),
        invented_length=joined("invented_length"),
        segments=joined("segments"),
        networks=joined("networks"),
        counts={name: sum(image.counts[name] for image in images) for name in images[0].counts},
    )


def _framed(table: str, frame: pd.DataFrame) -> pd.DataFrame:
    return frame[[column.name for column in APPRAISAL[table]]].reset_index(drop=True)


def _by_radius(all_images: Deviations, pixel_size_um: float) -> pd.DataFrame:
    """One row a class of true radius, then one for all."""
    rows = []
    bounds = [*pairwise(CLASS_EDGES_PX), (0.0, np.inf)]
    for low, high in bounds:
        end = high if np.isfinite(high) else np.nan
        figures = _figures(all_images, low, high)
        rows.append(
            {
                "radius_from_px": low,
                "radius_to_px": end,
                "radius_from_um": low * pixel_size_um,
                "radius_to_um": end * pixel_size_um,
                **figures,
                "verdict": _verdict(figures),
            }
        )
    return pd.DataFrame(rows)


def _figures(image: Deviations, low: float, high: float) -> dict[str, float]:
    """Figures of the vessels with a true radius from `low` to `high`."""

    def within(frame: pd.DataFrame, column: str = "radius_px") -> pd.DataFrame:
        radius = frame[column].to_numpy(np.float64)
        if low == 0.0 and high == np.inf:
            return frame  # stray vessels without a radius too
        return frame[(radius >= low) & (radius < high)]

    segments = image.segments[image.segments["left_out"] == ""]
    true, invented = within(image.true_length), within(image.invented_length)
    return {
        "length_true_um": float(true["true_um"].sum()),
        "length_found_um": float(true["found_um"].sum()),
        "length_stray_um": float(invented["stray_um"].sum()),
        "length_doubled_um": float(invented["doubled_um"].sum()),
        **_radius_figures(within(image.points)),
        **_resistance_figures(within(segments, "radius_true_px")),
    }


def _radius_figures(points: pd.DataFrame) -> dict[str, float]:
    error, across = _column(points, "ln_ratio"), _column(points, "across_px")
    se, exact = _column(points, "ln_se"), _column(points, "ln_se_exact_scale")
    rms_z, coverage = _against(error, se)
    rms_z_exact, coverage_exact = _against(error, exact)
    return {
        "n_points": len(points),
        "centreline_rms_px": _rms(across),
        "ln_radius_bias": _median(error),
        "ln_radius_scatter": _scatter(error),
        "ln_radius_rmse": _rms(error),
        "ln_radius_se": _median(se),
        "ln_radius_rms_z": rms_z,
        "radius_coverage_95": coverage,
        "ln_radius_rms_z_exact_scale": rms_z_exact,
        "radius_coverage_95_exact_scale": coverage_exact,
    }


def _resistance_figures(segments: pd.DataFrame) -> dict[str, float]:
    """Figures of compared segments, or of compared networks."""
    error, se = _column(segments, "ln_resistance_ratio"), _column(segments, "ln_resistance_se")
    return {
        "n_segments_compared": len(segments),
        "ln_resistance_bias": _median(error),
        "ln_resistance_scatter": _scatter(error),
        "ln_resistance_se": _median(se),
        "ln_resistance_rms_z": _rms(_column(segments, "z")),
        "resistance_coverage_95": _mean(_column(segments, "inside_95")),
        "resistance_coverage_95_exact_scale": _against(error, _column(segments, "ln_resistance_se_exact_scale"))[1],
    }


def _verdict(figures: Mapping[str, float]) -> str:
    if figures["n_points"] < LEAST_POINTS:
        return "too few"
    if not figures["ln_radius_se"] <= LARGEST_LN_SE:
        return "uncertain"
    if abs(figures["ln_radius_bias"]) > COVERAGE_FACTOR_95 * figures["ln_radius_se"]:
        return "biased"
    return "resolved"


def _resolution(points: pd.DataFrame) -> pd.DataFrame:
    """Error and stated uncertainty of the radius against the true radius, finely."""
    place = np.digitize(_column(points, "radius_px"), FINE_EDGES_PX)
    rows = []
    for fine in range(1, len(FINE_EDGES_PX)):
        here = points[place == fine]
        figures = _radius_figures(here)
        low, high = np.quantile(here["ln_ratio"], (0.16, 0.84)) if len(here) else (np.nan, np.nan)
        rows.append(
            {
                "radius_from_px": FINE_EDGES_PX[fine - 1],
                "radius_to_px": FINE_EDGES_PX[fine],
                "radius_least_px": _column(here, "radius_px").min() if len(here) else np.nan,
                "radius_px": _median(_column(here, "radius_px")),
                **figures,
                "ln_radius_q16": low,
                "ln_radius_q84": high,
                "verdict": _verdict(figures),
            }
        )
    return pd.DataFrame(rows)


def smallest_resolved_px(resolution: pd.DataFrame) -> float:
    """Radius from which on vessels are resolved: the least of a bin that is, as is the next wider one that can be told.

    Returns
    -------
    float
        In pixels; NaN where no bin is resolved.
    """
    told = resolution[resolution["verdict"] != "too few"]
    resolved = (told["verdict"] == "resolved").to_numpy()
    steady = resolved & np.append(resolved[1:], True)
    return float(told["radius_least_px"].to_numpy()[np.argmax(steady)]) if steady.any() else np.nan


def _image_row(image: Deviations) -> dict[str, Any]:
    counts = dict(image.counts)
    return {
        "image_id": image.image_id,
        "pixel_size_um": image.pixel_size_um,
        **_figures(image, 0.0, np.inf),
        **counts,
        **_scores(counts, "branchings"),
        **_scores(counts, "crossings"),
        **_class_shares(counts),
    }


def _class_shares(counts: Mapping[str, float]) -> dict[str, float]:
    """Share of the length that has a class, and of that the share where it is right."""
    true, said, right = (counts[f"class_{which}_um"] for which in ("true", "said", "right"))
    return {
        "class_said_fraction": said / true if true else np.nan,
        "class_right_fraction": right / said if said else np.nan,
    }


def _scores(counts: Mapping[str, float], name: str) -> dict[str, float]:
    """Recall, precision and F1 of places."""
    found, true, measured = (counts[f"{name}_{which}"] for which in ("found", "true", "measured"))
    return {
        f"{name}_recall": found / true if true else np.nan,
        f"{name}_precision": found / measured if measured else np.nan,
        f"{name}_f1": 2 * found / (true + measured) if true + measured else np.nan,
    }


def _summary(
    all_images: Deviations, radius: pd.DataFrame, resolution: pd.DataFrame, sizes_um: Sequence[float]
) -> dict[str, Any]:
    total = radius.iloc[-1]
    smallest = smallest_resolved_px(resolution)
    names = ("length_true_um", "length_found_um", "length_stray_um", "length_doubled_um")
    counts: dict[str, float] = dict(all_images.counts)
    return {
        "n_images": len(sizes_um),
        "pixel_size_um": sorted(set(sizes_um)),
        "smallest_resolved_radius_px": smallest,
        "smallest_resolved_radius_um": smallest * sizes_um[0] if len(set(sizes_um)) == 1 else np.nan,
        "length": {name: float(total[name]) for name in names},
        "radius": _radius_figures(all_images.points),
        "segments": _ratios(all_images.segments, ("length_ratio", "radius_hydraulic_ratio", "resistance_ratio")),
        "networks": _ratios(all_images.networks, ("resistance_ratio",)),
        **{name: _part(counts | _scores(counts, name), name) for name in ("branchings", "crossings")},
        "classes": _part(counts | _class_shares(counts), "class"),
        "loops": _part(counts, "loops"),
        "networks_counted": _part(counts, "networks"),
    }


def _part(counts: Mapping[str, float], name: str) -> dict[str, float]:
    return {key.removeprefix(f"{name}_"): value for key, value in counts.items() if key.startswith(f"{name}_")}


def _ratios(table: pd.DataFrame, names: Sequence[str]) -> dict[str, Any]:
    """Ratios of what is compared, how well their uncertainty is stated, and how many were left out and why."""
    compared = table[table["left_out"] == ""]
    figures = {name.replace("segments_", ""): value for name, value in _resistance_figures(compared).items()}
    reasons = {reason: int(n) for reason, n in sorted(table["left_out"].value_counts().items()) if reason}
    return {
        "n_measured": len(table),
        "left_out": reasons,
        **{name: _geometric(_column(compared, name)) for name in names},
        **figures,
    }


def _geometric(ratios: FloatArray) -> dict[str, float]:
    """Geometric mean and spread of ratios; `ln_sd` is the standard deviation of their logarithm."""
    ln = np.log(ratios[ratios > 0])
    return {
        "geometric_mean": float(np.exp(_mean(ln))),
        "ln_sd": float(np.std(ln, ddof=1)) if len(ln) > 1 else np.nan,
        "median": float(np.exp(_median(ln))),
        "ln_scatter": _scatter(ln),
    }


def _column(frame: pd.DataFrame, name: str) -> FloatArray:
    return frame[name].to_numpy(np.float64)


def _against(error: FloatArray, se: FloatArray) -> tuple[float, float]:
    """Root mean square of error over stated uncertainty, and share of errors within 1.96 of it."""
    known = np.isfinite(error) & (se > 0)
    z = error[known] / se[known]
    return _rms(z), _mean(np.abs(z) <= COVERAGE_FACTOR_95)


def _mean(values: FloatArray) -> float:
    return float(np.mean(values)) if len(values) else np.nan


def _median(values: FloatArray) -> float:
    known = values[np.isfinite(values)]
    return float(np.median(known)) if len(known) else np.nan


def _rms(values: FloatArray) -> float:
    known = values[np.isfinite(values)]
    return float(np.sqrt(np.mean(known**2))) if len(known) else np.nan


def _scatter(values: FloatArray) -> float:
    known = values[np.isfinite(values)]
    return float(NORMAL_MAD * np.median(np.abs(known - np.median(known)))) if len(known) else np.nan
