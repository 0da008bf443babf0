"""A plan in a terminal: plain text, the same through a pipe, no number ever cut."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING, Any

from scheduler.cli.show_doubts import doubt_lines

if TYPE_CHECKING:
    from scheduler.plan import Plan

_LOSS = 1e-3  # of the objective
_DETAILED = 5  # orders up to which slices are shown; beyond, one line an order


def plan_text(plan: Plan) -> str:
    """All that a reader needs at the terminal."""
    orders = plan.summary["orders"]
    at = plan.summary["at"]
    planned = f"Session {plan.summary['date']}, planned as of {at}"
    if len(orders) > _DETAILED:
        blocks = [order_lines(orders, plan.summary["currency"])]
    else:
        blocks = [_order(plan, name) for name in orders]
    if len(orders) > 1:
        blocks.append("\n".join((_total(plan.summary), *doubt_lines(plan.summary["total"]))))
    return "\n\n".join((planned, *blocks))


def aligned(header: Sequence[str], rows: Iterable[Sequence[str]], left: int = 1) -> str:
    """Columns of text, the first `left` flush left, the rest flush right."""
    table = [list(header), *map(list, rows)]
    widths = [max(len(row[i]) for row in table) for i in range(len(header))]
    return "\n".join(
        "  ".join(
            cell.ljust(width) if i < left else cell.rjust(width)
            for i, (cell, width) in enumerate(zip(row, widths, strict=True))
        ).rstrip()
        for row in table
    )


def order_lines(orders: dict[str, Any], currency: str) -> str:
    """One line an order."""
    header = ["order", "side", "symbol", "shares", f"notional {currency}".strip()]
    header += ["cost bps", "risk bps", "even bps", "volume bps", "optimum"]
    rows = [
        (
            name,
            row["side"],
            row["symbol"],
            f"{row['quantity']:,.0f}",
            f"{row['notional']:,.0f}",
            f"{row['expected_cost_bps']:.2f}",
            f"{row['cost_std_bps']:.2f}",
            f"{row['evenly_timed']['expected_cost_bps']:.2f}",
            f"{row['volume_proportional']['expected_cost_bps']:.2f}",
            _certainty(row["certificate"]),
        )
        for name, row in orders.items()
    ]
    return aligned(header, rows, left=3)


def _certainty(certificate: dict[str, Any]) -> str:
    """How sure the optimum is; what whole lots cost is said where it is worth a thousandth."""
    words = {
        "proven": "proven",
        "bounded": f"within {100 * certificate['gap']:.2g} %",
        "local": "best found",
    }[certificate["status"]]
    loss = certificate["rounding_loss"]
    return words if loss < _LOSS else f"{words}, lots +{100 * loss:.2g} %"


def _order(plan: Plan, name: str) -> str:
    row = plan.summary["orders"][name]
    currency = row["currency"]
    title = f"{name}: {row['side']} {row['quantity']:,.10g} {row['symbol']}"
    title += f", {row['notional']:,.0f} {currency}".rstrip()
    aim = (
        f"risk aversion {row['risk_aversion']:.3g}"
        if row["urgency"] is None
        else f"urgency {row['urgency']:.4g} bps of cost a bp of risk"
    )
    said = (_comparison(row, currency), *doubt_lines(row))
    return "\n".join((f"{title}; {aim}", *said, "", _slices(plan, name)))


def _comparison(row: dict[str, Any], currency: str) -> str:
    robust = row.get("worst_of", {}).get("schedule") == "robust"
    cases = {
        "this plan": row,
        **({"plain plan": row["worst_of"]["plain"]} if robust else {}),
        "evenly timed": row["evenly_timed"],
        "by volume": row["volume_proportional"],
    }
    header = ("", "cost bps", f"cost {currency}".rstrip(), "risk bps", f"risk {currency}".rstrip())
    rows = [
        (
            name,
            f"{case['expected_cost_bps']:.2f}",
            f"{case['expected_cost']:,.0f}",
            f"{case['cost_std_bps']:.2f}",
            f"{case['cost_std']:,.0f}",
        )
        for name, case in cases.items()
    ]
    parts = ", ".join(f"{name} {row[name]:,.0f}" for name in ("impact", "spread", "fees"))
    if row["permanent"]:
        parts += f", permanent {row['permanent']:,.0f}"
    quantiles = row["quantiles"]
    tail = (
        f"cost stays below {quantiles['0.95']:,.0f} with 95 %, {quantiles['0.99']:,.0f} with 99 %"
    )
    return "\n".join(
        (
            aligned(header, rows),
            f"{parts}; {tail}; optimum {_certainty(row['certificate'])}",
        )
    )


def _slices(plan: Plan, name: str) -> str:
    frame = plan.schedule[plan.schedule["order_id"] == name]
    leaning = _leaning_bps(plan, name)
    several_days = frame["start"].str[:10].nunique() > 1
    header = ["bucket", "kind", "expected volume", "shares", "remaining", "share of volume"]
    header += ["price since start bps"]
    rows = [
        (
            f"{_clock(row['start'], several_days)}-{row['end'][11:16]}",
            row["kind"],
            f"{row['expected_volume']:,.0f}",
            f"{row['shares']:,.10g}",
            f"{row['remaining']:,.10g}",
            f"{row['participation']:.1%}",
            f"{row['displacement_bps'] - leaning:+.1f}",
        )
        for row in frame.to_dict("records")
    ]
    return aligned(header, rows, left=2)


def _leaning_bps(plan: Plan, name: str) -> float:
    """The displacement that the arrival price already contains, from a reading, market's sign."""
    from scheduler.model.impact import displacement  # noqa: PLC0415

    order = plan.book.names.index(name)
    arrays = plan.book.arrays
    side = float(plan.book.rows["side"].to_numpy(dtype=float)[order])
    return 1e4 * side * float(displacement(arrays.market, arrays.initial)[order])


def _clock(text: str, with_date: bool) -> str:
    return f"{text[:10]} {text[11:16]}" if with_date else text[11:16]


def _total(summary: dict[str, Any]) -> str:
    total = summary["total"]
    if "certificate" in total:
        return _list_total(summary)
    notional = f"{total['notional']:,.0f} {summary['currency']}".rstrip()
    return (
        f"{total['orders']} orders, {notional}: expected cost "
        f"{total['expected_cost_bps']:.2f} bps; risk {_risk(total)}"
    )


def _risk(total: dict[str, Any]) -> str:
    """Of one symbol it is known; of several only its bounds are."""
    if "cost_std_bps" in total:
        return f"{total['cost_std_bps']:.2f} bps"
    low, high = total["cost_std_independent_bps"], total["cost_std_fully_dependent_bps"]
    return (
        f"{low:.2f} bps if the orders are independent, {high:.2f} bps if they move as one "
        "(without a risk table neither is the risk)"
    )


def _list_total(summary: dict[str, Any]) -> str:
    """A list planned as one: its risk, where that comes from, and how sure the optimum is."""
    total = summary["total"]
    split = total["risk_split"]
    parts = ", ".join(
        f"{split[name]:.0%} {words}"
        for name, words in (
            ("factors", "factors"),
            ("specific", "specific"),
            ("own_imbalance", "own imbalance"),
        )
    )
    return (
        f"{total['orders']} orders as one list, {total['notional']:,.0f} {summary['currency']}: "
        f"expected cost {total['expected_cost_bps']:.2f} bps; risk {total['cost_std_bps']:.2f} bps "
        f"({parts}); optimum {_certainty(total['certificate'])}"
    )
