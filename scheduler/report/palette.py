"""Colours and marks: told apart by colour-blind eyes, and in grey by lightness, dash and hatch."""

from __future__ import annotations

PLAN = "#123f6d"  # dark: this plan
EVEN = "#bf5b17"  # middling: evenly timed
VOLUME = "#45a394"  # light: proportional to volume
OTHERS = "#7d838b"  # what is no choice of ours: other people's volume, limits, references
TEXT = "#1d2126"
GRID = "#e3e6ea"
CLOSED = "#eef0f2"
BAND = "rgba(18,63,109,0.16)"

EVEN_DASH, VOLUME_DASH = "8px,4px", "2px,3px"
EVEN_MARK, VOLUME_MARK, PLAN_MARK = "square", "circle", "diamond"

SERIES = (
    (PLAN, "solid"),
    (EVEN, EVEN_DASH),
    (VOLUME, VOLUME_DASH),
    (TEXT, "10px,3px,2px,3px"),
    (OTHERS, "14px,5px"),
    (EVEN, "6px,2px,1px,2px,1px,2px"),
)
"""Colour and dash of each of several lines alike; no two dashes are the same."""

FREE, AT_CAP, AUCTION, AUCTION_AT_CAP = "", "/", ".", "x"
"""Hatches of the slices."""
