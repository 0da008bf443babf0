"""The report of a review: what came of a plan, on one page that asks the network for nothing."""

from __future__ import annotations

from typing import Any

from scheduler.balances import list_law
from scheduler.report.chart import Chart
from scheduler.report.details import bps, money
from scheduler.report.frame import drawn, framed
from scheduler.report.markup import MISSING, number, percent, shares, table, tiles
from scheduler.report.overview import notes_block, order_text
from scheduler.report.review_charts import outcome_chart, parts_chart, together_chart
from scheduler.review import Review
from scheduler.shortfall.columns import AS_PLANNED
from scheduler.shortfall.parts import PARTS, part_words

_DRAWN = 40  # orders on the page, the unlikeliest first
_LISTED = 200  # orders in its table
_WHOSE = {True: "the plan", False: "the model's law of what was traded"}


def page(result: Review) -> str:
    """A self-contained HTML page of a review.

    Raises:
        MissingExtraError: plotly is not installed.
    """
    names = _unlikeliest(result)
    left_out = max(0, len(names) - _DRAWN)
    return framed(
        result.plan,
        {"orders": [_all(result), *(_order(result, name) for name in names[:_DRAWN])]},
        heading="What came of the plan",
        title="Review",
        asked=_asked_text(result),
        above=[_totals(result), notes_block(list(result.notes)), _listed(result, names)],
        names=["All orders", *names[:_DRAWN]],
        left_out=f"{left_out:,} likelier ones are in shortfall.csv." if left_out else "",
    )


def _unlikeliest(result: Review) -> list[str]:
    ordered = result.orders.sort_values("chance", kind="stable")
    names: list[str] = ordered["order_id"].tolist()
    return names


def _asked_text(result: Review) -> str:
    rate = result.summary["asked"]["false_alarms"]
    return (
        "An order is flagged where chance does not explain its cost. In a list with which nothing "
        f"is wrong anything at all is flagged with a chance of at most {100.0 * rate:g} %: chances "
        "are adjusted for their number (Holm), however the orders depend on each other."
    )


def _totals(result: Review) -> str:
    total, ccy = result.summary["total"], result.summary["currency"]
    traded = total["traded_value"] or float("nan")
    pairs = [
        ("Orders", number(total["orders"]), f"{number(total['fills'])} fills"),
        ("Shortfall", bps(total["shortfall_bps"]), money(total["shortfall"], ccy)),
        ("Cost of what traded", bps(1e4 * total["cost"] / traded), money(total["cost"], ccy)),
        (
            "Expected",
            bps(1e4 * total["expected_cost"] / traded),
            money(total["expected_cost"], ccy),
        ),
        ("Flagged", number(total["flagged"]), f"of {number(total['orders'])} orders"),
    ]
    if "z" in total:
        pairs.append(("The list's place", percent(total["quantile"], 1), _z_text(total["z"])))
    return tiles(pairs)


def _z_text(z: float | None) -> str:
    return f"of its promised law, z {number(z, 2)}"


def _listed(result: Review, names: list[str]) -> str:
    header = ["order", "done", "shortfall, bps", "cost, bps", "expected", "z", "chance, adjusted"]
    header += ["verdict"]
    rows = []
    for name in names[:_LISTED]:
        row = result.summary["orders"][name]
        unit = 1e4 / row["traded_value"] if row["traded_value"] else None
        rows.append(
            [
                order_text(name, row),
                percent(row["traded"] / row["quantity"], 0),
                number(row["shortfall_bps"], 2),
                MISSING if unit is None else number(unit * row["cost"], 2),
                MISSING if unit is None else number(unit * row["expected_cost"], 2),
                number(row["z"], 2),
                _chance(row["adjusted_chance"]),
                ("⚑ " if row["flagged"] else "") + row["verdict"],
            ]
        )
    more = len(names) - len(rows)
    note = f"{more:,} likelier ones are in shortfall.csv." if more > 0 else ""
    return table("Which outcomes does chance not explain?", header, rows, note, wide=True)


def _chance(value: float | None) -> str:
    return MISSING if value is None else percent(value, 1)


def _all(result: Review) -> dict[str, Any]:
    """The block of all orders: the list's parts, outcomes together, groups."""
    frame, total = result.orders, result.summary["total"]
    quantile = frame["quantile"].to_numpy(dtype=float)
    charts: list[Chart | None] = [
        parts_chart(total),
        together_chart(frame["order_id"].tolist(), quantile, frame["flagged"].tolist()),
    ]
    if "z" in total:
        law = list_law(result.plan.transition, result.plan.figures.pooled)  # type: ignore[arg-type]
        charts.insert(1, outcome_chart(law, total["cost"], total["traded_value"], _WHOSE[True]))
    return {
        "title": "All orders",
        "tiles": "",
        "cards": _groups(result),
        "charts": drawn(charts),
    }


def _groups(result: Review) -> str:
    """One table a way of grouping."""
    header = ["bps", "orders", *PARTS, "shortfall", "cost", "expected", "mean z"]
    cards = []
    for by in dict.fromkeys(row["by"] for row in result.summary["groups"]):
        mine = [row for row in result.summary["groups"] if row["by"] == by]
        rows = [
            [
                str(row["group"]),
                number(row["orders"]),
                *(number(row[f"{part}_bps"], 2) for part in PARTS),
                number(row["shortfall_bps"], 2),
                number(row["cost_bps"], 2),
                number(row["expected_bps"], 2),
                number(row["mean_z"], 2),
            ]
            for row in mine
        ]
        cards.append(table(f"By {by}", header, rows, wide=True))
    return "".join(cards)


def _order(result: Review, name: str) -> dict[str, Any]:
    row, place = result.summary["orders"][name], result.plan.book.names.index(name)
    charts: list[Chart | None] = [parts_chart(row)]
    if row["held_against"] is not None:
        as_planned = row["held_against"] == AS_PLANNED
        figures = result.plan.figures if as_planned else result.traded
        law = figures.distribution(place)
        charts.append(outcome_chart(law, row["cost"], row["traded_value"], _WHOSE[as_planned]))
    return {
        "title": order_text(name, row),
        "tiles": _tiles(row, result.summary["currency"]),
        "cards": _cards(row),
        "charts": drawn(charts),
    }


def _tiles(row: dict[str, Any], ccy: str) -> str:
    average = f"at {number(row['average_price'], 4)} on average"
    place = MISSING if row["quantile"] is None else percent(row["quantile"], 1)
    return tiles(
        [
            ("Done", shares(row["traded"]), average if row["traded"] else "nothing traded"),
            ("Shortfall", bps(row["shortfall_bps"]), money(row["shortfall"], ccy)),
            ("Cost of what traded", money(row["cost"], ccy), "against the arrival price"),
            ("Expected", money(row["expected_cost"], ccy), f"± {money(row['cost_std'], ccy)}"),
            ("Place in its law", place, f"z {number(row['z'], 2)}"),
            ("Share of volume", percent(row["share_of_volume"] or 0.0, 1), "own over total"),
        ]
    )


def _cards(row: dict[str, Any]) -> str:
    unit = 1e4 / row["notional"]
    parts = [
        [part_words(name, row), number(unit * row[name], 2), number(row[name])]
        for name in (*PARTS, "shortfall")
        if row[name] is not None
    ]
    against = [
        [words, number(row[f"{name}_price"], 4), number(row[f"against_{name}_bps"], 2)]
        for name, words in (
            ("arrival", "arrival"),
            ("vwap", "volume-weighted, until the last fill"),
            ("twap", "time-weighted, until the last fill"),
            ("close", "close"),
        )
    ]
    expected = [
        [
            name,
            number(row[f"expected_{key}"]),
            number(row["cost_std"]) if key == "cost" else "",
            _chance(row[chance]),
        ]
        for name, key, chance in (
            (f"by {_WHOSE[row['held_against'] == AS_PLANNED]}", "cost", "chance"),
            ("by the model, of what was traded when", "as_traded", "chance_as_traded"),
        )
    ]
    header = ["", "expected cost", "st. dev.", "chance of as far out"]
    said = f"{row['verdict'].capitalize()}."
    return (
        table("What does the shortfall consist of?", ["", "bps", "money"], parts)
        + table("Against the market's prices", ["", "price", "cost against it, bps"], against)
        + table("What was to be expected?", header, expected, said)
    )
