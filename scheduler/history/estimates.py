"""Estimates of settings: each with its interval, and a settings file of those that are news."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from scheduler.history.displacement import Findings
from scheduler.history.levels import Levels
from scheduler.history.slippage import NAMES, Law


@dataclass(frozen=True)
class Estimate:
    """A setting of `[model]` as the data have it.

    interval : 95 %. default : the value of the run's settings. told_apart : whether the data
    exclude it. source : what the estimate rests on. remark : what its reader should know.
    """

    setting: str
    value: float
    interval: tuple[float, float]
    default: float
    told_apart: bool
    source: str
    remark: str = ""

    @property
    def text(self) -> str:
        """In words."""
        low, high = self.interval
        told = "differs from" if self.told_apart else "cannot be told from"
        remark = f"; {self.remark}" if self.remark else ""
        return (
            f"{self.setting}: {self.value:.4g} (95 %: {low:.3g} to {high:.3g}) {told} the default "
            f"{self.default:.4g}; from {self.source}{remark}"
        )

    def as_dict(self) -> dict[str, Any]:
        return {**vars(self), "interval": list(self.interval)}


def of_levels(levels: Levels, default: float) -> Estimate:
    """The energy-level rate."""
    low, high = levels.level_rate_interval
    apart = not low <= default <= high
    source = f"{levels.returns:,} returns"
    return Estimate("level_rate", levels.level_rate, (low, high), default, apart, source)


def of_findings(found: Findings, default: float) -> Estimate:
    """The reading weight; `share` in the remark is before it is cut to [0, 1]."""
    low, high = found.weight_interval
    return Estimate(
        "reading_weight",
        found.weight,
        (low, high),
        default,
        not low <= default <= high,
        f"{found.given_back.observations:,} intervals of a relaxation volume",
        f"uncut, the fading share is {found.share:.3g}",
    )


def of_law(law: Law, defaults: Sequence[float]) -> list[Estimate]:
    """Coefficient, exponent and relaxation: one fit, so told apart together or not at all."""
    told_apart = law.excludes(np.array(defaults))
    remark = "" if law.identified else "drawn to published values, as the fills leave it open"
    return [
        Estimate(
            name,
            float(value),
            (float(interval[0]), float(interval[1])),
            float(default),
            told_apart,
            f"{law.orders:,} own orders on {law.days} days, three figures of one fit",
            remark,
        )
        for name, value, interval, default in zip(
            NAMES, law.values, law.intervals, defaults, strict=True
        )
    ]


def settings_file(estimates: Sequence[Estimate]) -> str:
    """A settings file that sets what the data tell from its default, and says the rest."""
    lines = ["# Estimated from data; give it to plan with --settings.", "", "[model]"]
    for each in estimates:
        lines += textwrap.wrap(each.text, 96, initial_indent="# ", subsequent_indent="# ")
        mark = "" if each.told_apart else "#"
        lines += [f"{mark}{each.setting} = {each.value:.6g}", ""]
    return "\n".join(lines).rstrip() + "\n"
