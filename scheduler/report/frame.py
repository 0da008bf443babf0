"""What every report has in common: one file that holds everything and asks the network for nothing.

A report fills the frame's two places: `above`, on all orders, and `inside`, on the one picked. Its
script draws what `data` holds.
"""

from __future__ import annotations

import base64
import gzip
import json
from collections.abc import Iterable, Sequence
from html import escape
from importlib.resources import files
from string import Template
from typing import Any

from scheduler.plan import Plan
from scheduler.report.chart import Chart, rounded
from scheduler.report.figures import need_plotly
from scheduler.report.overview import session_text, settings_block
from scheduler.what_if import WhatIf

BY_ORDER = '<div class="charts" id="charts"></div>\n<div class="cards" id="cards"></div>'
"""What `by_order.js` fills of an order, beside its title and tiles."""


def framed(
    source: Plan | WhatIf,
    data: dict[str, Any],
    *,
    heading: str,
    title: str,
    asked: str,
    above: Sequence[str],
    names: Sequence[str],
    inside: str = BY_ORDER,
    left_out: str = "",
    script: str = "by_order.js",
    settings: Plan | WhatIf | None = None,
) -> str:
    """A whole page.

    Args:
        source: what the session, the caution and, without `settings`, the settings are read from.
        data: what the script draws from: `orders`, one for each of `names`.
        heading, title, asked, left_out: plain text; the title comes before the session's date.
        above, inside: HTML.
        names: of the picker.

    Raises:
        MissingExtraError: plotly is not installed.
    """
    return page_part(
        "frame.html",
        heading=escape(heading),
        title=escape(f"{title} {source.summary['date']}"),
        style=_text("page.css"),
        session=escape(session_text(source)),
        asked=escape(asked),
        caution=escape(source.summary["caution"]),
        above="\n".join(above),
        options=_options(names),
        several="" if len(names) > 1 else "hidden",
        left_out=escape(left_out),
        inside=inside,
        settings=settings_block(source if settings is None else settings),
        data=_packed(json.dumps(data, separators=(",", ":"), allow_nan=False)),
        plotly=_packed(need_plotly("offline").get_plotlyjs()),
        script=_text("draw.js") + _text(script),
    )


def page_part(name: str, **places: str) -> str:
    """A template with its places filled."""
    return Template(_text(name)).substitute(places)


def drawn(charts: Iterable[Chart | None]) -> list[dict[str, Any]]:
    """Charts with every value in them, for `by_order.js`; those that are missing are left out."""
    return [
        {
            "question": chart.question,
            "reading": chart.reading,
            "traces": [rounded(trace) for trace in chart.traces],
            "layout": chart.layout,
        }
        for chart in charts
        if chart is not None
    ]


def _options(names: Iterable[str]) -> str:
    return "".join(
        f'<option value="{place}">{escape(name)}</option>' for place, name in enumerate(names)
    )


def _text(name: str) -> str:
    """The text of a template, style sheet or script."""
    return (files("scheduler.report") / name).read_text(encoding="utf-8")


def _packed(text: str) -> str:
    """Text as base64 of its gzip, for the page to unpack; the same text gives the same bytes."""
    return base64.b64encode(gzip.compress(text.encode(), 6, mtime=0)).decode()
