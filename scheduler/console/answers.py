"""What the page asks for, answered from a desk: plain data in, plain data out."""

from __future__ import annotations

import threading
from dataclasses import dataclass
from datetime import datetime, time
from functools import cached_property
from pathlib import Path
from typing import Any

from scheduler.console.charts import described
from scheduler.console.desk import Desk, checked
from scheduler.console.example import example_desk
from scheduler.console.saved import archive
from scheduler.console.upload import MOST_BYTES, TABLES, Sent, desk_of
from scheduler.console.view import NO_ONE_RISK, frontier, view
from scheduler.console.visits import Visit
from scheduler.errors import HeadraceError, InputError, MisuseError
from scheduler.report.clock_axis import date_text
from scheduler.settings import LAWS
from scheduler.summary import CAUTION
from scheduler.tables.draft import Checked

_MOST_POINTS = 40


@dataclass(frozen=True)
class Asked:
    """One order, or None for all; settings in place of the tables' own."""

    order: str | None
    values: dict[str, Any]

    @classmethod
    def of(cls, body: dict[str, Any]) -> Asked:
        """Read what a page sent.

        Raises:
            MisuseError: it is not of this form.
        """
        order, values = body.get("order"), body.get("values", {})
        if not (order is None or isinstance(order, str)) or not isinstance(values, dict):
            raise MisuseError("ask with an order, or none, and values by name")
        return cls(order, values)


class Answers:
    """Answers to every session. One plan is worked out at a time: the machine is shared."""

    def __init__(self, given: Desk | None, out: Path | None) -> None:
        self.given, self.out = given, out
        self._one_at_a_time = threading.Lock()

    @cached_property
    def example(self) -> Desk:
        """The desk of the example."""
        return example_desk()

    def known(self, visit: Visit) -> dict[str, Any]:
        """What there is to see and to choose from."""
        desk = visit.desk
        return {
            "caution": CAUTION,
            "tables": list(TABLES),
            "laws": list(LAWS),
            "charts": described(),
            "most_bytes": MOST_BYTES,
            "out": None if self.out is None else str(self.out),
            "given": None if self.given is None else self.given.mark,
            "example": self.example.mark,
            "desk": None if desk is None else desk_data(desk),
        }

    def open(self, visit: Visit, mark: Any) -> dict[str, Any]:
        """Turn to tables that every session has: those of the command line, or the example.

        Raises:
            MisuseError: the mark is of other tables, which only another session has.
        """
        for desk in (self.given, self.example):
            if desk is not None and desk.mark == mark:
                visit.desk = desk
                return self.known(visit)
        raise MisuseError(
            "this address shows tables that were given in another browser or to another console, "
            "and they are not shared; give the same files here, and it shows the same view"
        )

    def upload(self, visit: Visit, sent: Sent) -> dict[str, Any]:
        """Turn to uploaded tables; those of before stay if these cannot be used."""
        with self._one_at_a_time:
            visit.desk = desk_of(sent)
        return self.known(visit)

    def plan(self, visit: Visit, asked: Asked) -> dict[str, Any]:
        """What the page shows of a plan."""
        desk = _desk(visit)
        with self._one_at_a_time:
            return view(desk, desk.plan(asked.order, asked.values, brief=True), asked.order)

    def frontier(self, visit: Visit, asked: Asked, urgencies: Any) -> dict[str, Any]:
        """The frontier of an order; of a list, its points at the urgencies asked for."""
        desk = _desk(visit)
        with self._one_at_a_time:
            if asked.order is not None:
                return frontier(desk.plan(asked.order, asked.values, brief=True), asked.order)
            if not desk.together:
                return {"points": [], "missing": NO_ONE_RISK}
            return {"points": desk.list_points(asked.values, _numbers(urgencies)), "missing": ""}

    def save(self, visit: Visit, asked: Asked) -> bytes:
        """The plan's files as an archive."""
        desk = _desk(visit)
        with self._one_at_a_time:
            return archive(desk.plan(asked.order, asked.values))

    def write(self, visit: Visit, asked: Asked) -> dict[str, Any]:
        """Write the plan's files to the directory that the console was given."""
        desk = _desk(visit)
        if self.out is None:
            raise MisuseError("the console was started without --out DIR: save the files instead")
        with self._one_at_a_time:
            desk.plan(asked.order, asked.values).write(self.out, report=True)
        return {"written": str(self.out)}


def _desk(visit: Visit) -> Desk:
    if visit.desk is None:
        raise MisuseError("there are no tables yet; give some, or open the example")
    return visit.desk


def _numbers(given: Any) -> list[float]:
    """Urgencies, each by its own rule."""
    if not isinstance(given, list) or len(given) > _MOST_POINTS:
        raise MisuseError(f"ask for a list of up to {_MOST_POINTS} urgencies")
    return [float(checked({"urgency": value})["urgency"]) for value in given]


def desk_data(desk: Desk) -> dict[str, Any]:
    """Which tables these are, and their orders."""
    rows = desk.inputs.orders.frame
    sides = ["buy" if side > 0 else "sell" for side in rows["side"].tolist()]
    columns = (rows["order_id"].tolist(), sides, rows["quantity"].tolist(), rows["symbol"].tolist())
    named = {name: t.source for name, t in vars(desk.inputs).items() if isinstance(t, Checked)}
    return {
        "mark": desk.mark,
        "title": desk.title,
        "files": named,
        "session": f"{date_text(datetime.combine(desk.day, time()))} {desk.day.year}",
        "date": desk.day.isoformat(),
        "at": _moment_text(desk),
        "together": desk.together,
        "notes": list(desk.inputs.notes),
        "orders": [
            {"order": name, "side": side, "quantity": quantity, "symbol": symbol}
            for name, side, quantity, symbol in zip(*columns, strict=True)
        ],
    }


def _moment_text(desk: Desk) -> str:
    """The planning time in words; without one it is when the tables were read."""
    if desk.at is None:
        return f"{desk.now:%Y-%m-%d %H:%M} UTC"
    if "T" not in desk.at:
        return desk.at[:5]
    at = datetime.fromisoformat(desk.at)
    return f"{at:%Y-%m-%d %H:%M} {at:%Z}".rstrip()


def failure(error: HeadraceError) -> dict[str, Any]:
    """An error as data: its message and, of input, every problem."""
    problems = error.problems if isinstance(error, InputError) else ()
    return {
        "error": type(error).__name__,
        "message": str(error),
        "problems": [vars(problem) for problem in problems],
    }
