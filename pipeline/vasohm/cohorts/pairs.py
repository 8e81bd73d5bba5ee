"""Two states of one bed: which images belong together, and what changed from one to the other."""

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from vasohm.cohorts.common_networks import common_networks, network_rows
from vasohm.cohorts.common_part import common_part, joined_flags, segment_rows
from vasohm.cohorts.registration import Registration, register
from vasohm.cohorts.states import Setup, State, relative_pixel_se
from vasohm.cohorts.tone import group_tone, pair_tone
from vasohm.flags import Flag, code
from vasohm.results.columns_pairs import PAIRED

PAIRED_BY = ("condition", "time")  # columns of the sheet whose levels are states of one bed
TELLING_LN_SCALE = 0.005  # of the pictures' scale, above what the registration itself may be off
SCALE_Z = 2.0  # standard uncertainties of both pixel sizes beyond which they disagree
_NOTHING: Mapping[str, float] = dict.fromkeys(
    (
        "shift_x_um", "shift_y_um", "turn_deg", "scale", "overlap", "field_overlap", "rms_px", "common_length_um",
        "common_fraction",
    ),
    np.nan,
)  # fmt: skip


@dataclass(frozen=True, slots=True)
class ImagePair:
    """Two images that should show one bed; `reason` says why they cannot be compared, and is empty where they can."""

    subject: str
    eye: str
    group: str
    condition_a: str
    condition_b: str
    image_id_a: str
    image_id_b: str
    reason: str = ""

    @property
    def names(self) -> dict[str, str]:
        return {
            "subject": self.subject,
            "eye": self.eye,
            "condition_a": self.condition_a,
            "condition_b": self.condition_b,
            "image_id_a": self.image_id_a,
            "image_id_b": self.image_id_b,
        }


def pair_images(sheet: pd.DataFrame, by: str, reference: str) -> list[ImagePair]:
    """Find the images that show one bed in two states.

    Parameters
    ----------
    sheet : one row an image: image_id, status (measured, empty or failed), subject, the column `by`, and where the
        sheet has them eye, group, condition and time.
    by : "condition" or "time".
    reference : its value that the others are held against.

    Returns
    -------
    A pair for each image of another value of `by`, in the order of the sheet, with the image of the same subject and
    eye (and of the same condition, where `by` is time, or time, where it is condition) at the reference.
    """
    beds = [name for name in ("subject", "eye", *PAIRED_BY) if name in sheet and name != by]
    pairs = []
    for _, held in sheet[(sheet[by] != "") & (sheet["subject"] != "")].groupby(beds, sort=False):
        first = held[held[by] == reference]
        for level, others in held[held[by] != reference].groupby(by, sort=False):
            eye = "eye" in held
            kind = ", ".join(str(held[name].iloc[0]) for name in beds if held[name].iloc[0] != "")
            twice = next(
                (
                    f"{len(some)} images of {kind} have {by} {some[by].iloc[0]!r}"
                    for some in (first, others)
                    if len(some) > 1
                ),
                "",
            )
            if twice:
                twice += ": which of them belong together is not said." + (
                    "" if eye else " Where they are of two eyes, give the column eye."
                )
            for other in others.to_dict("records"):
                one = first.to_dict("records")[0] if len(first) else None
                pairs.append(
                    ImagePair(
                        subject=str(other["subject"]),
                        eye=str(other.get("eye", "")),
                        group=str(other.get("group", "")),
                        condition_a=reference,
                        condition_b=str(level),
                        image_id_a="" if one is None or twice else str(one["image_id"]),
                        image_id_b=str(other["image_id"]),
                        reason=twice or _why_not(one, other, f"{kind} has no image with {by} {reference!r}"),
                    )
                )
    return pairs


def _why_not(one: Mapping[Any, Any] | None, other: Mapping[Any, Any], absent: str) -> str:
    if one is None:
        return absent
    words = {"failed": "could not be measured", "empty": "shows no vessels"}
    return "; ".join(
        f"{image['image_id']} {words[image['status']]}" for image in (one, other) if image["status"] in words
    )


def compare_states(
    pairs: Sequence[ImagePair], states: Iterator[tuple[State, State]], setup: Setup
) -> Mapping[str, pd.DataFrame]:
    """Lay the two images of each pair on each other and tell what changed.

    Parameters
    ----------
    pairs : those that `pair_images` found.
    states : both states of each pair that has no `reason`, in the order of the pairs.
    setup : what the images were measured with.

    Returns
    -------
    Mapping[str, pd.DataFrame]
        The tables of `vasohm.results.columns_pairs.PAIRED`, each with all its columns, also without rows. A pair that
        is refused has a row in `image_pairs` and none elsewhere.
    """
    rows: dict[str, list[pd.DataFrame]] = {name: [] for name in PAIRED}
    for pair in pairs:
        if pair.reason:
            rows["image_pairs"].append(_image_row(pair, pair.reason, dict(_NOTHING)))
            continue
        a, b = next(states)
        for name, frame in _compare(pair, a, b, setup).items():
            rows[name].append(frame)
    if rows["tone"]:
        rows["tone"].append(group_tone(pd.concat(rows["tone"], ignore_index=True)))
    return {name: _framed(name, frames) for name, frames in rows.items()}


def _compare(pair: ImagePair, a: State, b: State, setup: Setup) -> dict[str, pd.DataFrame]:
    found = register(a.picture, b.picture)
    told = {
        "shift_x_um": found.shift_x_um,
        "shift_y_um": found.shift_y_um,
        "turn_deg": found.b_to_a.turn_deg,
        "scale": found.scale,
        "overlap": found.overlap,
        "field_overlap": found.field_overlap,
        "rms_px": found.rms_px,
    }
    if found.reason:
        return {"image_pairs": _image_row(pair, found.reason, {**_NOTHING, **told})}
    common = common_part(a, b, found, setup)
    networks = common_networks(a, b, common)
    length = float(common.length_um.sum())
    told |= {"common_length_um": length, "common_fraction": min(length / _length_in_both(a, b, found), 1.0)}
    tone = pd.DataFrame(pair_tone(a, b, common, networks))
    whole = {"subject": pair.subject, "eye": pair.eye, "group": pair.group}
    whole |= {"condition_a": pair.condition_a, "condition_b": pair.condition_b}
    flags = joined_flags(
        code(Flag.SCALES_DISAGREE) if _scales_disagree(a, b, found) else "",
        code(Flag.PROFILES_DIFFER) if a.image["profile"] != b.image["profile"] else "",
    )
    return {
        "image_pairs": _image_row(pair, "", told, n_segments=len(common.length_um), flags=flags),
        "pairs": segment_rows(a, b, common).assign(**pair.names),
        "network_pairs": network_rows(a, b, networks).assign(**pair.names),
        "tone": tone.assign(**whole) if len(tone) else tone,
    }


def _image_row(
    pair: ImagePair, reason: str, numbers: Mapping[str, float], *, n_segments: int = 0, flags: str = ""
) -> pd.DataFrame:
    status = "refused" if reason else "matched"
    row = {**pair.names, "group": pair.group, "status": status, "reason": reason, **numbers}
    return pd.DataFrame([{**row, "n_segments": n_segments, "flags": flags}])


def _length_in_both(a: State, b: State, found: Registration) -> float:
    """Length of a's vessels within both fields of view, in um."""
    line = a.picture.track
    inside = b.picture.sees(*found.b_to_a.inverse().apply(line.x_px, line.y_px))
    return float(line.weight_px[inside].sum()) * a.pixel_size_um


def _scales_disagree(a: State, b: State, found: Registration) -> bool:
    allowed = max(TELLING_LN_SCALE, SCALE_Z * float(np.hypot(relative_pixel_se(a), relative_pixel_se(b))))
    return bool(abs(np.log(found.scale)) > allowed)


def _framed(name: str, frames: Sequence[pd.DataFrame]) -> pd.DataFrame:
    """Join rows and give them all columns of the table, in their order."""
    names = [column.name for column in PAIRED[name]]
    held = [frame for frame in frames if len(frame)]
    if not held:
        return pd.DataFrame({column: [] for column in names})
    return pd.concat(held, ignore_index=True).reindex(columns=names)
