"""Pieces of the result pages: everything that came from outside is escaped; no script, no network."""

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from html import escape

from vasohm.flags import MEANING, Flag, code

POLICY = "default-src 'none'; img-src 'self'; style-src 'unsafe-inline'; base-uri 'none'; form-action 'none'"
FLAG_MEANING = {code(flag): meaning for flag, meaning in MEANING.items()}
# Flags that tell how a thing was done and cast no doubt: explained, not marked.
FACTS = {code(Flag.TERMINALS_JOINED), code(Flag.MONTE_CARLO)}

STYLE = """
:root { color-scheme: light; }
body { font: 16px/1.5 system-ui, sans-serif; color: #1a1a1a; background: #fff; margin: 0 auto; padding: 1rem;
  max-width: 92rem; }
h1 { font-size: 1.6rem; line-height: 1.2; overflow-wrap: anywhere; }
h2 { font-size: 1.2rem; margin-top: 2rem; border-bottom: 1px solid #767676; }
a { color: #0b4a8f; }
.wide { overflow-x: auto; }
table { border-collapse: collapse; font-size: .9rem; width: 100%; }
th, td { text-align: left; vertical-align: top; padding: .35rem .6rem; border-bottom: 1px solid #c8c8c8; }
th { background: #f0f0f0; }
td { overflow-wrap: break-word; max-width: 24rem; }
td.number, th.number { text-align: right; font-variant-numeric: tabular-nums; }
td.number { white-space: nowrap; }
img { max-width: 100%; height: auto; }
img.small { width: 10rem; max-width: 40vw; }
dt { font-weight: 600; }
dd { margin: 0 0 .4rem 0; }
.alert { border-left: .4rem solid #a30000; background: #fdf1f0; padding: .2rem 1rem; }
.alert h2 { margin-top: .5rem; border: 0; }
@media (max-width: 48rem) {
  table.cards thead { display: none; }
  table.cards, table.cards tbody, table.cards tr, table.cards td { display: block; max-width: none; }
  table.cards tr { border: 1px solid #767676; margin-bottom: .8rem; }
  table.cards td.number { text-align: left; white-space: normal; }
  table.cards td[data-name]::before { content: attr(data-name) ": "; font-weight: 600; }
}
@media print { body { max-width: none; } }
"""


@dataclass(frozen=True, slots=True)
class Html:
    """Markup that is already safe; a plain text is escaped wherever it is put."""

    source: str


def html(value: "str | Html") -> str:
    """Source of a piece of markup, or a text with its special characters escaped."""
    return value.source if isinstance(value, Html) else escape(value, quote=True)


def page(title: str, body: Iterable[Html]) -> str:
    """Build a whole page that works from disk."""
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta http-equiv="Content-Security-Policy" content="{POLICY}">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{html(title)}</title>\n<style>{STYLE}</style>\n</head>\n<body>\n"
        + "\n".join(piece.source for piece in body)
        + "\n</body>\n</html>\n"
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


def table(names: Sequence[str], rows: Iterable[Sequence["str | Html"]], numbers: Iterable[str] = ()) -> Html:
    """Build a table that turns into one card a row on a narrow screen; columns in `numbers` stand to the right."""
    kinds = [' class="number"' if name in set(numbers) else "" for name in names]
    head = "".join(f'<th scope="col"{kind}>{html(name)}</th>' for name, kind in zip(names, kinds, strict=True))
    lines = []
    for row in rows:
        cells = zip(names, kinds, row, strict=True)
        lines.append(
            "<tr>" + "".join(f'<td data-name="{html(n)}"{kind}>{html(cell)}</td>' for n, kind, cell in cells) + "</tr>"
        )
    body = "\n".join(lines)
    return Html(
        f'<div class="wide"><table class="cards"><thead><tr>{head}</tr></thead>\n<tbody>{body}</tbody></table></div>'
    )


def shown(value: float, digits: int = 3) -> Html:
    """Show a number to so many significant digits; empty where it is missing."""
    if math.isnan(value):
        return Html("")
    if value == 0 or 1e-3 <= abs(value) < 1e6:
        decimals = max(0, digits - 1 - math.floor(math.log10(abs(value)))) if value else 0
        return Html(f"{value:.{decimals}f}")
    mantissa, exponent = f"{value:.{digits - 1}e}".split("e")
    return Html(f"{mantissa}&nbsp;×&nbsp;10<sup>{int(exponent)}</sup>")


def interval(value: float, low: float, high: float) -> Html:
    """Show a number with its 95 % interval; empty where it is missing."""
    if math.isnan(value):
        return Html("")
    return Html(f"{shown(value).source} <br>({shown(low).source} to {shown(high).source})")


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
