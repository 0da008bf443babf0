"""The time axis of the charts: closed periods are gaps, everything else to scale."""

from __future__ import annotations

import datetime

import numpy as np
import pytest

from scheduler.report.clock_axis import ClockAxis, outline
from scheduler.report.lines import axis_data
from scheduler.report.ticks import ticks
from scheduler.sessions import Grid, Kind, build_grid, resolve

DAY = datetime.date(2026, 3, 5)


def grid(calendar: str = "XNYS", start: str | None = None, end: str | None = None) -> Grid:
    moments = [
        None if text is None else resolve(text, date=DAY, calendar=calendar)
        for text in (start, end)
    ]
    made, _ = build_grid(
        calendar,
        "flat" if calendar == "24/7" else "u-shape",
        date=DAY,
        start=moments[0],
        end=moments[1],
        bucket=15.0,
        overnight_share=0.2,
    )
    return made


CASES = {
    "one session": grid(),
    "part of a session": grid(start="10:07", end="15:10"),
    "over a night": grid(start="2026-03-05T13:00", end="2026-03-06T12:00"),
    "over a weekend": grid(end="2026-03-12T12:00"),
    "lunch": grid("XTKS"),
    "round the clock": grid("24/7", "2026-03-05T20:10", "2026-03-07T03:00"),
}


@pytest.fixture(params=CASES)
def axis(request) -> ClockAxis:
    return ClockAxis.of(CASES[request.param])


def test_continuous_buckets_are_as_wide_as_they_last(axis):
    """And stages follow each other without overlap; auctions have the usual width."""
    grid = axis.grid
    width = axis.right - axis.left
    continuous = grid.kind == Kind.CONTINUOUS
    minutes = (grid.end - grid.start) / np.timedelta64(1, "m")
    np.testing.assert_allclose(width[continuous], minutes[continuous])
    np.testing.assert_allclose(axis.left[1:], axis.right[:-1])
    np.testing.assert_allclose(width[grid.auction], 15.0)


def test_closed_periods_are_narrow_gaps(axis):
    """A pause is never stretched: all of them together are a fifth at most."""
    width = axis.right - axis.left
    closed = ~axis.grid.open
    assert (width[closed] >= 15.0).all()
    assert width[closed].sum() <= 0.2 * width.sum()
    assert len(axis_data(axis)["pauses"]) == closed.sum()


def test_lines_break_at_pauses_only(axis):
    after = list(range(1, len(axis.grid) + 1))
    path = axis.path(0, after)
    assert path.count(None) == (~axis.grid.open).sum()
    assert [value for value in path if value is not None] == [0, *after]
    assert len(axis.path_times()) == len(path)


def test_ticks_are_where_their_clock_is(axis):
    """A tick stands in the bucket, or at the edge of the bucket, that holds its time of day."""
    positions, texts = ticks(axis)
    assert 2 <= len(positions) <= 9
    for x, text in zip(positions, texts, strict=True):
        clock = text.split("<br>")[0]
        near = np.flatnonzero((axis.left <= x + 1e-6) & (x - 1e-6 <= axis.right))
        spans = [(axis.starts(s), axis.ends(s)) for s in near if axis.grid.open[s]]
        hour, minute = map(int, clock.split(":"))
        assert any(
            start <= start.replace(hour=hour, minute=minute) <= end or f"{end:%H:%M}" == clock
            for start, end in spans
        )


def test_labels_have_room(axis):
    """No two ticks are nearer than a twentieth of the axis."""
    positions, _ = ticks(axis)
    assert np.diff(np.sort(positions)).min() > 0.05 * axis.length


def test_a_short_window_has_a_tick_too():
    """No round time lies in these seconds: the start is marked."""
    axis = ClockAxis.of(grid(start="10:00:10", end="10:00:40"))
    assert ticks(axis) == ([0.0], ["10:00:10"])


def test_each_session_says_its_date():
    """Where there are several sessions, each starts with its date."""
    _, texts = ticks(ClockAxis.of(CASES["over a weekend"]))
    dates = [text.split("<br>")[1] for text in texts if "<br>" in text]
    assert dates == [
        "Thu 5 Mar",
        "Fri 6 Mar",
        "Mon 9 Mar",
        "Tue 10 Mar",
        "Wed 11 Mar",
        "Thu 12 Mar",
    ]


def test_buckets_are_named_by_their_local_times():
    axis = ClockAxis.of(CASES["over a night"])
    assert axis.spans()[0] == "Thu 5 Mar 13:00–13:15"
    assert axis.spans()[12] == "Thu 5 Mar 16:00 auction"
    assert axis.path_times()[:2] == ["Thu 5 Mar 13:00", "Thu 5 Mar 13:15"]


def test_an_outline_goes_there_and_back_piece_by_piece():
    assert outline([1, 2, None, 3], [5, 6, None, 7]) == [1, 2, 6, 5, None, 3, 7]
    assert outline([1, 2], [5, 6]) == [1, 2, 6, 5]
