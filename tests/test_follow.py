"""A growing file of fills followed: whole lines only, errors that pass, a clean end."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pandas as pd
import pytest

from scheduler import HeadraceError, InputError, MisuseError
from scheduler.follow import complete_rows, follow, seconds_of
from scheduler.replan import Replan
from scheduler.tables import fills
from tests.desk import name, planned, task

HEADER = "order_id,time,quantity,price\n"
PLAN = planned(task(60_000), name(), bucket=30.0, urgency=0.3)


def clock(*times: str) -> Iterator[pd.Timestamp]:
    return (pd.Timestamp(f"2026-03-05T{text}:00-05:00").tz_convert("UTC") for text in times)


def rounds(file: Path, times: tuple[str, ...], contents: list[str]) -> list[Replan | HeadraceError]:
    """A round at each time, the file's content changed before it."""
    ticks, texts = clock(*times), iter(contents[1:])
    file.write_text(contents[0])

    def wait(_seconds: float) -> bool:
        text = next(texts, None)
        if text is not None:
            file.write_text(text)
        return text is None

    return list(follow(PLAN, file, every=300.0, clock=lambda: next(ticks), wait=wait))


def test_a_line_without_its_end_waits(tmp_path: Path) -> None:
    first = f"{HEADER}OAKMERE-1,10:05,5000,50.1\n"
    cut = f"{first}OAKMERE-1,10:50,70"
    whole = f"{first}OAKMERE-1,10:50,7000,50.2\n"
    found = rounds(tmp_path / "fills.csv", ("10:30", "11:00", "11:05"), [first, cut, whole])
    done = [each.progress["done"].iloc[0] for each in found if isinstance(each, Replan)]
    assert done == [5000.0, 5000.0, 12_000.0]


def test_a_round_that_fails_is_followed_by_the_next(tmp_path: Path) -> None:
    wrong = f"{HEADER}OTHER-1,10:05,5000,50.1\n"
    right = f"{HEADER}OAKMERE-1,10:05,5000,50.1\n"
    found = rounds(tmp_path / "fills.csv", ("10:30", "11:00"), [wrong, right])
    assert isinstance(found[0], InputError)
    assert isinstance(found[1], Replan)


def test_it_ends_when_nothing_is_left_and_after_the_close(tmp_path: Path) -> None:
    """Without being told to stop."""
    everything = f"{HEADER}OAKMERE-1,10:05,60000,50.1\n"
    found = rounds(tmp_path / "fills.csv", ("10:30", "11:00"), [everything, everything])
    assert len(found) == 1
    late = rounds(tmp_path / "fills.csv", ("16:30", "16:35"), [HEADER, HEADER])
    assert len(late) == 1


def test_before_the_open_the_plan_stands(tmp_path: Path) -> None:
    """A file that is not there yet holds no fills; the present is the plan's time zero."""
    (only,) = follow(
        PLAN,
        tmp_path / "none.csv",
        every=60.0,
        clock=lambda: next(clock("08:00")),
        wait=lambda _: True,
    )
    assert isinstance(only, Replan)
    assert only.plan is not None
    assert (only.plan.schedule["shares"] - PLAN.schedule["shares"]).abs().max() <= 1


def test_rows_of_a_growing_file(tmp_path: Path) -> None:
    file = tmp_path / "fills.csv"
    assert complete_rows(file) is None
    file.write_text(HEADER)
    assert complete_rows(file) is None
    file.write_text(f"{HEADER}a,10:00,1\n")
    with pytest.raises(InputError, match="row 2: has 3 cells where the header has 4"):
        fills.ensure(complete_rows(file))
    file.write_text(f"{HEADER}\na,10:00,1,2\na,10:00,1\n")
    with pytest.raises(InputError, match=r"fills\.csv, row 4: has 3 cells"):
        fills.ensure(complete_rows(file))


@pytest.mark.parametrize(
    ("text", "seconds"), [("30s", 30.0), ("5min", 300.0), ("1.5h", 5400.0), (" 1s ", 1.0)]
)
def test_times_to_wait(text: str, seconds: float) -> None:
    assert seconds_of(text) == seconds


@pytest.mark.parametrize("text", ["", "5", "0.5s", "min", "-3s", "5 days", "nan"])
def test_times_that_are_none(text: str) -> None:
    with pytest.raises(MisuseError, match="is no time to wait"):
        seconds_of(text)
