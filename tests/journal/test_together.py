"""Several processes at once, and processes that are killed."""

from __future__ import annotations

import json
import random
import time

import pytest

from scheduler.errors import JournalError
from scheduler.journal.store import Journal
from scheduler.journal.verify import verify
from tests.journal.writing import add, start

LIGHT_AND_HEAVY = [
    pytest.param(100, id="100"),
    pytest.param(1000, id="1000", marks=pytest.mark.slow),
]


@pytest.mark.parametrize("each", LIGHT_AND_HEAVY)
def test_eight_processes_lose_nothing(place: str, each: int) -> None:
    """They begin on no journal at all; every entry is there once, in one unbroken chain."""
    writers = [start(place, each, f"writer {number}") for number in range(8)]
    told = [
        int(line) for writer in writers for line in writer.communicate(timeout=600)[0].splitlines()
    ]
    assert [writer.returncode for writer in writers] == [0] * 8
    assert sorted(told) == list(range(1, 8 * each + 1))
    with Journal(place, write=False) as journal:
        verdict = verify(journal)
        texts = [json.loads(entry.brief)["text"] for entry in journal.entries()]
    assert (verdict.problems, verdict.entries) == ((), 8 * each)
    wanted = {f"writer {writer} {number}" for writer in range(8) for number in range(each)}
    assert set(texts) == wanted


@pytest.mark.parametrize("times", [20, pytest.param(200, marks=pytest.mark.slow)])
def test_killed_in_the_middle_nothing_is_broken_or_half(place: str, times: int) -> None:
    """All that was acknowledged is there; at most one more was kept without being told.

    A server may finish that one after it was looked for, which the next life's number shows.
    """
    rng = random.Random(1)
    last = 0
    for attempt in range(times):
        writer = start(place, 0, f"life {attempt}")
        assert writer.stdout is not None
        told = [int(writer.stdout.readline())]
        time.sleep(rng.uniform(0.0, 0.1))
        writer.kill()
        told += [int(line) for line in writer.communicate()[0].splitlines() if line.strip()]
        assert told == list(range(told[0], told[0] + len(told)))
        assert told[0] - last in (1, 2)
        last = told[-1]
        with Journal(place, write=False) as journal:
            verdict = verify(journal)
        assert verdict.problems == ()
        assert verdict.entries - last in (0, 1)
    with Journal(place) as journal:
        assert add(journal, "and on").number - last in (1, 2)


def test_a_writer_kept_waiting_too_long_can_go_on(
    place: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """It is told why it could not write, and writes as soon as nobody stands in its way."""
    monkeypatch.setattr("scheduler.journal.databases.WAIT", 0.2)
    with Journal(place) as first, Journal(place) as second:
        add(first, "before")
        with first.database.writing(), pytest.raises(JournalError):
            add(second, "meanwhile")
        assert add(second, "after").number == 2
