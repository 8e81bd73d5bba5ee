"""One image against its truth: how far each point, segment and network is off, and what was found or invented."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd

from vasohm.arrays import AnyArray, BoolArray, FloatArray, IntArray
from vasohm.cohorts.matching import LEAST_REACH_PX, Feet, Pieces, Track, feet, pair_places, pieces, track
from vasohm.flow.rheology import Blood
from vasohm.network.groups import sum_by
from vasohm.uncertainty import quadrature
from vasohm.units import M_PER_UM, PA_S_PER_MPA_S

LEAST_IN_COMMON = 0.8  # of a segment's or network's length: below it there is no one true resistance to compare with
SAME_SCALE = 1e-6  # relative difference of two pixel sizes that are one
SAME_VISCOSITY = 1e-3  # relative difference between the truth's viscosity and that of the measurement's law
LN_STEP = 1e-4  # of a central difference in ln r
HALVINGS = 60  # of a bracket in ln r: to rounding


@dataclass(frozen=True, slots=True, eq=False)
class Bed:
    """The tables of one image, measured or true: image, segments, points, nodes, crossings, networks."""

    image_id: str
    tables: Mapping[str, pd.DataFrame]

    @property
    def pixel_size_um(self) -> float:
        return float(self.tables["image"]["pixel_size_um"].iloc[0])

    @property
    def pixel_size_rel_se(self) -> float:
        """Stated standard uncertainty of the pixel size, relative; 0 where none is stated."""
        image = self.tables["image"]
        se_um = float(image["pixel_size_se_um"].iloc[0]) if "pixel_size_se_um" in image else 0.0
        return 0.0 if np.isnan(se_um) else se_um / self.pixel_size_um


@dataclass(frozen=True, slots=True, eq=False)
class Deviations:
    """One image against its truth, as tables; radii are true ones in pixels unless said."""

    image_id: str
    pixel_size_um: float
    points: pd.DataFrame  # radius_px, across_px, ln_ratio, ln_se, ln_se_exact_scale: one row a matched point
    true_length: pd.DataFrame  # radius_px, true_um, found_um: one row a true point
    invented_length: pd.DataFrame  # radius_px (measured, for stray), stray_um, doubled_um
    segments: pd.DataFrame
    networks: pd.DataFrame
    counts: Mapping[str, float]  # numbers of places and of networks, and lengths with a class, um


@dataclass(frozen=True, slots=True)
class _Basis:
    """What true resistances are computed with, and what a stated uncertainty holds of the pixel size for nothing."""

    blood: Blood
    hematocrit: float
    true_pixel_size_um: float
    scale_rel_se: float  # of a pixel size that is exactly the true one; 0 where it is not


@dataclass(frozen=True, slots=True, eq=False)
class _Match:
    """Both beds as tracks, and how they lie on each other."""

    measured: Track
    true: Track
    on_truth: Feet
    pieces: Pieces
    found: BoolArray  # (n,) of true points


def deviations(measured: Bed, true: Bed, blood: Blood, hematocrit: float) -> Deviations:
    """Hold one measured image against its truth.

    Parameters
    ----------
    blood, hematocrit
        Of the measurement: true resistances are computed with the same law.
    """
    match = _match(measured, true)
    exact = abs(measured.pixel_size_um / true.pixel_size_um - 1) <= SAME_SCALE
    scale_rel_se = measured.pixel_size_rel_se if exact else 0.0
    basis = _Basis(blood, hematocrit, true.pixel_size_um, scale_rel_se)
    return Deviations(
        image_id=measured.image_id,
        pixel_size_um=measured.pixel_size_um,
        points=_points(measured, true, match, scale_rel_se),
        true_length=_true_length(true, match),
        invented_length=_invented_length(measured, match),
        segments=_segments(measured, match, basis),
        networks=_networks(measured, true, match, basis),
        counts=_counts(measured, true) | _class_lengths(measured, true, match),
    )


def _match(measured: Bed, true: Bed) -> _Match:
    a = track(measured.tables["points"], measured.tables["segments"], measured.pixel_size_um, reaching=False)
    b = track(true.tables["points"], true.tables["segments"], true.pixel_size_um, reaching=True)
    on_truth = feet(a, b)
    return _Match(a, b, on_truth, pieces(a, on_truth), feet(b, a).found)


def _points(measured: Bed, true: Bed, match: _Match, scale_rel_se: float) -> pd.DataFrame:
    se_px = _in_track_order(measured, "radius_se_um") / measured.pixel_size_um
    radius_px, true_px = match.measured.radius_px, match.on_truth.radius_px
    ratio = radius_px * measured.pixel_size_um / (true_px * true.pixel_size_um)
    kept = match.on_truth.found & (ratio > 0)
    ln_se = se_px[kept] / radius_px[kept]
    return pd.DataFrame(
        {
            "radius_px": true_px[kept],
            "across_px": match.on_truth.across_px[kept],
            "ln_ratio": np.log(ratio[kept]),
            "ln_se": ln_se,
            "ln_se_exact_scale": _without(ln_se, scale_rel_se),
        }
    )


def _in_track_order(bed: Bed, column: str) -> FloatArray:
    """Column of the points table in the order in which `track` has them."""
    points, segments = bed.tables["points"], bed.tables["segments"]
    row = pd.Series(np.arange(len(segments)), index=segments["segment_id"]).reindex(points["segment_id"])
    order = np.lexsort((points["point"].to_numpy(), row.to_numpy()))
    return points[column].to_numpy(np.float64)[order]


def _without(ln_se: FloatArray, part: FloatArray | float) -> FloatArray:
    """Standard uncertainty without one of its independent parts."""
    return np.sqrt(np.maximum(np.square(ln_se) - np.square(part), 0.0))


def _true_length(true: Bed, match: _Match) -> pd.DataFrame:
    length_um = match.true.weight_px * true.pixel_size_um
    return pd.DataFrame(
        {"radius_px": match.true.radius_px, "true_um": length_um, "found_um": np.where(match.found, length_um, 0.0)}
    )


def _invented_length(measured: Bed, match: _Match) -> pd.DataFrame:
    stray = ~match.on_truth.found
    again = match.pieces.doubled_px > 0
    stray_um = match.measured.weight_px[stray] * measured.pixel_size_um
    doubled_um = match.pieces.doubled_px[again] * measured.pixel_size_um
    radius_px = np.concatenate((match.measured.radius_px[stray], match.on_truth.radius_px[match.pieces.begin[again]]))
    return pd.DataFrame(
        {
            "radius_px": radius_px,
            "stray_um": np.concatenate((stray_um, np.zeros(len(doubled_um)))),
            "doubled_um": np.concatenate((np.zeros(len(stray_um)), doubled_um)),
        }
    )


def _segments(measured: Bed, match: _Match, basis: _Basis) -> pd.DataFrame:
    """True length, hydraulic radius and resistance of the stretch that each measured segment runs along."""
    table, n = measured.tables["segments"], len(measured.tables["segments"])
    px_um, true_px_um = measured.pixel_size_um, basis.true_pixel_size_um
    cells = _hematocrit(table, basis)
    found = match.pieces
    owner = match.measured.segment[found.begin]
    length_px = sum_by(owner, found.length_px, n)
    true_px = sum_by(owner, found.true_length_px, n)
    whole_px = sum_by(match.measured.segment, match.measured.weight_px, n)
    hindrance = [
        _hindrance(basis.blood, match.on_truth.radius_px[point] * true_px_um, cells[owner])
        for point in (found.begin, found.begin + 1)
    ]
    moved = found.true_length_px > 0  # a vessel that lets no blood pass is infinite times its length
    total = sum_by(owner[moved], (0.5 * (hindrance[0] + hindrance[1]) * found.true_length_px)[moved], n)
    length_um = table["length_um"].to_numpy(np.float64)
    length_ratio = _ratio(length_px * px_um, true_px * true_px_um)
    mean = _ratio(total, true_px)
    partner = _whole_partners(match, owner, n)
    one = partner >= 0
    if one.any():
        at_points = _hindrance(
            basis.blood, match.true.radius_px * true_px_um, _of_segment(partner, cells, match.true)[match.true.segment]
        )
        n_true = int(match.true.segment.max()) + 1
        long_px = sum_by(match.true.segment, match.true.weight_px, n_true)
        whole = _ratio(sum_by(match.true.segment, at_points * match.true.weight_px, n_true), long_px)
        mean[one] = whole[partner[one]]
        length_ratio[one] = length_um[one] / (long_px[partner[one]] * true_px_um)
    radius_um = _radius_of(basis.blood, mean, cells)
    resistance = 8.0 / np.pi * PA_S_PER_MPA_S / M_PER_UM**3 * mean * _ratio(length_um, length_ratio)
    matched = _ratio(length_px, whole_px)
    scale_ln_se = basis.scale_rel_se * np.abs(1.0 + _exponent(basis.blood, table, cells))
    compared = _compared(table, resistance, scale_ln_se)
    held_against: dict[str, AnyArray] = {
        "matched_fraction": matched,
        "length_ratio": length_ratio,
        "radius_true_px": radius_um / true_px_um,
        "radius_hydraulic_true_um": radius_um,
        "radius_hydraulic_ratio": table["radius_hydraulic_um"].to_numpy(np.float64) / radius_um,
        **compared,
        "left_out": _left_out(~(matched >= LEAST_IN_COMMON), ~np.isfinite(compared["ln_resistance_ratio"])),
    }
    return table.assign(**held_against)


def _whole_partners(match: _Match, owner: IntArray, n: int) -> IntArray:
    """True segment (n,) that a measured one covers from end to end, -1 where there is none.

    Such a pair is compared whole: on the stretch in common a segment can only be too long, never too short.
    """
    found = match.pieces
    partner = np.full(n, -1)
    if not len(owner):
        return partner
    low, high, longest = np.full(n, np.inf), np.full(n, -np.inf), np.zeros(n)
    one = np.full(n, np.iinfo(np.int64).max)
    other = np.full(n, -1)
    np.minimum.at(one, owner, found.true_segment)
    np.maximum.at(other, owner, found.true_segment)
    for point in (found.begin, found.begin + 1):
        np.minimum.at(low, owner, match.on_truth.s_px[point])
        np.maximum.at(high, owner, match.on_truth.s_px[point])
        np.maximum.at(longest, owner, match.on_truth.radius_px[point])
    end = np.zeros(int(match.true.segment.max()) + 1)
    np.maximum.at(end, match.true.segment, match.true.s_px)
    slack = np.maximum(LEAST_REACH_PX, longest)
    single = one == other
    whole = single & (low <= slack) & (end[np.where(single, one, 0)] - high <= slack)
    partner[whole] = one[whole]
    counts = np.bincount(partner[whole], minlength=len(end))
    partner[whole & (counts[np.maximum(partner, 0)] > 1)] = -1
    return partner


def _of_segment(partner: IntArray, values: FloatArray, true: Track) -> FloatArray:
    """Hand the values of measured segments to their true partners; the first value where a true one has none."""
    given = np.full(int(true.segment.max()) + 1, values[0])
    given[partner[partner >= 0]] = values[partner >= 0]
    return given


def _compared(table: pd.DataFrame, true_pa_s_m3: FloatArray, scale_ln_se: FloatArray) -> dict[str, FloatArray]:
    """Ratio, stated uncertainty, z and whether the interval holds the truth, of resistances in a table."""
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = table["resistance_pa_s_m3"].to_numpy(np.float64) / true_pa_s_m3
        ratio = np.where(np.isfinite(ratio) & (ratio > 0), ratio, np.nan)
        ln_ratio = np.log(ratio)
        ln_se = quadrature(
            table["ln_resistance_random_se"].to_numpy(np.float64), table["ln_resistance_shared_se"].to_numpy(np.float64)
        )
        z = np.where(ln_se > 0, ln_ratio / ln_se, np.nan)
    low = table["resistance_lo_pa_s_m3"].to_numpy(np.float64)
    high = table["resistance_hi_pa_s_m3"].to_numpy(np.float64)
    inside = np.where(np.isfinite(ln_ratio), (low <= true_pa_s_m3) & (true_pa_s_m3 <= high), np.nan)
    return {
        "resistance_true_pa_s_m3": np.where(np.isfinite(true_pa_s_m3), true_pa_s_m3, np.nan),
        "resistance_ratio": ratio,
        "ln_resistance_ratio": ln_ratio,
        "ln_resistance_se": ln_se,
        "z": z,
        "inside_95": inside,
        "ln_resistance_se_exact_scale": _without(ln_se, scale_ln_se),
    }


def _left_out(no_match: BoolArray, no_resistance: BoolArray) -> AnyArray:
    return np.where(no_match, "match", np.where(no_resistance, "resistance", "")).astype(object)


def _hematocrit(segments: pd.DataFrame, basis: _Basis) -> FloatArray:
    return np.nan_to_num(segments["hematocrit"].to_numpy(np.float64), nan=basis.hematocrit)


def _ratio(a: FloatArray, b: FloatArray) -> FloatArray:
    """Quotient, NaN where the divisor is zero or not known."""
    known = np.isfinite(b) & (b != 0)
    return np.where(known, a / np.where(known, b, 1.0), np.nan)


def _hindrance(blood: Blood, radius_um: FloatArray, hematocrit: FloatArray) -> FloatArray:
    """μ r⁻⁴ in mPa·s/µm⁴; infinite where no blood can pass."""
    return blood.viscosity(radius_um, hematocrit) / radius_um**4


def _exponent(blood: Blood, table: pd.DataFrame, hematocrit: FloatArray) -> FloatArray:
    """Slope d ln R / d ln r at each segment's measured hydraulic radius; 0 where there is none."""
    radius_um = table["radius_hydraulic_um"].to_numpy(np.float64)
    known = np.isfinite(radius_um) & (radius_um > 0)
    radius_um = np.where(known, radius_um, 1.0)
    with np.errstate(invalid="ignore"):
        wider, thinner = (_hindrance(blood, radius_um * np.exp(step), hematocrit) for step in (LN_STEP, -LN_STEP))
        slope = np.log(wider / thinner) / (2 * LN_STEP)
    return np.where(known & np.isfinite(slope), slope, 0.0)


def _radius_of(blood: Blood, hindrance: FloatArray, hematocrit: FloatArray) -> FloatArray:
    """Radius of the uniform tube with a mean μ r⁻⁴, by halving a bracket; NaN where the mean is not finite."""
    known = np.isfinite(hindrance)
    low, high = np.full(len(hindrance), np.log(1e-2)), np.full(len(hindrance), np.log(1e4))
    for _ in range(HALVINGS):
        middle = 0.5 * (low + high)
        too_thin = _hindrance(blood, np.exp(middle), hematocrit) > np.where(known, hindrance, 1.0)
        low, high = np.where(too_thin, middle, low), np.where(too_thin, high, middle)
    return np.where(known, np.exp(0.5 * (low + high)), np.nan)


def _networks(measured: Bed, true: Bed, match: _Match, basis: _Basis) -> pd.DataFrame:
    """Each measured network against the true one with which it has most length in common."""
    table, truth = measured.tables["networks"], true.tables["networks"]
    network = _index_of(measured.tables["segments"]["network_id"], table["network_id"])
    true_network = _index_of(true.tables["segments"]["network_id"], truth["network_id"])
    common_um = np.zeros((len(table), max(len(truth), 1)))
    found = match.pieces
    once_px = found.true_length_px - found.doubled_px
    rows, columns = network[match.measured.segment[found.begin]], true_network[found.true_segment]
    np.add.at(common_um, (rows, columns), once_px * true.pixel_size_um)
    best = np.argmax(common_um, axis=1) if len(table) else np.zeros(0, np.int64)
    held = common_um[np.arange(len(table)), best]
    partner = truth.reindex(best).reset_index(drop=True)
    found_fraction = _ratio(held, partner["length_um"].to_numpy(np.float64))
    matched_fraction = _ratio(held, table["length_um"].to_numpy(np.float64))
    segments = measured.tables["segments"]
    share = np.nan_to_num(segments["resistance_share"].to_numpy(np.float64))
    exponent = sum_by(network, share * _exponent(basis.blood, segments, _hematocrit(segments, basis)), len(table))
    true_resistance = partner["resistance_pa_s_m3"].to_numpy(np.float64)
    compared = _compared(table, true_resistance, basis.scale_rel_se * np.abs(1.0 + exponent))
    reason = _left_out(
        ~(np.minimum(found_fraction, matched_fraction) >= LEAST_IN_COMMON),
        ~np.isfinite(compared["ln_resistance_ratio"]),
    )
    if not _same_viscosity(true.tables["segments"], basis.blood):
        reason = np.where(reason == "", "viscosity", reason)
    held_against: dict[str, AnyArray] = {
        "network_id_true": np.where(held > 0, partner["network_id"].to_numpy(np.float64), np.nan),
        "found_fraction": found_fraction,
        "matched_fraction": matched_fraction,
        **compared,
        "left_out": reason,
    }
    return table.assign(**held_against)


def _same_viscosity(segments: pd.DataFrame, blood: Blood) -> bool:
    """Whether true resistances were made with the law of the measurement."""
    names = ["radius_hydraulic_um", "hematocrit", "viscosity_mpa_s"]
    radius_um, hematocrit, viscosity = segments[names].dropna().to_numpy(np.float64).T
    return bool(np.allclose(blood.viscosity(radius_um, hematocrit), viscosity, rtol=SAME_VISCOSITY))


def _index_of(ids: pd.Series, table_ids: pd.Series) -> IntArray:
    return pd.Series(np.arange(len(table_ids)), index=table_ids).reindex(ids).to_numpy(np.int64)


def _counts(measured: Bed, true: Bed) -> dict[str, float]:
    counts: dict[str, float] = {}
    for name in ("branchings", "crossings"):
        places, true_places = _places(measured, name), _places(true, name)
        counts[f"{name}_true"], counts[f"{name}_measured"] = len(true_places), len(places)
        counts[f"{name}_found"] = pair_places(places, true_places)
    for which, bed in (("true", true), ("measured", measured)):
        counts[f"loops_{which}"] = int(bed.tables["networks"]["loops"].sum())
        counts[f"networks_{which}"] = len(bed.tables["networks"])
    return counts


def _class_lengths(measured: Bed, true: Bed, match: _Match) -> dict[str, float]:
    """Length (um) on vessels whose true class is told, of it with a class said, and of that with the right one."""
    kept = match.on_truth.found
    said, told = (bed.tables["segments"]["vessel_class"].fillna("").to_numpy(str) for bed in (measured, true))
    said, told = said[match.measured.segment[kept]], told[match.on_truth.segment[kept]]
    length_um = match.measured.weight_px[kept] * measured.pixel_size_um
    return {
        "class_true_um": float(length_um[told != ""].sum()),
        "class_said_um": float(length_um[(told != "") & (said != "")].sum()),
        "class_right_um": float(length_um[(told != "") & (said == told)].sum()),
    }


def _places(bed: Bed, name: str) -> FloatArray:
    if name == "crossings":
        return bed.tables["crossings"][["x_px", "y_px"]].to_numpy(np.float64)
    nodes = bed.tables["nodes"]
    return nodes.loc[nodes["kind"] == "branching", ["x_px", "y_px"]].to_numpy(np.float64)
