"""Distributions by group: one dot an image, the median marked; the same drawing on the page and, for print, alone."""

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from html import escape
from statistics import median

from vasohm.results.markup import Html, plain_number

WIDTH, LEFT, RIGHT = 360.0, 104.0, 58.0  # of a chart, in the units of its view box
TOP, FOOT = 30.0, 34.0
DOT, STEP = 2.8, 4.2  # radius of a dot, and from a dot to the one stacked on it
LEAST_BAND, MOST_STACKED = 30.0, 9
LOGARITHMIC_FROM = 20.0  # ratio of largest to smallest from which the axis is logarithmic
LETTERS_SHOWN = 15  # of a group's name
PRINT_WIDTH_MM = 170.0  # two columns of a journal; common practice, no source
GAP = 20.0
DOT_COLOUR, MEDIAN_COLOUR = "#0072b2", "#d55e00"  # blue and vermilion of Okabe & Ito


@dataclass(frozen=True, slots=True)
class Chart:
    """One quantity of the images, in groups; the values of a group are those that are known, by image."""

    title: str
    groups: Mapping[str, Mapping[str, float]]


def charts_for_page(charts: Sequence[Chart]) -> Html:
    """Draw charts beside one another, as many as fit."""
    drawn = []
    for chart in charts:
        body, height = _draw(chart)
        drawn.append(
            f'<svg viewBox="0 0 {WIDTH:g} {height:g}" role="img" aria-label="{escape(_words(chart))}">{body}</svg>'
        )
    return Html(f'<div class="charts">{"".join(drawn)}</div>')


def charts_for_print(charts: Sequence[Chart]) -> bytes:
    """Draw charts two in a row, 170 mm wide, as an SVG whose text is text."""
    bodies, y = [], 0.0
    for k in range(0, len(charts), 2):
        pair = [_draw(chart) for chart in charts[k : k + 2]]
        for column, (body, _) in enumerate(pair):
            bodies.append(f'<g transform="translate({column * (WIDTH + GAP):g} {y:g})">{body}</g>')
        y += max(height for _, height in pair) + GAP
    wide, high = 2 * WIDTH + GAP, max(y - GAP, 1.0)
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" width="{PRINT_WIDTH_MM:g}mm" '
        f'height="{PRINT_WIDTH_MM * high / wide:.4g}mm" viewBox="0 0 {wide:g} {high:g}">\n'
        f'<rect width="100%" height="100%" fill="#ffffff"/>\n' + "\n".join(bodies) + "\n</svg>\n"
    ).encode()


def _words(chart: Chart) -> str:
    nameless = "not said" if len(chart.groups) > 1 else "all images"
    told = [
        f"{name or nameless}: {len(values)} images, median {plain_number(median(values.values()))}"
        for name, values in chart.groups.items()
        if values
    ]
    return f"{chart.title}. {'; '.join(told)}."


def _draw(chart: Chart) -> tuple[str, float]:
    """Return the drawing and its height."""
    known = [value for values in chart.groups.values() for value in values.values()]
    if not known:
        return f"{_text(0, 18, chart.title, bold=True)}{_text(0, 40, 'No image has this number.')}", 54.0
    low, high = min(known), max(known)
    logarithmic = low > 0 and high > LOGARITHMIC_FROM * low
    if not logarithmic and low == high:
        low, high = low - 0.5 * abs(low or 1.0), high + 0.5 * abs(high or 1.0)

    def across(value: float) -> float:
        share = math.log(value / low) / math.log(high / low) if logarithmic else (value - low) / (high - low)
        return LEFT + DOT + share * (WIDTH - LEFT - RIGHT - 2 * DOT)

    parts, y = [_text(0, 16, chart.title, bold=True)], TOP
    for name, values in chart.groups.items():
        row, band = _row(name, values, across, y, parted=len(chart.groups) > 1)
        parts.append(row)
        y += band
    parts.append(_axis(_ticks(low, high, logarithmic=logarithmic), across, y))
    return "".join(parts), y + FOOT


def _row(
    name: str, values: Mapping[str, float], across: Callable[[float], float], y: float, *, parted: bool
) -> tuple[str, float]:
    """Draw one group: dots stacked where they would hide each other, the median as a line; and its height."""
    columns: dict[int, list[tuple[str, float]]] = {}
    for image_id, value in values.items():
        columns.setdefault(round(across(value) / (2 * DOT)), []).append((image_id, value))
    tallest = max((len(column) for column in columns.values()), default=1)
    step = min(STEP, STEP * MOST_STACKED / tallest)  # many are pressed together
    band = max(LEAST_BAND, step * tallest + 4 * DOT)
    base = y + band - 2.5 * DOT
    short = name if len(name) <= LETTERS_SHOWN else f"{name[: LETTERS_SHOWN - 1]}…"
    parts = [f'<line x1="{LEFT:g}" x2="{WIDTH - RIGHT:g}" y1="{y + band:.4g}" y2="{y + band:.4g}" stroke="#ccd6d9"/>']
    parts.append(_text(0, y + band / 2 + 4, short or ("not said" if parted else "all images"), title=name))
    for column in columns.values():
        for level, (image_id, value) in enumerate(sorted(column, key=lambda one: (one[1], one[0]))):
            parts.append(
                f'<circle cx="{across(value):.4g}" cy="{base - level * step:.4g}" r="{DOT:g}" fill="{DOT_COLOUR}" '
                f'fill-opacity="0.65"><title>{escape(image_id)}: {plain_number(value)}</title></circle>'
            )
    if values:
        middle = median(values.values())
        x = across(middle)
        parts.append(
            f'<line x1="{x:.4g}" x2="{x:.4g}" y1="{y + 3:.4g}" y2="{y + band - 2:.4g}" stroke="{MEDIAN_COLOUR}" '
            'stroke-width="2.5"/>'
        )
    parts.append(_text(WIDTH, y + band / 2 + 4, f"n = {len(values)}", anchor="end"))
    return "".join(parts), band


def _axis(ticks: Sequence[float], across: Callable[[float], float], y: float) -> str:
    parts = []
    for tick in ticks:
        x = across(tick)
        parts.append(f'<line x1="{x:.4g}" x2="{x:.4g}" y1="{y:.4g}" y2="{y + 5:.4g}" stroke="#4a5860"/>')
        parts.append(_text(x, y + 18, plain_number(tick), anchor="middle"))
    return "".join(parts)


def _ticks(low: float, high: float, *, logarithmic: bool) -> list[float]:
    """Round numbers within the range, few enough that their words do not touch."""
    if logarithmic:
        decades = [10.0**k for k in range(math.ceil(math.log10(low)), math.floor(math.log10(high)) + 1)]
        every = max(1, math.ceil(len(decades) / 4))
        return decades[::every] or [low, high]
    step = 10.0 ** math.floor(math.log10(high - low))
    step = next(one for one in (step / 5, step / 2, step, 2 * step, 5 * step) if (high - low) / one <= 4)
    first = math.ceil(low / step)
    return [k * step for k in range(first, math.floor(high / step) + 1)]


def _text(x: float, y: float, said: str, *, anchor: str = "start", bold: bool = False, title: str = "") -> str:
    weight = ' font-weight="600"' if bold else ""
    full = f"<title>{escape(title)}</title>" if title and title != said else ""
    return (
        f'<text x="{x:.4g}" y="{y:.4g}" font-family="sans-serif" font-size="{13 if bold else 12}" fill="#16222b" '
        f'text-anchor="{anchor}"{weight}>{escape(said)}{full}</text>'
    )
