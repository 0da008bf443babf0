"""A schedule carried to other buckets: what is conserved, and what falls outside."""

from __future__ import annotations

import datetime

import numpy as np
import pandas as pd
import pytest

from scheduler.scenarios.overlap import carried
from scheduler.sessions import Grid, build_grid

DAY = datetime.date(2026, 3, 5)


def grid(bucket: float = 15.0, start: str | None = None, end: str | None = None) -> Grid:
    window = {
        key: None if value is None else pd.Timestamp(f"2026-03-05T{value}", tz="America/New_York")
        for key, value in (("start", start), ("end", end))
    }
    made, _ = build_grid("XNYS", "u-shape", date=DAY, bucket=bucket, overnight_share=0.2, **window)
    return made


@pytest.mark.parametrize(("old", "new"), [(15.0, 30.0), (30.0, 15.0), (15.0, 7.0), (7.0, 60.0)])
def test_nothing_is_lost_in_the_same_window(old: float, new: float) -> None:
    """Totals agree, and so does what is done by each time that both know as a bucket's end."""
    rng = np.random.default_rng(1)
    one, other = grid(old), grid(new)
    shares = rng.uniform(0.0, 100.0, len(one)) * one.open
    found = carried(shares, one, other)
    assert found.sum() == pytest.approx(shares.sum())
    common = np.intersect1d(one.end, other.end)
    for moment in common:
        by = [values[made.end <= moment].sum() for values, made in ((shares, one), (found, other))]
        assert by[0] == pytest.approx(by[1])


def test_participation_is_kept_in_finer_buckets() -> None:
    """A slice in proportion to volume stays in proportion to volume."""
    one, other = grid(60.0), grid(15.0)
    np.testing.assert_allclose(carried(one.volume, one, other), other.volume, rtol=1e-9)


def test_what_falls_outside_is_left_out() -> None:
    """A bucket cut in the middle keeps half; auctions that are not there keep nothing."""
    one, other = grid(30.0), grid(30.0, "11:15", "14:00")
    shares = np.where(one.auction, 1000.0, 60.0)
    found = carried(shares, one, other)
    assert found.sum() == pytest.approx(60.0 * 5.5)
    assert found[0] == pytest.approx(30.0)
