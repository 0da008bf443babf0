"""The verb `rehearse`: a plan played forward many times, and its costs held against the promise."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from importlib import import_module
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from scheduler.balances import list_law
from scheduler.errors import MisuseError
from scheduler.figures import QUANTILES
from scheduler.history import Bars, place
from scheduler.list_paths import play_list
from scheduler.model.mixture import CostDistribution
from scheduler.model.ragged import Index
from scheduler.past_paths import PastPlayed, play_past, unplayable
from scheduler.paths import BUCKET_NOISE, SESSION_NOISE, Noise, Played, play
from scheduler.plan import Plan
from scheduler.sessions.calendar import load_calendar
from scheduler.solve.schedule import Progress
from scheduler.summary import CAUTION
from scheduler.tables import bars as bars_table
from scheduler.tables.source import Source
from scheduler.tables.write import write_files

MOST_PATHS = 10_000_000
THE_LIST = "the list"
AS_FORECAST, AT_RANDOM, PAST = "volume_as_forecast", "volume_at_random", "past_sessions"
CASES = {
    AS_FORECAST: "volume as forecast",
    AT_RANDOM: "volume at random",
    PAST: "past sessions",
}
FEWEST_SESSIONS = 5
"""Past sessions below which nothing is said of them (our choice)."""

_DOUBT = 3.5  # standard errors beyond which chance no longer explains a difference
_FILES = ("rehearsal.json", "paths.parquet", "rehearsal.html")


@dataclass(frozen=True)
class Rehearsal:
    """Costs of a plan on many paths beside those it states.

    played : by case and order (or pool of orders, or the list). promised : the plan's own law of
    each. summary : every figure, ready for JSON.
    """

    plan: Plan = field(repr=False)
    played: Mapping[str, Mapping[str, Played]] = field(repr=False)
    promised: Mapping[str, CostDistribution] = field(repr=False)
    summary: dict[str, Any]

    @property
    def paths(self) -> pd.DataFrame:
        """A row a case, order and path."""
        frames = [
            pd.DataFrame(
                {
                    "case": case,
                    "order_id": name,
                    "path": np.arange(1, len(played.cost) + 1),
                    "cost": played.cost,
                    "residual": played.residual,
                    "residual_cost": played.residual_cost,
                }
            )
            for case, by_order in self.played.items()
            for name, played in by_order.items()
        ]
        return pd.concat(frames, ignore_index=True)

    def write(self, directory: str | Path, *, report: bool = False, paths: bool = False) -> None:
        """Write the summary and, if asked for, the page and every path: all of them or nothing."""
        files: dict[str, Any] = {"rehearsal.json": self.summary}
        if paths:
            files["paths.parquet"] = self.paths
        if report:
            files["rehearsal.html"] = import_module("scheduler.report.rehearsal_page").page(self)
        write_files(directory, files, instead_of=_FILES)


def rehearse(
    plan: Plan,
    *,
    paths: int = 20_000,
    seed: int = 1,
    session_noise: float = SESSION_NOISE,
    bucket_noise: float = BUCKET_NOISE,
    following: bool = False,
    bars: Source | None = None,
    progress: Progress | None = None,
) -> Rehearsal:
    """Play a plan forward in the model, with the volume as forecast and with it at random.

    Orders planned alone are played one by one, a list planned as one as a whole.

    Parameters
    ----------
    paths : of each case. seed : the same seed gives the same paths.
    session_noise, bucket_noise : standard deviations of log volume.
    following : whether slices follow the volume that comes, or the clock.
    bars : intraday bars of the past, over whose sessions the schedule is played as well.
    progress : called with paths done and paths in all.

    Raises:
        MisuseError: numbers out of range. InputError: bars that cannot be read.
    """
    check_numbers(paths, seed, session_noise, bucket_noise)
    noise = {
        AS_FORECAST: Noise(),
        AT_RANDOM: Noise(session_noise, bucket_noise, following),
    }
    names = plan.book.pooled.names if plan.transition is None else [THE_LIST]
    total = paths * len(names) * len(noise)
    played: dict[str, dict[str, Played]] = {}
    for number, (case, kind) in enumerate(noise.items()):
        played[case] = {}
        for order, name in enumerate(names):
            rng = np.random.default_rng([seed, number, order])
            before = paths * (number * len(names) + order)

            def told(done: int, before: int = before) -> None:
                if progress is not None:
                    progress(before + done, total)

            figures = plan.figures.pooled
            played[case][name] = (
                play(figures, order, kind, paths, rng, told=told)
                if plan.transition is None
                else play_list(plan.transition, figures, kind, paths, rng, told=told)
            )
    past, notes = ({}, ()) if bars is None else _over_the_past(plan, bars, following=following)
    if past:
        played[PAST] = past
    promised = _promised(plan, names)
    asked = {
        "paths": paths,
        "seed": seed,
        "session_noise": session_noise,
        "bucket_noise": bucket_noise,
        "following": following,
    }
    summary = _summary(plan, played, promised, asked)
    summary["notes"] += notes
    return Rehearsal(plan, played, promised, summary)


def _over_the_past(
    plan: Plan, bars: Source, *, following: bool
) -> tuple[dict[str, Played], tuple[str, ...]]:
    """Every order that can be, or the list on the sessions all of its names have, and notes."""
    checked = bars_table.ensure(bars, settings=plan.book.settings)
    book, figures = plan.book.pooled, plan.figures.pooled
    found: dict[str, PastPlayed] = {}
    notes: list[str] = []
    placed: dict[str, dict[str, Bars]] = {}
    for order, (name, row) in enumerate(zip(book.names, book.rows.itertuples(), strict=True)):
        known = load_calendar(str(row.calendar))
        if known.code not in placed:
            placed[known.code] = {each.symbol: each for each in place(checked, known)[0]}
        mine = placed[known.code].get(str(row.symbol))
        why = unplayable(book.grids[order], mine)
        if why is not None or mine is None:
            notes.append(f"{name}: {why}")
            continue
        one = play_past(book, figures, order, mine, known, following=following)
        if len(one.session) < FEWEST_SESSIONS:
            notes.append(
                f"{name}: has {len(one.session)} full sessions; {FEWEST_SESSIONS} are needed"
            )
        else:
            found[name] = one
    if plan.transition is None:
        return {name: one.played for name, one in found.items()}, tuple(notes)
    if len(found) < len(book.names):
        return {}, (*notes, "the list is not played over the past: not all of its names can be")
    common = _common_sessions(list(found.values()))
    if len(common) < FEWEST_SESSIONS:
        few = f"the list's names share {len(common)} full sessions; {FEWEST_SESSIONS} are needed"
        return {}, (*notes, few)
    return {THE_LIST: _together(list(found.values()), common)}, tuple(notes)


def _common_sessions(each: list[PastPlayed]) -> Index:
    common = each[0].session
    for one in each[1:]:
        common = np.intersect1d(common, one.session)
    return common


def _together(each: list[PastPlayed], common: Index) -> Played:
    """The list's costs on the sessions that all names have."""
    at = [np.searchsorted(one.session, common) for one in each]
    columns = zip(*(vars(one.played).values() for one in each), strict=True)
    picked = [[values[i] for values, i in zip(column, at, strict=True)] for column in columns]
    cost, expected, residual, residual_cost = (np.sum(column, axis=0) for column in picked[:4])
    return Played(cost, expected, residual, residual_cost, np.max(picked[4], axis=0))


def check_numbers(paths: int, seed: int, session_noise: float, bucket_noise: float) -> None:
    """Refuse numbers out of range; a command asks before it plans.

    Raises:
        MisuseError: which, and what it may be.
    """
    if not 2 <= paths <= MOST_PATHS:
        raise MisuseError(f"paths must be from 2 to {MOST_PATHS:,}, not {paths}")
    if seed < 0:
        raise MisuseError(f"seed must not be negative, as {seed} is")
    for name, value in (("session_noise", session_noise), ("bucket_noise", bucket_noise)):
        if not 0.0 <= value <= 3.0:
            raise MisuseError(f"{name} must be from 0 to 3 (of log volume), not {value:g}")


def _promised(plan: Plan, names: list[str]) -> dict[str, CostDistribution]:
    figures = plan.figures.pooled
    if plan.transition is not None:
        return {THE_LIST: list_law(plan.transition, figures)}
    return {name: figures.distribution(order) for order, name in enumerate(names)}


def _summary(
    plan: Plan,
    played: Mapping[str, Mapping[str, Played]],
    promised: Mapping[str, CostDistribution],
    asked: dict[str, Any],
) -> dict[str, Any]:
    rows = {
        name: {
            "promised": _law(law),
            **{
                case: outcome(by_order[name], law, left)
                for case, by_order in played.items()
                if name in by_order
            },
        }
        for (name, law), left in zip(promised.items(), _planned_left(plan), strict=True)
    }
    return {
        "schema": 1,
        "version": version("headrace"),
        "date": plan.summary["date"],
        "at": plan.summary["at"],
        "currency": plan.summary["currency"],
        "caution": CAUTION,
        "asked": asked,
        "orders": rows,
        "inputs": plan.summary["inputs"],
        "settings": plan.summary["settings"],
        "notes": list(plan.notes),
    }


def _law(law: CostDistribution) -> dict[str, Any]:
    return {
        "mean": float(law.mean[0]),
        "std": float(law.std[0]),
        "quantiles": {f"{p:g}": float(law.quantile(p)[0]) for p in QUANTILES},
        "expected_shortfall_95": float(law.expected_shortfall(0.95)[0]),
    }


def _planned_left(plan: Plan) -> list[float]:
    """Shares that the plan itself leaves, of each order or the list."""
    left = plan.figures.pooled.residual
    return left.tolist() if plan.transition is None else [float(left.sum())]


def outcome(played: Played, law: CostDistribution, left: float = 0.0) -> dict[str, Any]:
    """What came of the paths, with standard errors, and whether chance explains the difference.

    Coverage is the share of paths at or below each promised quantile; its error is binomial. The
    error of the standard deviation is sqrt((m4 - m2^2) / (4 m2 P)). A path is completed if it
    leaves no more than the plan did.

    left : shares that the plan itself leaves.
    """
    cost, count = played.cost, len(played.cost)
    centred = cost - cost.mean()
    second, fourth = float(np.mean(centred**2)), float(np.mean(centred**4))
    mean_error = np.sqrt(second / count)
    spread = max(fourth - second**2, 0.0)
    std_error = np.sqrt(spread / (4.0 * second * count)) if second > 0.0 else 0.0
    coverage = {}
    doubts = [
        _apart(float(cost.mean()), float(law.mean[0]), mean_error),
        _apart(np.sqrt(second), float(law.std[0]), std_error),
    ]
    for p in QUANTILES:
        share = float(np.mean(cost <= float(law.quantile(p)[0])))
        error = np.sqrt(p * (1.0 - p) / count)
        coverage[f"{p:g}"] = {"share": share, "error": float(error)}
        doubts.append(_apart(share, p, error))
    worst = float(max(doubts))
    beyond = cost[cost >= np.quantile(cost, 0.95)]
    return {
        "paths": count,
        "mean": float(cost.mean()),
        "mean_error": float(mean_error),
        "std": float(np.sqrt(second)),
        "std_error": float(std_error),
        "quantiles": {f"{p:g}": float(np.quantile(cost, p)) for p in QUANTILES},
        "expected_shortfall_95": float(beyond.mean()),
        "coverage": coverage,
        "completed": float(np.mean(played.residual <= left * (1.0 + 1e-9))),
        "residual": float(played.residual.mean()),
        "residual_cost": float(played.residual_cost.mean()),
        "worst_z": worst,
        "verdict": _verdict(played, law, worst),
    }


def _apart(value: float, promise: float, error: float) -> float:
    """Standard errors between a value and what was promised; rounding counts for nothing."""
    if abs(value - promise) <= 1e-9 * max(abs(value), abs(promise)):
        return 0.0
    return float(abs(value - promise) / error) if error > 0.0 else np.inf


def _verdict(played: Played, law: CostDistribution, worst: float) -> str:
    if worst <= _DOUBT:
        return "as promised: chance explains what differs"
    cost = played.cost
    dearer = (float(cost.mean()) - float(law.mean[0])) / (float(law.std[0]) or 1.0)
    wider = float(cost.std()) / (float(law.std[0]) or 1.0) - 1.0
    return (
        f"not as promised: the mean is {abs(dearer):.1%} of a promised standard deviation "
        f"{'dearer' if dearer > 0.0 else 'cheaper'}, the standard deviation "
        f"{abs(wider):.1%} {'larger' if wider > 0.0 else 'smaller'}"
    )
