"""The page of one image: the picture, its networks, its first segments."""

from typing import Any

import numpy as np
import pandas as pd

from vasohm.results.colouring import COLOURED, ColourBy, is_doubtful
from vasohm.results.explorer import explorer
from vasohm.results.markup import (
    ASSETS,
    PLOTTING,
    Html,
    flag_codes,
    flag_meanings,
    folded,
    heading,
    interval,
    link,
    listing,
    page,
    paragraph,
    picture,
    section,
    shown,
    table,
    tiles,
)
from vasohm.results.methods import CAUTIONS
from vasohm.results.page_data import MOST_SEGMENTS, page_data
from vasohm.results.schema import image_columns
from vasohm.results.tables import ImageTables
from vasohm.results.wording import pixel_size_words, why_no_resistance
from vasohm.units import UM_PER_MM

ROWS_SHOWN = 50
NETWORK_NAMES = (
    "network",
    "class",
    "segments",
    "terminals",
    "length (µm)",
    "resistance (Pa·s/m³), 95 % interval",
    "segments with half of it",
    "flags",
)
SCENARIO_NAMES = (
    "network",
    "scenario",
    "segments changed",
    "factor on their radius",
    "resistance before (Pa·s/m³)",
    "after",
    "after / before, 95 % interval",
    "flags",
)
SEGMENT_NAMES = (
    "segment",
    "network",
    "class",
    "length (µm)",
    "hydraulic radius (µm)",
    "viscosity (mPa·s)",
    "resistance (Pa·s/m³), 95 % interval",
    "share",
    "flags",
)
EYE = (
    ("crae_um", "central retinal artery equivalent", " µm"),
    ("crve_um", "central retinal vein equivalent", " µm"),
    ("avr", "artery over vein", ""),
)
TEXT_NAMES = {"class", "terminals", "scenario", "flags"}


def image_page(tables: ImageTables, overlay: ColourBy | None) -> str:
    """Build the page of one image from its tables; `overlay` is what colours the picture beside it, if there is one."""
    row = tables.image.iloc[0]
    lives = tables.status != "empty"
    top = [paragraph(link("../../index.html", "All images")), heading(tables.image_id, 1)]
    body = [_summary(tables) if lives else paragraph("No vessel was found.")]
    body.append(_without_resistance(tables.networks))
    if lives:
        if len(tables.segments) > MOST_SEGMENTS:
            told = f"To explore: the {MOST_SEGMENTS} longest of {len(tables.segments)} segments; the files hold all."
            body.append(paragraph(told))
        body.append(explorer())
    body += [_plain(tables, overlay), folded("networks", "Networks", _networks(tables.networks))]
    body += _estimated(tables.networks)
    body += _scenarios(tables.scenarios)
    body.append(folded("image", "The image", _quality(row)))
    asked = tables.scenarios["flags"]
    flags = [row["flags"], *tables.networks["flags"], *tables.segments["flags"], *asked]
    body.append(section("flags", "What the flags mean", flag_meanings(flags)))
    if tables.notes:
        body.append(folded("notes", "Notes", listing(tables.notes)))
    body.append(section("cautions", "Cautions", listing(CAUTIONS)))
    names = sorted(f"{name}.csv" for name, frame in tables.tables.items() if name != "scenarios" or not frame.empty)
    names += ["graph.graphml", "mask.tif", "record.json", *([] if overlay is None else ["overlay.png"])]
    body.append(section("files", "Files", listing(link(name, name) for name in names)))
    scripts = [f"../../{ASSETS}/{name}" for name in (*PLOTTING, "image.js")] if lives else []
    data = page_data(tables, overlay) if lives else ""
    return page(f"{tables.image_id} - vasohm", body, top=top, scripts=scripts, data=data)


def _summary(tables: ImageTables) -> Html:
    row = tables.image.iloc[0]
    size = pixel_size_words(row["pixel_size_um"], row["pixel_size_se_um"], row["pixel_size_source"])
    doubtful = int(is_doubtful(tables.segments).sum())
    numbers: list[tuple[str | Html, str, bool]] = [
        (str(row["n_segments"]), "segments", False),
        (str(row["n_networks"]), "networks", False),
        (Html(f"{shown(row['length_um'] / UM_PER_MM).source} mm"), "length of vessels", False),
        (str(doubtful), "segments of doubtful radius", bool(doubtful)),
    ]
    return Html(tiles(numbers).source + paragraph(f"Pixel size: {size}.").source + _eye(tables).source)


def _eye(tables: ImageTables) -> Html:
    """Show what an eye is asked for first: calibre equivalents, and the resistance of its trees by class."""
    row, told = tables.image.iloc[0], []
    for name, words, unit in EYE:
        if name in row.index and not np.isnan(row[name]):
            se = shown(row[f"{name.removesuffix('_um')}_se{unit and '_um'}"], 2).source
            told.append((Html(f"{shown(row[name]).source} ± {se}{unit}"), f"{words} (k = 1)", False))
    for kind in ("arteriole", "venule"):
        trees = tables.networks[
            (tables.networks["vessel_class"] == kind) & tables.networks["resistance_pa_s_m3"].notna()
        ]
        if len(trees):
            tree = _longest_first(trees).iloc[0]
            columns = ("resistance_pa_s_m3", "resistance_lo_pa_s_m3", "resistance_hi_pa_s_m3")
            words = (
                f"Pa·s/m³, 95 % interval, of the longest {kind[:-1]}ar tree that has one, network {tree['network_id']}"
            )
            told.append((interval(*(float(tree[name]) for name in columns)), words, False))
    return tiles(told) if told else Html("")


def _plain(tables: ImageTables, overlay: ColourBy | None) -> Html:
    """What stands in the place of the picture to explore where no script runs: the drawn one, and first segments."""
    drawn = Html("")
    if overlay is not None:
        alternative = f"Segments of {tables.image_id} at their measured width, coloured by {COLOURED[overlay][1]}"
        drawn = Html(f'<p><a href="overlay.png">{picture("overlay.png", alternative).source}</a></p>')
    told = heading("Segments", 2).source + _segments(tables.segments, tables.networks).source
    return Html(f'<div id="plain">{drawn.source}{told}</div>')


def _without_resistance(networks: pd.DataFrame) -> Html:
    """Say why the longest network has no resistance; nothing where it has one."""
    if networks.empty:
        return Html("")
    longest = _longest_first(networks).iloc[0]
    why = why_no_resistance(float(longest["resistance_pa_s_m3"]), longest["flags"])
    if not why:
        return Html("")
    share = f"{longest['n_segments']} of {networks['n_segments'].sum()} segments"
    return paragraph(f"The longest network (number {longest['network_id']}, {share}) has no resistance: {why}")


def _longest_first(networks: pd.DataFrame) -> pd.DataFrame:
    return networks.sort_values("length_um", ascending=False, kind="stable")


def _networks(networks: pd.DataFrame) -> Html:
    rows = [
        (
            str(row["network_id"]),
            row["vessel_class"],
            str(row["n_segments"]),
            row["terminals"],
            shown(row["length_um"]),
            interval(row["resistance_pa_s_m3"], row["resistance_lo_pa_s_m3"], row["resistance_hi_pa_s_m3"]),
            "" if pd.isna(row["n_half_resistance"]) else str(row["n_half_resistance"]),
            flag_codes(row["flags"]),
        )
        for row in _longest_first(networks).head(ROWS_SHOWN).to_dict("records")
    ]
    return _shortened(
        table(NETWORK_NAMES, rows, set(NETWORK_NAMES) - TEXT_NAMES), len(networks), "networks, longest first"
    )


def _estimated(networks: pd.DataFrame) -> list[Html]:
    """Caution against what rests on estimated ends."""
    numbers = networks.loc[networks["terminals"] == "estimated", "network_id"].tolist()
    if not numbers:
        return []
    which = ", ".join(map(str, numbers))
    return [
        paragraph(
            f"Estimated, not measured: where blood enters and leaves network {which}, how much and which way. Flows at "
            "unknown ends were chosen so that wall shear and pressures come nearest to the study's targets; the "
            "resistance is the dissipated power over the square of the estimated inflow, and its interval does not "
            "hold the doubt of the estimate."
        )
    ]


def _scenarios(scenarios: pd.DataFrame) -> list[Html]:
    """What becomes of the networks that have a resistance; nothing where nothing was asked."""
    solved = scenarios[scenarios["resistance_before_pa_s_m3"].notna()]
    if solved.empty:
        return []
    rows = [
        (
            str(row["network_id"]),
            row["scenario"],
            str(row["n_segments_changed"]),
            shown(row["radius_factor"], 4),
            shown(row["resistance_before_pa_s_m3"]),
            shown(row["resistance_after_pa_s_m3"]),
            interval(row["ratio"], row["ratio_lo"], row["ratio_hi"]),
            flag_codes(row["flags"]),
        )
        for row in solved.head(ROWS_SHOWN).to_dict("records")
    ]
    found = table(SCENARIO_NAMES, rows, set(SCENARIO_NAMES) - TEXT_NAMES)
    return [folded("scenarios", "Scenarios", _shortened(found, len(solved), "networks and scenarios"))]


def _segments(segments: pd.DataFrame, networks: pd.DataFrame) -> Html:
    """Those first that matter most: of the longest network, by share of its resistance, else by length."""
    length = networks.set_index("network_id")["length_um"]
    keys = pd.DataFrame(
        {
            "network": -segments["network_id"].map(length),
            "number": segments["network_id"],
            "share": -segments["resistance_share"].fillna(0.0),
            "length": -segments["length_um"],
        }
    )
    weightiest = segments.loc[keys.sort_values([str(name) for name in keys], kind="stable").index]
    rows = [
        (
            str(row["segment_id"]),
            str(row["network_id"]),
            row["vessel_class"],
            shown(row["length_um"]),
            Html(f"{shown(row['radius_hydraulic_um']).source} ± {shown(row['radius_hydraulic_se_um'], 2).source}"),
            shown(row["viscosity_mpa_s"]),
            interval(row["resistance_pa_s_m3"], row["resistance_lo_pa_s_m3"], row["resistance_hi_pa_s_m3"]),
            shown(row["resistance_share"]),
            flag_codes(row["flags"]),
        )
        for row in weightiest.head(ROWS_SHOWN).to_dict("records")
    ]
    order = "segments: longest network first, within it by share of the network's resistance, else by length"
    return _shortened(table(SEGMENT_NAMES, rows, set(SEGMENT_NAMES) - TEXT_NAMES), len(segments), order)


def _shortened(whole: Html, n: int, what: str) -> Html:
    if n <= ROWS_SHOWN:
        return whole
    return Html(
        paragraph(f"The first {ROWS_SHOWN} of {n} {what}; the rest stand in the CSV files.").source + whole.source
    )


def _quality(row: "pd.Series[Any]") -> Html:
    """All of image.csv with what each column means."""
    meanings = {column.name: column.meaning for column in image_columns([], with_disc=True)}
    rows = []
    for name, value in row.items():
        if name in ("image_id", "status", "flags"):
            continue
        said = shown(float(value), 4) if isinstance(value, float) else _words(value)
        meaning = meanings.get(str(name), f"Column {name} of the image sheet.")
        rows.append((str(name), said, meaning))
    return table(("column", "value", "meaning"), rows, ["value"])


def _words(value: object) -> str:
    if isinstance(value, bool | np.bool_):
        return "yes" if value else "no"
    return "" if value is None else str(value)
