"""What two pictures of one bed both show: stretches of vessel in both, and how radius and resistance changed there."""

from dataclasses import dataclass

import numpy as np
import pandas as pd

from vasohm.arrays import BoolArray, FloatArray, IntArray, freeze
from vasohm.cohorts.matching import Track, feet, pieces
from vasohm.cohorts.registration import Registration, registered
from vasohm.cohorts.states import (
    Discord,
    Doubt,
    Setup,
    State,
    doubt_of,
    hindrance,
    ratio_shared_se,
    shared_causes,
)
from vasohm.flags import Flag, codes
from vasohm.network.groups import sum_by
from vasohm.uncertainty import ln_interval

LEAST_COMMON_PX = 5.0  # of a matched segment, or half of the shorter of both where that is less
LEAST_SHARE = 0.5


@dataclass(frozen=True, slots=True, eq=False)
class CommonPart:
    """Matched segments: the stretches that one segment of a and one segment of b have in common.

    Indices are rows of the tables of segments. Resistances are of the common stretch, by each state's own measure.
    """

    segment_a: IntArray  # (n,)
    segment_b: IntArray
    length_um: FloatArray  # of the common stretch, in a
    resistance_a: FloatArray  # Pa.s/m3
    resistance_b: FloatArray
    ln_radius_ratio: FloatArray  # mean over the stretch of ln(radius in b / radius in a)
    radius_random_se: FloatArray  # of it
    random_a: FloatArray  # standard uncertainty of ln R of the stretch from noise
    random_b: FloatArray
    of_radius_a: FloatArray  # (n, N_CAUSES) change of ln radius for one standard uncertainty of each cause
    of_radius_b: FloatArray
    of_resistance_a: FloatArray  # of ln R
    of_resistance_b: FloatArray
    share_a: FloatArray  # (n_segments of a,) of its length that is in common, whatever it is matched to

    def __post_init__(self) -> None:
        freeze(self)


def common_part(a: State, b: State, registration: Registration, setup: Setup) -> CommonPart:
    """Match the segments of two registered states in space.

    Parameters
    ----------
    a, b : State
    registration : Registration
        One that was not refused.
    setup : Setup

    Returns
    -------
    CommonPart
        A segment that is cut differently in the other picture is matched in several parts.

    Notes
    -----
    A stretch is common where the nearest centreline of b runs in about the direction of a's within 0.75 radii or 2 px.
    The resistance of a stretch is that of its segment times the stretch's share of the integral of mu r^-4, so that
    what the segment's resistance was corrected for holds here too. Noise averages over the length of a stretch.
    """
    on_a = a.picture.track
    on_b = registered(b.picture.track, registration.b_to_a)
    foot = feet(on_a, on_b)
    steps = pieces(on_a, foot)
    begin, end = steps.begin, steps.begin + 1
    radius_b = foot.radius_px * (b.pixel_size_um / registration.b_to_a.scale)
    ends_a = [_hindrance_at(a, on_a.radius_px * a.pixel_size_um, on_a.segment, at, setup) for at in (begin, end)]
    ends_b = [_hindrance_at(b, radius_b, foot.segment, at, setup) for at in (begin, end)]
    ln_ratio = np.log(radius_b / (on_a.radius_px * a.pixel_size_um))
    mean_ratio = 0.5 * (ln_ratio[begin] + ln_ratio[end])
    once = steps.doubled_px <= 0.5 * steps.true_length_px
    kept = once & np.isfinite(sum(ends_a) + sum(ends_b) + mean_ratio)
    segment_a, segment_b = on_a.segment[begin][kept], steps.true_segment[kept]
    pair, of_pair = np.unique(np.column_stack((segment_a, segment_b)), axis=0, return_inverse=True)
    of_pair, n = of_pair.reshape(-1), len(pair)
    length_a = steps.length_px[kept] * a.pixel_size_um
    length_b = steps.true_length_px[kept] * (b.pixel_size_um / registration.b_to_a.scale)
    common = sum_by(of_pair, length_a, n)
    integral_a = sum_by(of_pair, 0.5 * length_a * (ends_a[0] + ends_a[1])[kept], n)
    integral_b = sum_by(of_pair, 0.5 * length_b * (ends_b[0] + ends_b[1])[kept], n)
    mean = sum_by(of_pair, length_a * mean_ratio[kept], n) / np.where(common > 0, common, 1.0)
    whole_a, whole_b = a.column("segments", "length_um"), b.column("segments", "length_um")
    shorter = np.minimum(whole_a[pair[:, 0]], whole_b[pair[:, 1]])
    enough = common >= np.minimum(LEAST_COMMON_PX * a.pixel_size_um, LEAST_SHARE * shorter)
    share = np.divide(
        sum_by(pair[enough, 0], common[enough], len(whole_a)), whole_a, out=np.zeros(len(whole_a)), where=whole_a > 0
    )
    chosen = _Chosen(pair[enough, 0], pair[enough, 1], common[enough], mean[enough])
    discord = Discord(float(np.log(registration.scale)), a.image["profile"] != b.image["profile"])
    doubts = (doubt_of(a, setup, Discord()), doubt_of(b, setup, discord))
    shares = [
        integral[enough] / _whole_integral(state, setup)[row]
        for state, integral, row in ((a, integral_a, chosen.segment_a), (b, integral_b, chosen.segment_b))
    ]
    return _stretches(chosen, (a, b), doubts, shares, np.minimum(share, 1.0))


@dataclass(frozen=True, slots=True, eq=False)
class _Chosen:
    segment_a: IntArray
    segment_b: IntArray
    length_um: FloatArray
    ln_radius_ratio: FloatArray


def _stretches(
    chosen: _Chosen,
    states: tuple[State, State],
    doubts: tuple[Doubt, Doubt],
    shares: list[FloatArray],
    share_a: FloatArray,
) -> CommonPart:
    """Resistance and doubt of the common stretches, from their shares of their segments' resistance."""
    rows = (chosen.segment_a, chosen.segment_b)
    resistance, random, radius_random = [], [], []
    for state, row, share, doubt in zip(states, rows, shares, doubts, strict=True):
        resistance.append(state.column("segments", "resistance_pa_s_m3")[row] * share)
        # noise averages over length: half a segment is known root 2 times worse
        longer = np.sqrt(np.maximum(state.column("segments", "length_um")[row] / chosen.length_um, 1.0))
        random.append(doubt.resistance_random_se[row] * longer)
        radius_random.append(doubt.radius_random_se[row] * longer)
    return CommonPart(
        segment_a=chosen.segment_a,
        segment_b=chosen.segment_b,
        length_um=chosen.length_um,
        resistance_a=resistance[0],
        resistance_b=resistance[1],
        ln_radius_ratio=chosen.ln_radius_ratio,
        radius_random_se=np.hypot(*radius_random),
        random_a=random[0],
        random_b=random[1],
        of_radius_a=doubts[0].of_radius[rows[0]],
        of_radius_b=doubts[1].of_radius[rows[1]],
        of_resistance_a=doubts[0].of_resistance[rows[0]],
        of_resistance_b=doubts[1].of_resistance[rows[1]],
        share_a=share_a,
    )


def _hindrance_at(state: State, radius_um: FloatArray, segment: IntArray, at: IntArray, setup: Setup) -> FloatArray:
    cells = state.column("segments", "hematocrit")
    return hindrance(radius_um[at], cells[segment[at]], setup.blood)


def _whole_integral(state: State, setup: Setup) -> FloatArray:
    """Integral of mu r^-4 over each whole segment, in mPa.s/um3."""
    line: Track = state.picture.track
    begin = np.flatnonzero(np.isfinite(line.step_px))
    radius = line.radius_px * state.pixel_size_um
    ends = sum(_hindrance_at(state, radius, line.segment, at, setup) for at in (begin, begin + 1))
    length = line.step_px[begin] * state.pixel_size_um
    return sum_by(line.segment[begin], 0.5 * length * ends, len(state.tables["segments"]))


def segment_rows(a: State, b: State, common: CommonPart) -> pd.DataFrame:
    """Rows of pairs.csv without what names the pair: one a matched segment, b over a."""
    shared = shared_causes(a, b)
    segments_a, segments_b = a.tables["segments"].iloc[common.segment_a], b.tables["segments"].iloc[common.segment_b]
    radius_ratio = np.exp(common.ln_radius_ratio)
    radius_se = np.hypot(common.radius_random_se, ratio_shared_se(common.of_radius_a, common.of_radius_b, shared))
    ratio = common.resistance_b / common.resistance_a
    of_causes = ratio_shared_se(common.of_resistance_a, common.of_resistance_b, shared)
    random = np.hypot(common.random_a, common.random_b)
    low, high = ln_interval(ratio, np.hypot(random, of_causes))
    class_a, class_b = (table["vessel_class"].to_numpy(object) for table in (segments_a, segments_b))
    own = np.where(class_a != class_b, int(Flag.CLASS_DIFFERS), 0) | np.where(
        is_short(a, b, common), int(Flag.SHORT), 0
    )
    flags = [joined_flags(*texts) for texts in zip(segments_a["flags"], segments_b["flags"], codes(own), strict=True)]
    return pd.DataFrame(
        {
            "segment_id_a": segments_a["segment_id"].to_numpy(np.int64),
            "segment_id_b": segments_b["segment_id"].to_numpy(np.int64),
            "vessel_class": np.where(class_a == "", class_b, class_a),
            "common_length_um": common.length_um,
            "radius_a_um": segments_a["radius_mean_um"].to_numpy(np.float64),
            "radius_ratio": radius_ratio,
            "radius_ratio_se": radius_ratio * radius_se,
            "resistance_ratio": ratio,
            "resistance_ratio_lo": low,
            "resistance_ratio_hi": high,
            "ln_ratio_random_se": random,
            "ln_ratio_shared_se": of_causes,
            "flags": flags,
        }
    )


def is_short(a: State, b: State, common: CommonPart) -> BoolArray:
    """Whether a stretch is shorter than it is wide: its radius borrows from its neighbours, or is of a stub, (n,)."""
    wider = np.maximum(
        a.column("segments", "radius_mean_um")[common.segment_a],
        b.column("segments", "radius_mean_um")[common.segment_b],
    )
    return np.asarray(common.length_um < 2.0 * wider)


def joined_flags(*texts: str) -> str:
    """Join lists of codes, each code once, in the order in which they come."""
    return ";".join(dict.fromkeys(code for text in texts for code in text.split(";") if code))
