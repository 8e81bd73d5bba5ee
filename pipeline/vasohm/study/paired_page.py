"""The part of a comparison's page on two states of one bed. Opens no file."""

import math
from collections.abc import Mapping
from typing import Any

import pandas as pd

from vasohm.results.markup import FLAG_MEANING, Html, heading, interval, paragraph, shown, table

_HOW = (
    "Two images of one subject and eye are laid on each other by their centrelines: shifted by at most 30 % of the "
    "picture, turned by at most 15 degrees, enlarged by at most 10 % beyond what the pixel sizes say, and refused "
    "where less than half overlaps or another place fits about as well. Radii and resistances are held against each "
    "other along the stretches that both images show. Of the uncertainties, pixel size, hematocrit, viscosity of "
    "plasma and plasma layer act on both images alike and cancel but for what depends on the radius; noise and what "
    "each image tells of its own blur and profile do not. By how much the images' scales disagree counts as "
    "uncertain. A group's interval comes from the spread between its subjects, each the mean of its eyes."
)


def paired_part(tables: Mapping[str, pd.DataFrame]) -> list[Html]:
    """Build the part; nothing where no images were paired."""
    if not tables:
        return []
    pairs, tone = _rows(tables["image_pairs"]), _rows(tables["tone"])
    body = [heading("Two states of one bed", 2), paragraph(_HOW)]
    if not pairs:
        return [*body, paragraph("No image has a partner at another condition or time.")]
    names = ("subject", "eye", "states", "images", "status", "overlap", "shift in µm", "turn in °", "scale", "matched")
    lines = [
        [
            row["subject"],
            row["eye"],
            f"{row['condition_b']} over {row['condition_a']}",
            f"{row['image_id_b']} over {row['image_id_a'] or '(none)'}",
            "; ".join([row["reason"] or row["status"], *(FLAG_MEANING[one] for one in row["flags"].split(";") if one)]),
            _number(row["overlap"], "{:.0%}"),
            " ".join(_number(row[side], "{:z.1f}") for side in ("shift_x_um", "shift_y_um")),
            _number(row["turn_deg"], "{:z.2f}"),
            _number(row["scale"], "{:.4f}"),
            _number(row["common_fraction"], "{:.0%}"),
        ]
        for row in pairs
    ]
    body += [heading("Images on each other", 3), table(names, lines, names[5:])]
    if tone:
        body += [heading("Change of tone", 3), _tone(tone)]
    return body


def _tone(rows: list[dict[str, Any]]) -> Html:
    what = ("group", "subject", "eye", "states", "vessels")
    numbers = (
        "subjects",
        "segments",
        "radius ratio (95 %)",
        "p of radius",
        "resistance ratio (95 %)",
        "p of resistance",
    )
    lines: list[list[str | Html]] = [
        [
            row["group"],
            row["subject"] or "all",
            row["eye"],
            f"{row['condition_b']} over {row['condition_a']}",
            row["vessel_class"] or "all",
            str(int(row["n_subjects"])),
            str(int(row["n_segments"])),
            interval(row["radius_ratio"], row["radius_ratio_lo"], row["radius_ratio_hi"]),
            shown(row["radius_p"], 2),
            interval(row["resistance_ratio"], row["resistance_ratio_lo"], row["resistance_ratio_hi"]),
            shown(row["resistance_p"], 2),
        ]
        for row in rows
    ]
    return table((*what, *numbers), lines, numbers)


def _number(value: float, form: str) -> str:
    return "" if math.isnan(value) else form.format(value)


def _rows(frame: pd.DataFrame) -> list[dict[str, Any]]:
    return [{str(name): value for name, value in row.items()} for row in frame.to_dict("records")]
