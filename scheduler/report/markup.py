"""Small pieces of HTML; every text that goes in is escaped here."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from html import escape

MISSING = "–"


def number(value: float | None, digits: int = 0) -> str:
    """A number with thousands separators and a true minus sign; a dash where there is none."""
    if value is None or not math.isfinite(value):
        return MISSING
    text = f"{value:,.{digits}f}"
    return text.replace("-", "−") if text.strip("-0.,") else text.lstrip("-")


def shares(value: float) -> str:
    """A share count, with decimals only where it has any."""
    return f"{value:,.10g}" if value % 1.0 else f"{value:,.0f}"


def counted(count: int, word: str) -> str:
    """`1 order`, `2 orders`."""
    return f"{count:,} {word}{'' if count == 1 else 's'}"


def percent(part: float, digits: int = 2) -> str:
    """A part of a whole in %."""
    text = number(100.0 * part, digits)
    return text if text == MISSING else f"{text}\u00a0%"


def tiles(pairs: Iterable[tuple[str, str, str]]) -> str:
    """Figures side by side: what it is, the figure, and a line below it."""
    cells = [
        f"<div><dt>{escape(name)}</dt><dd>{escape(value)}"
        + (f"<small>{escape(below)}</small>" if below else "")
        + "</dd></div>"
        for name, value, below in pairs
    ]
    return f'<dl class="tiles">{"".join(cells)}</dl>'


def table(
    title: str,
    header: Sequence[str],
    rows: Iterable[Sequence[str]],
    note: str = "",
    *,
    wide: bool = False,
) -> str:
    """A card with a table; the first column is text, the others are figures."""
    below = f"<p>{escape(note)}</p>" if note else ""
    return card(title, bare_table(header, rows) + below, wide=wide)


def bare_table(header: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    """The table alone."""
    head = "".join(f'<th scope="col">{escape(cell)}</th>' for cell in header)
    body = "".join(
        f'<tr><th scope="row">{escape(row[0])}</th>'
        + "".join(f"<td>{escape(cell)}</td>" for cell in row[1:])
        + "</tr>"
        for row in rows
    )
    return f"<table><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"


def card(title: str, inside: str, *, wide: bool = False) -> str:
    """A titled box; `inside` is HTML already. A wide one is as wide as two where there is room."""
    return (
        f'<section class="card{" wide" if wide else ""}"><h3>{escape(title)}</h3>{inside}</section>'
    )


def bullets(texts: Iterable[str]) -> str:
    """A list of texts."""
    return f"<ul>{''.join(f'<li>{escape(text)}</li>' for text in texts)}</ul>"
