"""What the page of an image shows and lets a person choose, as one JSON text."""

import base64
import json
import math
from dataclasses import replace
from io import BytesIO
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.colors import LogNorm, to_hex
from PIL import Image
from scipy.spatial import cKDTree

from vasohm.arrays import AnyArray, FloatArray
from vasohm.network.edits import PLACE_EDITS, Edit
from vasohm.results.colouring import (
    CLASS_COLOURS,
    COLOURED,
    DOUBTFUL_COLOUR,
    GREY,
    OTHER_FLAG_COLOUR,
    SOUND_COLOUR,
    ColourBy,
    colour_map,
    coloured_values,
    colours_span,
    is_doubtful,
)
from vasohm.results.markup import FACTS, FLAG_MEANING
from vasohm.results.outlines import seen_points
from vasohm.results.overlay import stubs
from vasohm.results.tables import ImageTables

SEEN_PX = 0.3  # a line off by less is not seen at the picture's own size
FINEST_SHARE = 1 / 6000  # of the longest side: what a large picture, shown on a screen, can show
LONGEST_SIDE = 2400  # pixels of the picture on the page
QUALITY = 82  # of JPEG: grain of the vessels stays, blocks do not show
DIGITS = 4  # significant ones of the numbers shown
ALONG = (0.5, 0.4, 0.6, 0.3, 0.7, 0.2, 0.8)  # of a segment: where an edit of it may point
CLEAR_PX = 4.0  # an edit's point should be so far from every other segment
COLOURS_SENT = 64
MOST_SEGMENTS = 10_000  # on one page: what a browser draws anew in a fraction of a second


def page_data(tables: ImageTables, colour: ColourBy | None) -> str:
    """Build the data of the page; nothing in it can end the element that holds it."""
    tables = _longest(tables)
    height, width = tables.picture.shape
    segments, nodes, crossings = tables.segments, tables.nodes, tables.tables["crossings"]
    branchings = nodes[nodes["kind"] == "branching"]
    data = {
        "imageId": tables.image_id,
        "pixelSizeUm": tables.pixel_size_um,
        "width": width,
        "height": height,
        "picture": _picture(tables.picture),
        "colour": colour or "radius",
        "colourings": _colourings(segments),
        "palette": [to_hex(one) for one in colour_map()(np.linspace(0, 1, COLOURS_SENT))],
        "grey": GREY,
        "classColours": CLASS_COLOURS,
        "flagColours": {"sound": SOUND_COLOUR, "doubtful": DOUBTFUL_COLOUR, "other": OTHER_FLAG_COLOUR},
        "flagMeaning": {flag: FLAG_MEANING[flag] for flag in _occurring(segments["flags"])},
        "facts": sorted(FACTS),
        "segments": _segments(segments),
        "lines": _lines(tables),
        "stubs": _stubs(tables),
        "anchors": _anchors(tables),
        "places": [
            *_places(branchings, "branching"),
            *_places(crossings, "crossing"),
        ],
        "edits": [_edit(edit) for edit in tables.edits],
    }
    text = json.dumps(data, ensure_ascii=True, allow_nan=False, separators=(",", ":"))
    return text.replace("&", "\\u0026").replace("<", "\\u003c").replace(">", "\\u003e")


def _longest(tables: ImageTables) -> ImageTables:
    """Keep as many segments as a browser draws at once, the longest ones, in their order."""
    segments = tables.segments
    if len(segments) <= MOST_SEGMENTS:
        return tables
    kept = np.sort(np.argsort(-segments["length_um"].to_numpy(np.float64), kind="stable")[:MOST_SEGMENTS])
    segments = segments.iloc[kept]
    points = tables.points[np.isin(tables.points["segment_id"], segments["segment_id"])]
    return replace(tables, tables={**tables.tables, "segments": segments, "points": points})


def _picture(picture: AnyArray) -> str:
    image = Image.fromarray(picture)
    image.thumbnail((LONGEST_SIDE, LONGEST_SIDE), Image.Resampling.BOX)
    buffer = BytesIO()
    image.save(buffer, "JPEG", quality=QUALITY)
    return "data:image/jpeg;base64," + base64.b64encode(buffer.getvalue()).decode()


def _colourings(segments: pd.DataFrame) -> dict[str, dict[str, Any]]:
    """Range of each colouring by number; the values the page takes from the segments."""
    found: dict[str, dict[str, Any]] = {}
    for name, (label, words) in COLOURED.items():
        values = coloured_values(segments, name)
        norm = colours_span(values, segments, name)
        found[name] = {"label": label, "words": words, "values": _numbers(values)}
        if norm is not None:
            found[name] |= {"low": _number(norm.vmin or 0), "high": _number(norm.vmax or 0)}
            found[name]["logarithmic"] = isinstance(norm, LogNorm)
    return found


def _segments(segments: pd.DataFrame) -> dict[str, list[Any]]:
    columns: dict[str, list[Any]] = {
        "id": segments["segment_id"].tolist(),
        "network": segments["network_id"].tolist(),
        "vesselClass": segments["vessel_class"].tolist(),
        "flags": segments["flags"].tolist(),
        "doubtful": [int(one) for one in is_doubtful(segments)],
    }
    for name, column in (
        ("length", "length_um"),
        ("radius", "radius_hydraulic_um"),
        ("radiusSe", "radius_hydraulic_se_um"),
        ("viscosity", "viscosity_mpa_s"),
        ("resistance", "resistance_pa_s_m3"),
        ("resistanceLo", "resistance_lo_pa_s_m3"),
        ("resistanceHi", "resistance_hi_pa_s_m3"),
        ("share", "resistance_share"),
    ):
        columns[name] = _numbers(segments[column].to_numpy(np.float64))
    return columns


def _lines(tables: ImageTables) -> list[list[int]]:
    """Tell each centreline as x, y, radius, x, y, radius and so on, in tenths of a pixel."""
    offsets = np.concatenate([[0], np.cumsum(tables.segments["n_points"].to_numpy(np.int64))])
    x, y = (tables.points[name].to_numpy(np.float64) for name in ("x_px", "y_px"))
    radius = np.nan_to_num(tables.points["radius_um"].to_numpy(np.float64)) / tables.pixel_size_um
    kept = seen_points(x, y, radius, offsets, max(SEEN_PX, FINEST_SHARE * max(tables.picture.shape)))
    told = np.rint(10 * np.column_stack([x, y, radius])[kept]).astype(int)
    if not len(told):
        return []
    n_kept = np.add.reduceat(kept.astype(int), offsets[:-1])
    return [line.ravel().tolist() for line in np.split(told, np.cumsum(n_kept)[:-1])]


def _stubs(tables: ImageTables) -> list[list[int]]:
    """Tell the pieces between a node and a segment: the segment's index, then four corners in tenths of a pixel."""
    outlines, owners = stubs(tables)
    corners = np.rint(10 * np.array(outlines).reshape(-1, 8)).astype(int).tolist()
    return [[owner, *corner] for owner, corner in zip(owners.tolist(), corners, strict=True)]


def _anchors(tables: ImageTables) -> list[list[float]]:
    """Choose a point on each segment that no other segment is near to, so that an edit of it takes no other."""
    place = tables.points[["x_px", "y_px"]].to_numpy(np.float64)
    if not len(place):
        return []
    n_points = tables.segments["n_points"].to_numpy(np.int64)
    first = np.cumsum(n_points) - n_points
    owner = np.repeat(np.arange(len(n_points)), n_points)
    candidates = np.stack([first + (share * (n_points - 1)).astype(int) for share in ALONG], axis=1)
    tree = cKDTree(place)
    chosen = candidates[:, 0].copy()
    open_ = np.arange(len(n_points))
    for column in candidates.T:
        near = tree.query_ball_point(place[column[open_]], CLEAR_PX, return_sorted=False)
        clear = np.array([not (owner[found] != one).any() for one, found in zip(open_, near, strict=True)], dtype=bool)
        chosen[open_[clear]] = column[open_[clear]]
        open_ = open_[~clear]
        if not open_.size:
            break
    return np.round(place[chosen], 1).tolist()


def _places(rows: pd.DataFrame, kind: str) -> list[dict[str, Any]]:
    told = zip(rows["x_px"].tolist(), rows["y_px"].tolist(), strict=True)
    return [{"x": round(x, 1), "y": round(y, 1), "kind": kind} for x, y in told]


def _edit(edit: Edit) -> dict[str, Any]:
    kind = "place" if edit.edit in PLACE_EDITS else "segment"
    return {"x": edit.x_px, "y": edit.y_px, "edit": edit.edit, "value": edit.value, "at": kind}


def _occurring(cells: "pd.Series[Any]") -> list[str]:
    found = {flag for cell in cells.unique() for flag in cell.split(";")}
    return [flag for flag in FLAG_MEANING if flag in found]


def _numbers(values: FloatArray) -> list[float | None]:
    return [_number(value) for value in values.tolist()]


def _number(value: float) -> float | None:
    return float(f"{value:.{DIGITS}g}") if math.isfinite(value) else None
