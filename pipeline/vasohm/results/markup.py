"""Pieces of the result pages: everything that came from outside is escaped; no network."""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from html import escape

from vasohm.flags import MEANING, Flag, code
from vasohm.results.page_style import STYLE

POLICY = "default-src 'none'; img-src 'self' data:; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'"
SCRIPTS = "; script-src 'self' file:"  # files beside the page, by web server or from disk; never text inside of it
NOTICE = (
    "For research. Results are no basis for the diagnosis or treatment of a person; local rules and licensed practice "
    "come first."
)
ASSETS = "assets"  # folder of scripts, once at the root of the results
PLOTTING = ("bokeh.min.js", "bokeh-api.min.js")  # of the library that draws on the pages, as it came
FLAG_MEANING = {code(flag): meaning for flag, meaning in MEANING.items()}
# Flags that tell how a thing was done and cast no doubt: explained, not marked.
FACTS = {code(Flag.TERMINALS_JOINED), code(Flag.MONTE_CARLO)}
WORD_LETTERS = 14  # of a cell that is never parted within a word
BAD = ' class="bad"'
_RAISED = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


@dataclass(frozen=True, slots=True)
class Html:
    """Markup that is already safe; a plain text is escaped wherever it is put."""

    source: str
    value: str = ""  # of a number shown in words: what a column is sorted by


def html(value: "str | Html") -> str:
    """Source of a piece of markup, or a text with its special characters escaped."""
    return value.source if isinstance(value, Html) else escape(value, quote=True)


def page(
    title: str, body: Iterable[Html], *, top: Iterable[Html] = (), scripts: Sequence[str] = (), data: str = ""
) -> str:
    """Build a whole page that works from disk.

    Parameters
    ----------
    title : of the window.
    body : what it tells.
    top : what stands above it: where one is, and what this is.
    scripts : files beside the page, run in this order when the page has been read.
    data : JSON for them, in which no "<" occurs.
    """
    head = "\n".join(piece.source for piece in top)
    held = f'<script type="application/json" id="data">{data}</script>\n' if data else ""
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{POLICY}{SCRIPTS if scripts else ""}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{html(title)}</title>\n<style>{STYLE}</style>\n"
        + "".join(f'<script defer src="{html(script)}"></script>\n' for script in scripts)
        + "</head>\n<body>\n"
        + (f"<header>\n{head}\n</header>\n" if head else "")
        + "<main>\n"
        + "\n".join(piece.source for piece in body)
        + f"\n</main>\n<footer><p>{NOTICE}</p></footer>\n{held}</body>\n</html>\n"
    )


def section(name: str, title: str, *pieces: Html) -> Html:
    """Group pieces under a heading that a link can lead to."""
    return Html(
        f'<section id="{html(name)}">{heading(title, 2).source}{"".join(one.source for one in pieces)}</section>'
    )


def folded(name: str, title: str, *pieces: Html) -> Html:
    """Group pieces under a heading that opens them: what few look at, or what is long."""
    opened = f"<details><summary>{heading(title, 2).source}</summary>{''.join(one.source for one in pieces)}</details>"
    return Html(f'<section id="{html(name)}">{opened}</section>')


def tiles(pairs: Iterable[tuple["str | Html", str, bool]]) -> Html:
    """Show a few numbers large: each with its words, and whether it is bad news."""
    return Html(
        '<ul class="tiles">'
        + "".join(
            f"<li{BAD if bad else ''}><b>{html(number)}</b><span>{html(words)}</span></li>"
            for number, words, bad in pairs
        )
        + "</ul>"
    )


def heading(text: str, level: int) -> Html:
    return Html(f"<h{level}>{html(text)}</h{level}>")


def paragraph(*parts: "str | Html") -> Html:
    return Html(f"<p>{''.join(html(part) for part in parts)}</p>")


def link(target: str, label: "str | Html") -> Html:
    return Html(f'<a href="{html(target)}">{html(label)}</a>')


def picture(source: str, alternative: str, style: str = "") -> Html:
    kind = f' class="{html(style)}"' if style else ""
    return Html(f'<img src="{html(source)}" alt="{html(alternative)}" loading="lazy"{kind}>')


def listing(items: Iterable["str | Html"], *, numbered: bool = False) -> Html:
    tag = "ol" if numbered else "ul"
    return Html(f"<{tag}>" + "".join(f"<li>{html(item)}</li>" for item in items) + f"</{tag}>")


def terms(pairs: Iterable[tuple["str | Html", "str | Html"]]) -> Html:
    return Html("<dl>" + "".join(f"<dt>{html(term)}</dt><dd>{html(said)}</dd>" for term, said in pairs) + "</dl>")


def table(
    names: Sequence[str], rows: Iterable[Sequence["str | Html"]], numbers: Iterable[str] = (), *, sortable: bool = False
) -> Html:
    """Build a table that turns into one card a row on a narrow screen; columns in `numbers` stand to the right."""
    kinds = [' class="number"' if name in set(numbers) else "" for name in names]
    head = "".join(f'<th scope="col"{kind}>{html(name)}</th>' for name, kind in zip(names, kinds, strict=True))
    lines = []
    for row in rows:
        cells = zip(names, kinds, row, strict=True)
        lines.append("<tr>" + "".join(_cell(name, kind, cell) for name, kind, cell in cells) + "</tr>")
    body = "\n".join(lines)
    style = "cards sortable" if sortable else "cards"
    return Html(
        f'<div class="wide"><table class="{style}"><thead><tr>{head}</tr></thead>\n<tbody>{body}</tbody></table></div>'
    )


def _cell(name: str, kind: str, cell: "str | Html") -> str:
    value = f' data-value="{html(cell.value)}"' if isinstance(cell, Html) and cell.value else ""
    loose = ' class="long"' if not kind and len(html(cell)) > WORD_LETTERS else ""  # may be parted anywhere
    return f'<td data-name="{html(name)}"{kind}{loose}{value}>{html(cell)}</td>'


def shown(value: float, digits: int = 3) -> Html:
    """Show a number to so many significant digits; empty where it is missing."""
    if math.isnan(value):
        return Html("")
    if value == 0 or 1e-3 <= abs(value) < 1e6:
        decimals = max(0, digits - 1 - math.floor(math.log10(abs(value)))) if value else 0
        return Html(f"{value:.{decimals}f}", repr(float(value)))
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    return Html(f"{mantissa}&nbsp;×&nbsp;10<sup>{int(exponent)}</sup>", repr(float(value)))


def plain_number(value: float, digits: int = 3) -> str:
    """Show a number where there is no markup, as in a drawing."""
    if value == 0 or 1e-3 <= abs(value) < 1e6:
        return f"{value:.{digits}g}" if abs(value) < 10**digits else f"{value:.0f}"
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    told = "" if float(mantissa) == 1 else f"{float(mantissa):g}×"
    return f"{told}10{str(int(exponent)).translate(_RAISED)}"


def interval(value: float, low: float, high: float) -> Html:
    """Show a number with its 95 % interval; empty where it is missing."""
    if math.isnan(value):
        return Html("")
    return Html(f"{shown(value).source} <br>({shown(low).source} to {shown(high).source})", repr(float(value)))


def flag_codes(flags: str) -> Html:
    """Turn the doubts of one cell into links, each to its meaning on the same page."""
    codes = [flag for flag in flags.split(";") if flag and flag not in FACTS]
    return Html(", ".join(f'<a href="#flag-{html(c)}">{html(c)}</a>' for c in codes))


def flag_meanings(flags: Iterable[str]) -> Html:
    """Meaning of every flag that occurs in the cells, in the order of the registry; last those that are no doubt."""
    found = {flag for cell in flags for flag in cell.split(";") if flag}
    doubts, facts = found - FACTS, found & FACTS
    told = _meanings(doubts) if doubts else paragraph("No doubt is marked.")
    if facts:
        lead = paragraph("No doubt, and therefore not marked on the pages; it stands in the tables all the same:")
        told = Html(told.source + lead.source + _meanings(facts).source)
    return told


def _meanings(found: Iterable[str]) -> Html:
    names = set(found)
    return terms(
        (Html(f'<span id="flag-{name}">{name}</span>'), FLAG_MEANING[name]) for name in FLAG_MEANING if name in names
    )
