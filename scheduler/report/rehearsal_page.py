"""The report of a rehearsal: one page that holds everything and asks the network for nothing."""

from __future__ import annotations

from typing import Any

from scheduler.rehearse import AT_RANDOM, CASES, Rehearsal
from scheduler.report.details import bps, money
from scheduler.report.frame import drawn, framed
from scheduler.report.markup import bullets, card, number, percent, table, tiles
from scheduler.report.overview import notes_block
from scheduler.report.rehearsal_charts import costs_chart, coverage_chart, left_chart

_DRAWN = 40  # orders on the page


def page(result: Rehearsal) -> str:
    """A self-contained HTML page of a rehearsal.

    Raises:
        MissingExtraError: plotly is not installed.
    """
    names = list(result.promised)
    left_out = max(0, len(names) - _DRAWN)
    return framed(
        result.plan,
        {"orders": [_order(result, name) for name in names[:_DRAWN]]},
        heading="Rehearsal",
        title="Rehearsal",
        asked=_asked_text(result.summary["asked"]),
        above=[notes_block(result.summary["notes"])],
        names=names[:_DRAWN],
        left_out=f"{left_out:,} more in rehearsal.json." if left_out else "",
    )


def _asked_text(asked: dict[str, Any]) -> str:
    pace = "follow the volume that comes" if asked["following"] else "keep to the clock"
    session, bucket = asked["session_noise"], asked["bucket_noise"]
    return (
        f"{asked['paths']:,} paths of each case, seed {asked['seed']}. At random, log volume "
        f"varies by {session:g} from session to session and {bucket:g} from bucket to bucket; "
        f"slices {pace}."
    )


def _order(result: Rehearsal, name: str) -> dict[str, Any]:
    figures = result.plan.figures.pooled
    place = list(result.promised).index(name)
    alone = result.plan.transition is None
    notional = float(figures.notional[place] if alone else figures.notional.sum())
    quantity = float(figures.orders.quantity[place] if alone else figures.orders.quantity.sum())
    law, row = result.promised[name], result.summary["orders"][name]
    cases = {case: words for case, words in CASES.items() if case in row}
    costs = {words: result.played[case][name].cost for case, words in cases.items()}
    charts = [
        costs_chart(law, costs, notional),
        coverage_chart({words: row[case]["coverage"] for case, words in cases.items()}),
        left_chart(result.played[AT_RANDOM][name].residual, quantity),
    ]
    return {
        "title": name,
        "tiles": _tiles(row, notional, result.summary["currency"]),
        "cards": _cards(row, notional),
        "charts": drawn(charts),
    }


def _tiles(row: dict[str, Any], notional: float, ccy: str) -> str:
    random, promised = row[AT_RANDOM], row["promised"]
    unit = 1e4 / notional
    return tiles(
        [
            ("Promised cost", bps(unit * promised["mean"]), money(promised["mean"], ccy)),
            (
                "Cost, volume at random",
                bps(unit * random["mean"]),
                f"± {bps(unit * random['mean_error'])}",
            ),
            ("Promised risk", bps(unit * promised["std"]), money(promised["std"], ccy)),
            (
                "Risk, volume at random",
                bps(unit * random["std"]),
                f"± {bps(unit * random['std_error'])}",
            ),
            ("Completed", percent(random["completed"], 1), "of paths, volume at random"),
        ]
    )


def _cards(row: dict[str, Any], notional: float) -> str:
    cases = {case: words for case, words in CASES.items() if case in row}
    header = ["bps", "promised", *cases.values()]
    unit = 1e4 / notional
    names = [("mean", "mean"), ("std", "standard deviation")]
    rows = [
        [words, *(number(unit * row[case][key], 2) for case in ("promised", *cases))]
        for key, words in names
    ]
    rows += [
        [
            f"{100 * float(p):g} % quantile",
            *(number(unit * row[case]["quantiles"][p], 2) for case in ("promised", *cases)),
        ]
        for p in row["promised"]["quantiles"]
    ]
    rows.append(
        [
            "mean of the dearest 5 %",
            *(
                number(unit * row[case]["expected_shortfall_95"], 2)
                for case in ("promised", *cases)
            ),
        ]
    )
    note = "What stays undone is priced apart, as one block at the end: " + ", ".join(
        f"{number(unit * row[case]['residual_cost'], 3)} bps with {words}"
        for case, words in cases.items()
    )
    verdicts = [f"With {words}: {row[case]['verdict']}." for case, words in cases.items()]
    figures = table("What was promised, and what came?", header, rows, f"{note}.", wide=True)
    return card("Was the promise kept?", bullets(verdicts), wide=True) + figures
