"""Plots of a comparison at the size of print: subjects by level, and ratios with their intervals. Opens no file."""

from collections.abc import Mapping
from io import BytesIO
from typing import Any

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, NullFormatter, NullLocator

from vasohm.arrays import FloatArray
from vasohm.study.comparison_words import class_words, outcome_unit, outcome_words, p_words

# Okabe and Ito's colours, told apart without red-green vision (jfly.uni-koeln.de/color, 2008)
COLOURS = ("#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9")
MARKERS = ("o", "s", "^", "D", "v", "P")
GREY = "#767676"
WIDTH_IN = 7.1  # 180 mm: two columns of a journal
PANEL_IN = 2.4
ROW_IN = 0.24
PANELS_A_ROW = 3
DPI = 300
SPREAD = 0.32  # of the place of one level, over which its subjects are spread
MOST_LINES = 60  # pairs that are joined by lines; more are a grey field
RATIO_TICKS = (0.1, 0.125, 0.2, 0.25, 0.33, 0.5, 0.67, 0.8, 0.9, 1, 1.1, 1.25, 1.5, 2, 3, 4, 5, 8, 10)
MOST_TICKS = 6
LONGEST_WORD = 14


# Of print: 8 point, text as text, nothing of this machine's own.
_STYLE: dict[Any, Any] = {
    **mpl.rcParamsDefault,
    "font.size": 8.0,
    "svg.fonttype": "none",
    "svg.hashsalt": "vasohm",
    "axes.spines.top": False,
    "axes.spines.right": False,
}


@mpl.rc_context(_STYLE)
def draw_forest(comparison: pd.DataFrame) -> dict[str, bytes]:
    """Draw the ratio of every contrast with its 95 % interval, one a line.

    Parameters
    ----------
    comparison : the table of contrasts; those without an interval are named as such.

    Returns
    -------
    The picture as svg and as png; the same table gives the same bytes.
    """
    rows: list[dict[Any, Any]] = comparison.to_dict("records")
    figure = _figure(1.0 + ROW_IN * max(len(rows), 2))
    axes = figure.add_subplot()
    place = np.arange(len(rows))[::-1]
    axes.axvline(1, color="black", linewidth=0.8)
    bounds: list[float] = []
    of_line = ("axes fraction", "data")
    for y, row in zip(place, rows, strict=True):
        known = np.isfinite(row["ratio_lo"]) and np.isfinite(row["ratio_hi"])
        if known:
            axes.plot([row["ratio_lo"], row["ratio_hi"]], [y, y], color=COLOURS[0], linewidth=1.2)
            axes.plot(row["ratio"], y, "s", color=COLOURS[0], markersize=4.5)
            bounds += [row["ratio_lo"], row["ratio_hi"]]
        told = _ratio_words(row) if known else "no ratio"
        axes.annotate(told, (1.01, y), xycoords=of_line, va="center", fontsize=7)
    _ratio_axis(axes, np.array([*bounds, 0.9, 1.1]))
    axes.set_yticks(place, [_contrast_words(row) for row in rows], fontsize=7)
    axes.set_ylim(-0.7, len(rows) - 0.3)
    axes.tick_params(axis="y", length=0)
    axes.set_xlabel("ratio of geometric means, with 95 % interval")
    axes.annotate("ratio (95 % interval), p adjusted", (1.01, len(rows) - 0.35), xycoords=of_line, fontsize=7)
    return _encoded(figure)


@mpl.rc_context(_STYLE)
def draw_levels(tables: Mapping[str, pd.DataFrame], outcome: str, by: str, reference: str) -> dict[str, bytes]:
    """Draw an outcome by level: each subject a point, pairs joined, the mean with its 95 % interval.

    Parameters
    ----------
    tables : `levels` and `subjects`.
    outcome : table.column.
    by : column of the levels.
    reference : the level that stands first.

    Returns
    -------
    The picture as svg and as png; the same tables give the same bytes.
    """
    levels, subjects = (_of(tables[name], outcome) for name in ("levels", "subjects"))
    panels: list[Any] = list(levels.groupby(["calibre_class", "vessel_class"], sort=False).groups)
    n_rows = -(-len(panels) // PANELS_A_ROW)
    figure = _figure(PANEL_IN * n_rows + 0.3, 1.0 if len(panels) >= PANELS_A_ROW else 0.36 * len(panels) + 0.1)
    unit = outcome_unit(outcome)
    for number, (calibre, vessel_class) in enumerate(panels, start=1):
        axes = figure.add_subplot(n_rows, min(len(panels), PANELS_A_ROW), number)
        chosen = [
            frame[(frame["calibre_class"] == calibre) & (frame["vessel_class"] == vessel_class)]
            for frame in (levels, subjects)
        ]
        _draw_panel(axes, chosen[0], chosen[1], reference)
        axes.set_title(class_words(vessel_class, calibre) or "all vessels", fontsize=8)
        axes.set_xlabel(by)
        if (number - 1) % PANELS_A_ROW == 0:
            axes.set_ylabel(f"{outcome_words(outcome)}{f' ({unit})' if unit else ''}")
    return _encoded(figure)


def _draw_panel(axes: Axes, levels: pd.DataFrame, subjects: pd.DataFrame, reference: str) -> None:
    names = sorted(levels["level"], key=lambda level: (level != reference, level))
    place = {name: k for k, name in enumerate(names)}
    order = {subject: k for k, subject in enumerate(sorted(set(subjects["subject"])))}
    shift = _spread(len(order))
    x = np.array([place[level] for level in subjects["level"]], dtype=np.float64)
    x += np.array([shift[order[subject]] for subject in subjects["subject"]])
    y = subjects["value"].to_numpy(np.float64)
    for subject in order if len(order) <= MOST_LINES else ():
        own = np.flatnonzero((subjects["subject"] == subject).to_numpy())
        if len(own) > 1:
            own = own[np.argsort(x[own])]
            axes.plot(x[own], y[own], color=GREY, linewidth=0.5, zorder=1)
    for name, k in place.items():
        here = (subjects["level"] == name).to_numpy()
        colour = COLOURS[k % len(COLOURS)]
        axes.plot(
            x[here],
            y[here],
            MARKERS[k % len(MARKERS)],
            color=colour,
            markersize=3,
            markerfacecolor="none",
            markeredgewidth=0.7,
            zorder=2,
        )
        row = levels[levels["level"] == name].iloc[0]
        if np.isfinite(row["mean_lo"]):
            axes.plot([k, k], [row["mean_lo"], row["mean_hi"]], color="black", linewidth=1.2, zorder=3)
        axes.plot([k - 0.18, k + 0.18], [row["mean"], row["mean"]], color="black", linewidth=1.6, zorder=3)
    words = [f"{_short(name)}\nn = {levels.loc[levels['level'] == name, 'n_subjects'].iloc[0]}" for name in names]
    axes.set_xticks(range(len(names)), words)
    axes.set_xlim(-0.6, len(names) - 0.4)
    if (levels["scale"] == "ln").all():
        axes.set_yscale("log")
        _plain_log_ticks(axes)


def _spread(n: int) -> FloatArray:
    """Places of subjects side by side, by the golden section: even, and the same for every level."""
    return SPREAD * (np.modf(0.5 + np.arange(n) * 0.6180339887498949)[0] - 0.5) * 2 if n > 1 else np.zeros(n)


def _ratio_axis(axes: Axes, bounds: FloatArray) -> None:
    low, high = float(bounds.min()) / 1.05, float(bounds.max()) * 1.05
    axes.set_xscale("log")
    axes.set_xlim(low, high)
    ticks = [tick for tick in RATIO_TICKS if low <= tick <= high]
    if len(ticks) > MOST_TICKS:
        step = -(-len(ticks) // MOST_TICKS)
        middle = ticks.index(1)
        ticks = [tick for k, tick in enumerate(ticks) if (k - middle) % step == 0]
    axes.set_xticks(ticks, [f"{tick:g}" for tick in ticks])
    axes.xaxis.set_minor_locator(NullLocator())


def _plain_log_ticks(axes: Axes) -> None:
    low, high = axes.get_ylim()
    middle = float(np.sqrt(low * high))
    exponent = int(np.floor(np.log10(middle)))
    if high / low > 30:  # decades suffice
        return
    power = 10.0 ** (exponent if exponent < -2 or exponent > 3 else 0)
    steps = np.array([1, 1.5, 2, 3, 4, 5, 6, 8]) if high / low > 2.5 else np.arange(1, 10, 0.5)
    if high / low < 1.35:
        steps = np.arange(1, 10, 0.1)
    grid = np.concatenate([steps * 10.0**k for k in (exponent - 1, exponent, exponent + 1)])
    ticks = grid[(grid >= low) & (grid <= high)]
    axes.set_yticks(ticks[:: max(1, -(-len(ticks) // MOST_TICKS))])
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value / power:.3g}"))
    axes.yaxis.set_minor_formatter(NullFormatter())
    axes.set_yticks([], minor=True)
    if power != 1:
        axes.annotate(f"× 10$^{{{exponent}}}$", (0, 1.01), xycoords="axes fraction", fontsize=7)


def _contrast_words(row: Mapping[str, Any]) -> str:
    what = ", ".join(
        filter(None, (outcome_words(row["outcome"]), class_words(row["vessel_class"], row["calibre_class"])))
    )
    return f"{what}: {_short(row['level'])} / {_short(row['reference'])}"


def _ratio_words(row: Mapping[str, Any]) -> str:
    return f"{row['ratio']:.2f} ({row['ratio_lo']:.2f} to {row['ratio_hi']:.2f}), {p_words(row['p_adjusted'])}"


def _short(name: str) -> str:
    """Shorten a name, and let no sign of it be taken for a formula."""
    cut = name if len(name) <= LONGEST_WORD else name[: LONGEST_WORD - 1] + "…"
    return cut.replace("\\", "/").replace("$", r"\$")


def _of(table: pd.DataFrame, outcome: str) -> pd.DataFrame:
    return table[table["outcome"] == outcome]


def _figure(height_in: float, share: float = 1.0) -> Figure:
    return Figure(figsize=(WIDTH_IN * share, height_in), dpi=DPI, facecolor="white", layout="constrained")


def _encoded(figure: Figure) -> dict[str, bytes]:
    svg, png = BytesIO(), BytesIO()
    metadata = {"Date": None, "Creator": None}
    FigureCanvasAgg(figure).print_png(png, metadata={"Software": None})  # type: ignore[no-untyped-call]
    # Second: it leaves the figure at the 72 dots per inch of its own format.
    FigureCanvasSVG(figure).print_svg(svg, metadata=metadata)  # type: ignore[no-untyped-call]
    return {"svg": svg.getvalue(), "png": png.getvalue()}
