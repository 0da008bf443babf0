"""Axes and points of a grid in words."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from scheduler.report.markup import number
from scheduler.scenarios import Value

AXIS_WORDS = {
    "urgency": "urgency U",
    "risk_aversion": "risk aversion λ",
    "max_participation": "participation cap",
    "start": "start",
    "end": "end",
    "bucket": "bucket, minutes",
    "volume": "volume ×",
    "volatility": "volatility ×",
    "reading": "reading",
    "impact_law": "impact law",
    "feedback": "feedback φ",
    "relaxation": "relaxation r",
}


def value_text(value: Value | None) -> str:
    """A value as it is read: four digits, a time without idle seconds."""
    if value is None or value != value:  # noqa: PLR0124 - NaN
        return "as in tables"
    if isinstance(value, str):
        return value.removesuffix(":00") if value.count(":") == 2 else value.replace("T", " ")
    return f"{value:.4g}".replace("-", "−")


def point_text(values: Mapping[str, Value]) -> str:
    """`volume × 0.5, urgency U 0.1`; of nothing, the base."""
    parts = [f"{AXIS_WORDS[name]} {value_text(value)}" for name, value in values.items()]
    return ", ".join(parts) or "base"


def bps(value: Any) -> str:
    return number(None if value is None else float(value), 2)
