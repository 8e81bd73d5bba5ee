"""What an appraisal says to a person: lines of plain text and one picture. Opens no file."""

from collections.abc import Mapping, Sequence
from io import BytesIO
from typing import Any, Literal

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, FuncFormatter, NullFormatter, NullLocator

from vasohm.arrays import FloatArray
from vasohm.study.accuracy import LEAST_POINTS, Appraisal
from vasohm.units import UM_PER_MM

# Okabe and Ito's colours, told apart without red-green vision (jfly.uni-koeln.de/color, 2008)
BLUE, ORANGE, VERMILION, GREY = "#0072B2", "#E69F00", "#D55E00", "#999999"
RADIUS_TICKS_PX = (0.5, 0.7, 1, 1.5, 2, 3, 4, 5, 7, 10, 15, 20, 30, 50, 70, 100)
LEAST_RANGE = 10.0  # per cent of error that the picture shows at least
MOST_RANGE = 100.0  # and at most: beyond it an arrow would say no more
LEAST_COVERAGE = 50.0  # per cent of coverage from which on the picture shows it, unless some is less
MOST_LN_SE = 0.7  # of a resistance, a factor of 2: beyond it the bar is cut
NOT_KNOWN = "-"
_LEFT_OUT = {
    "match": "less than 80 % of the length is in common with {partner}",
    "resistance": "no resistance, measured or true",
    "viscosity": "true ones are of blood of another viscosity",
}
_PARTNER = {"segments": "a true vessel", "networks": "one true network"}
_READING = (
    "error/stated: root mean square of error over stated standard uncertainty; 1 is right, more is too sure",
    "inside 95 %: share of points whose stated 95 % interval holds the true radius; 95 % is right",
)
_TRUST_READING = (
    "R of a vessel: standard uncertainty of the resistance of one vessel, as stated and as found",
    "resolved: radius known to 25 % or better, and its bias within what is stated",
)
_EXACT = (
    "* without the part of the pixel size in the stated uncertainty: measured and true pixel size are exactly the same"
)


def summary_lines(appraisal: Appraisal) -> list[str]:
    """Say the whole appraisal in lines of text, what can be trusted last."""
    lines = [_title(appraisal), "", "Vessels found and invented, by true radius"]
    lines += _table(_vessel_rows(appraisal))
    lines += ["", "Local radius, measured against true"]
    lines += _table(_radius_rows(appraisal.radius))
    lines += [f"  {line}" for line in _READING]
    lines += [f"  {_EXACT}"] if _scale_matters(appraisal.radius) else []
    lines += ["", *_resistance_lines(appraisal.summary), "", *_place_lines(appraisal.summary)]
    if appraisal.notes:
        lines += ["", "Left out", *(f"  {note}" for note in appraisal.notes)]
    lines += ["", "What can be trusted"]
    lines += _table(_trust_rows(appraisal.radius))
    lines += [f"  {line}" for line in _TRUST_READING]
    return [*lines, _smallest(appraisal.summary)]


def mask_lines(table: pd.DataFrame, notes: Sequence[str]) -> list[str]:
    """Say how far measured masks agree with drawn ones, in lines of text."""
    head = ["image", "Dice", "clDice", "sensitivity", "specificity", "Matthews", "length recall", "length precision"]
    names = ["dice", "centreline_dice", "sensitivity", "specificity", "matthews_correlation"]
    rows = [head] + [
        [
            str(row["image_id"]) or "all",
            *(_score(row[name]) for name in names),
            _percent(row["length_recall"]),
            _percent(row["length_precision"]),
        ]
        for row in _rows(table)
    ]
    images = len(table) - 1
    lines = [f"Measured against drawn masks: {images} image{'s' if images != 1 else ''}, inside the field of view", ""]
    lines += _table(rows)
    lines += [
        "1 is full agreement. clDice and the lengths go by centrelines, and do not ask for equal widths.",
        "A drawn mask says where vessels are, not how wide: radii and resistances are appraised on phantoms.",
    ]
    if notes:
        lines += ["", "Left out, or to be looked at", *(f"  {note}" for note in notes)]
    return lines


def _score(value: float) -> str:
    return NOT_KNOWN if np.isnan(value) else f"{value:.3f}"


def _title(appraisal: Appraisal) -> str:
    summary = appraisal.summary
    sizes = summary["pixel_size_um"]
    pixels = f"{sizes[0]:g}" if len(sizes) == 1 else f"{sizes[0]:g} to {sizes[-1]:g}"
    length_mm = summary["length"]["length_true_um"] / UM_PER_MM
    images = "1 image" if summary["n_images"] == 1 else f"{summary['n_images']} images"
    return f"Measured against truth: {images}, {length_mm:.1f} mm of vessels, pixels of {pixels} µm"


def _table(rows: Sequence[Sequence[str]]) -> list[str]:
    """Columns flush right under their heads."""
    widths = [max(len(cell) for cell in column) for column in zip(*rows, strict=True)]
    return ["  " + "  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True)) for row in rows]


def _vessel_rows(appraisal: Appraisal) -> list[list[str]]:
    rows = [["radius px", "radius µm", "true mm", "found", "stray", "doubled", "centreline rms px"]]
    for row in _rows(appraisal.radius):
        true_um = row["length_true_um"]
        lengths = [
            _percent(row[f"length_{name}_um"] / true_um) if true_um > 0 else NOT_KNOWN
            for name in ("found", "stray", "doubled")
        ]
        rows.append([*_class(row), f"{true_um / UM_PER_MM:.2f}", *lengths, _figure(row["centreline_rms_px"])])
    return rows


def _radius_rows(radius: pd.DataFrame) -> list[list[str]]:
    scaled = _scale_matters(radius)
    rows = [["radius px", "points", "bias", "scatter", "rms", "stated", "error/stated", "inside 95 %"]]
    rows[0] += ["error/stated*", "inside*"] if scaled else []
    for row in _rows(radius):
        cells = [
            _class(row)[0],
            f"{row['n_points']:.0f}",
            _percent(np.expm1(row["ln_radius_bias"]), signed=True),
            *(_percent(row[f"ln_radius_{name}"]) for name in ("scatter", "rmse", "se")),
            _figure(row["ln_radius_rms_z"]),
            _percent(row["radius_coverage_95"]),
        ]
        if scaled:
            cells += [_figure(row["ln_radius_rms_z_exact_scale"]), _percent(row["radius_coverage_95_exact_scale"])]
        rows.append(cells)
    return rows


def _resistance_lines(summary: Mapping[str, Any]) -> list[str]:
    lines = []
    words = {"length_ratio": "length", "radius_hydraulic_ratio": "hydraulic radius", "resistance_ratio": "resistance"}
    for what in ("segments", "networks"):
        part = summary[what]
        lines.append(f"{what.capitalize()}: {part['n_measured']} measured, {part['n_compared']} compared")
        lines += [
            f"  {n} left out: {_LEFT_OUT[reason].format(partner=_PARTNER[what])}"
            for reason, n in part["left_out"].items()
        ]
        if not part["n_compared"]:
            continue
        for name, word in words.items():
            if name in part:
                ratio = part[name]
                spread = f", spread x/÷ {_factor(ratio['ln_sd'])} (without outliers {_factor(ratio['ln_scatter'])})"
                lines.append(
                    f"  {word} over true: geometric mean {ratio['geometric_mean']:.3g}, median {ratio['median']:.3g}"
                    + (spread if part["n_compared"] > 1 else "")
                )
        lines.append(
            f"  resistance: error/stated {_figure(part['ln_resistance_rms_z'])}, inside the stated 95 % interval "
            f"{_percent(part['resistance_coverage_95'])} (without the pixel size's part "
            f"{_percent(part['resistance_coverage_95_exact_scale'])})"
        )
    return lines


def _place_lines(summary: Mapping[str, Any]) -> list[str]:
    lines = []
    for name in ("branchings", "crossings"):
        part = summary[name]
        if not part["true"] and not part["measured"]:
            lines.append(f"{name.capitalize()}: none true, none measured")
            continue
        lines.append(
            f"{name.capitalize()}: {part['true']} true, {part['measured']} measured, {part['found']} found; recall "
            f"{_percent(part['recall'])}, precision {_percent(part['precision'])}, F1 {_percent(part['f1'])}"
        )
    loops, networks = summary["loops"], summary["networks_counted"]
    lines.append(
        f"Loops: {loops['true']} true, {loops['measured']} measured; networks: {networks['true']} true, "
        f"{networks['measured']} measured"
    )
    return lines


def _trust_rows(radius: pd.DataFrame) -> list[list[str]]:
    rows = [["radius px", "radius µm", "radius bias", "R of a vessel: stated", "found", "inside 95 %", "radius is"]]
    rows += [
        [
            *_class(row),
            _percent(np.expm1(row["ln_radius_bias"]), signed=True),
            _doubt(row["ln_resistance_se"]),
            _doubt(np.hypot(row["ln_resistance_bias"], row["ln_resistance_scatter"])),
            _percent(row["resistance_coverage_95"]),
            str(row["verdict"]),
        ]
        for row in _rows(radius)[:-1]
    ]
    return rows


def _smallest(summary: Mapping[str, Any]) -> str:
    smallest_px, smallest_um = summary["smallest_resolved_radius_px"], summary["smallest_resolved_radius_um"]
    if np.isnan(smallest_px):
        return "No radius is resolved: nowhere is its uncertainty below 25 % and its bias within what is stated."
    um = "" if np.isnan(smallest_um) else f" ({smallest_um:.2g} µm)"
    return f"Smallest radius that is resolved: {smallest_px:.2g} px{um}"


def _rows(radius: pd.DataFrame) -> list[dict[str, Any]]:
    return [{str(name): value for name, value in row.items()} for row in radius.to_dict("records")]


def _scale_matters(radius: pd.DataFrame) -> bool:
    differ = radius["ln_radius_rms_z_exact_scale"] - radius["ln_radius_rms_z"]
    return bool((differ > 0.01).any())


def _class(row: Mapping[str, Any]) -> tuple[str, str]:
    """Bounds of a class of radius, in px and in µm."""
    if row["radius_from_px"] == 0 and np.isnan(row["radius_to_px"]):
        return "all", ""
    return _range(row["radius_from_px"], row["radius_to_px"]), _range(row["radius_from_um"], row["radius_to_um"])


def _range(low: float, high: float) -> str:
    if np.isnan(low):
        return ""
    if np.isnan(high):
        return f"> {low:.3g}"
    return f"< {high:.3g}" if low == 0 else f"{low:.3g}-{high:.3g}"


def _percent(share: float, *, signed: bool = False) -> str:
    if np.isnan(share):
        return NOT_KNOWN
    return f"{100 * share:+.1f} %" if signed else f"{100 * share:.1f} %"


def _figure(value: float) -> str:
    return NOT_KNOWN if np.isnan(value) else f"{value:.2f}"


def _factor(ln_se: float) -> str:
    return NOT_KNOWN if np.isnan(ln_se) else f"{np.exp(min(ln_se, 100.0)):.3g}"


def _doubt(ln_se: float) -> str:
    """Return per cent, or a factor where that says more."""
    if np.isnan(ln_se):
        return NOT_KNOWN
    return f"± {100 * ln_se:.1f} %" if ln_se < 0.5 else f"x/÷ {_factor(ln_se)}"


def draw_certificate(appraisal: Appraisal, file_format: Literal["png", "svg"]) -> bytes:
    """Draw error of the radius against stated uncertainty, coverage and found length.

    Returns
    -------
    bytes
        A picture in that format; the same appraisal gives the same bytes.
    """
    buffer = BytesIO()
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams |= {"font.size": 9.0, "svg.hashsalt": "vasohm", "axes.spines.top": False}
        mpl.rcParams["axes.spines.right"] = False
        figure = Figure(figsize=(10.5, 7.6), dpi=150, facecolor="white", layout="constrained")
        figure.suptitle(_title(appraisal), fontsize=11)
        grid = figure.add_gridspec(2, 3, height_ratios=(1.15, 1.0))
        classes = appraisal.radius.iloc[:-1]
        classes = classes[(classes["length_true_um"] > 0) | (classes["n_points"] > 0)]
        _draw_radius(figure.add_subplot(grid[0, :]), appraisal)
        _draw_resistance(figure.add_subplot(grid[1, 0]), classes)
        _draw_coverage(figure.add_subplot(grid[1, 1]), classes)
        _draw_lengths(figure.add_subplot(grid[1, 2]), classes)
        if file_format == "png":
            FigureCanvasAgg(figure).print_png(buffer, metadata={"Software": None})  # type: ignore[no-untyped-call]
        else:
            FigureCanvasSVG(figure).print_svg(buffer, metadata={"Date": None, "Creator": None})  # type: ignore[no-untyped-call]
    return buffer.getvalue()


def _draw_radius(axes: Axes, appraisal: Appraisal) -> None:
    fine = appraisal.resolution[appraisal.resolution["n_points"] >= LEAST_POINTS]
    radius = fine["radius_px"].to_numpy(np.float64)
    low, middle, high = (_error(fine[f"ln_radius_{name}"]) for name in ("q16", "bias", "q84"))
    stated = fine["ln_radius_se"].to_numpy(np.float64)
    axes.axhline(0, color="black", linewidth=0.8)
    axes.fill_between(
        radius,
        _error(-stated),
        _error(stated),
        color=GREY,
        alpha=0.35,
        linewidth=0,
        label="stated: ± 1 standard uncertainty",
    )
    axes.errorbar(
        radius,
        middle,
        yerr=(middle - low, high - middle),
        color=BLUE,
        marker="o",
        markersize=5,
        capsize=3,
        linewidth=1.4,
        label="found: median error and middle 68 % of errors",
    )
    smallest = appraisal.summary["smallest_resolved_radius_px"]
    if np.isfinite(smallest):
        axes.axvline(smallest, color=VERMILION, linestyle="--", linewidth=1.2, label=f"resolved from {smallest:.2g} px")
    widest = np.nanmax(np.abs(np.concatenate((low, high, [LEAST_RANGE]))))
    axes.set_ylim(-min(1.1 * widest, MOST_RANGE), min(1.1 * widest, MOST_RANGE))
    axes.set(xscale="log", xlabel=_radius_label(appraisal), ylabel="error of local radius (%)")
    axes.xaxis.set_major_locator(FixedLocator(RADIUS_TICKS_PX))
    axes.xaxis.set_minor_locator(NullLocator())
    axes.xaxis.set_major_formatter(FuncFormatter(lambda value, _: _tick(value, appraisal)))
    axes.xaxis.set_minor_formatter(NullFormatter())
    axes.legend(frameon=False, loc="best")


def _error(ln_ratio: "pd.Series[Any] | FloatArray") -> FloatArray:
    return 100 * np.expm1(np.asarray(ln_ratio, dtype=np.float64))


def _radius_label(appraisal: Appraisal) -> str:
    one = len(appraisal.summary["pixel_size_um"]) == 1
    return "true radius (px, below in µm)" if one else "true radius (px)"


def _tick(value: float, appraisal: Appraisal) -> str:
    sizes = appraisal.summary["pixel_size_um"]
    return f"{value:g}\n{value * sizes[0]:.3g}" if len(sizes) == 1 else f"{value:g}"


def _draw_resistance(axes: Axes, classes: pd.DataFrame) -> None:
    place = np.arange(len(classes))
    stated = classes["ln_resistance_se"].to_numpy(np.float64)
    found = np.hypot(*(classes[f"ln_resistance_{name}"].to_numpy(np.float64) for name in ("bias", "scatter")))
    for shift, values, colour, label in ((-0.2, stated, GREY, "stated"), (0.2, found, BLUE, "found")):
        axes.bar(place + shift, 100 * np.minimum(values, MOST_LN_SE), 0.38, color=colour, label=label)
        for at, value in zip(place + shift, values, strict=True):
            if np.isfinite(value):
                words = f"{100 * value:.0f}" if value < MOST_LN_SE else f"x{_factor(value)}"
                axes.annotate(words, (at, 100 * min(value, MOST_LN_SE)), ha="center", va="bottom", fontsize=7)
    axes.set(ylabel="standard uncertainty of the\nresistance of one vessel (%)")
    axes.margins(y=0.2)
    _name_classes(axes, classes)
    axes.legend(frameon=False, loc="upper right", fontsize=7.5)


def _draw_coverage(axes: Axes, classes: pd.DataFrame) -> None:
    place = np.arange(len(classes))
    axes.axhline(95, color="black", linewidth=0.8)
    for name, shift, colour, marker, label in (
        ("radius_coverage_95", -0.12, BLUE, "o", "local radius"),
        ("resistance_coverage_95", 0.12, ORANGE, "s", "resistance of a segment"),
    ):
        axes.plot(place + shift, 100 * classes[name], marker, color=colour, markersize=7, label=label)
        exact = 100 * classes[f"{name}_exact_scale"]
        hollow = f"{label}, without\nthe doubt of the pixel size"
        axes.plot(place + shift, exact, marker, color=colour, markersize=11, fillstyle="none", label=hollow)
    names = ["radius_coverage_95", "resistance_coverage_95"]
    names += [f"{name}_exact_scale" for name in names]
    least = 100 * classes[names].min().min() if len(classes) else np.nan
    axes.set(
        ylim=(0 if least < LEAST_COVERAGE else LEAST_COVERAGE, 105), ylabel="truth inside the stated\n95 % interval (%)"
    )
    _name_classes(axes, classes)
    axes.legend(frameon=False, loc="lower left", fontsize=7)


def _draw_lengths(axes: Axes, classes: pd.DataFrame) -> None:
    place = np.arange(len(classes))
    true = classes["length_true_um"].replace(0.0, np.nan)
    invented = 100 * (classes["length_stray_um"] + classes["length_doubled_um"]) / true
    axes.bar(place - 0.2, 100 * classes["length_found_um"] / true, 0.38, color=BLUE, label="found")
    axes.bar(place + 0.2, invented, 0.38, color=ORANGE, hatch="//", edgecolor="black", label="stray or doubled")
    axes.axhline(100, color="black", linewidth=0.8)
    axes.set(ylim=(0, 125), ylabel="length over true length (%)")
    _name_classes(axes, classes)
    axes.legend(frameon=False, loc="upper left", ncols=2, fontsize=7.5)


def _name_classes(axes: Axes, classes: pd.DataFrame) -> None:
    words = [f"{_class(row)[0]}\n{row['length_true_um'] / UM_PER_MM:.2g} mm" for row in _rows(classes)]
    axes.set_xticks(np.arange(len(classes)), words, fontsize=8)
    axes.set_xlabel("true radius (px), length in the pictures")
    axes.set_xlim(-0.6, len(classes) - 0.4)
