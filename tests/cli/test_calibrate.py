"""`headrace calibrate`: files, streams, exit status."""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

from scheduler.calibrate import calibrate
from scheduler.cli import main
from scheduler.tables import market, profiles
from tests.past import daily_bars, intraday_bars
from tests.tapes import frame_of, market_frame, played


def run(*args, **options):
    return CliRunner().invoke(main, ["calibrate", *map(str, args)], **options)


@pytest.fixture
def bars(put):
    """A file of daily bars with a hole, which makes a note."""
    return put("bars.csv", daily_bars().drop(30).to_csv(index=False))


def test_the_files_are_those_of_the_library(tmp_path, bars):
    """A table on standard output, notes and what was written on standard error."""
    result = run("--bars", bars, "--out", tmp_path / "out")
    assert result.exit_code == 0
    header, line = result.stdout.splitlines()
    assert header.startswith("symbol  ")
    assert line.split()[0] == "QUAY"
    assert line.split()[-2:] == ["58", "2026-02-27"]
    assert "Note: QUAY: sessions without a bar" in result.stderr
    assert (
        f"Wrote market.csv, settings.toml, estimates.json, summary.json to {tmp_path / 'out'}"
        in result.stderr
    )
    expected = calibrate(bars)
    found = market.ensure(tmp_path / "out" / "market.csv").frame
    assert found["daily_vol"].tolist() == expected.market["daily_vol"].tolist()
    summary = json.loads((tmp_path / "out" / "summary.json").read_text())
    assert summary["symbols"]["QUAY"] == expected.summary["symbols"]["QUAY"]
    assert summary["inputs"] == {"bars": bars}
    assert summary["notes"] == list(expected.notes)


def test_options_reach_the_library(tmp_path, put):
    """Calendar, lookback, settings, columns to ignore; profiles from intraday bars."""
    shares = np.full(24, 1 / 24)
    frame = intraday_bars(40, shares, shares, calendar="24/7", step=60, vol=0.12)
    path = put("b.csv", frame.assign(venue="X").to_csv(index=False))
    settings = put("s.toml", "[checks]\nwarn_daily_vol = 0.2\n")
    options = ("--calendar", "24/7", "--lookback", 25, "--settings", settings)
    result = run(
        "--bars", path, *options, "--ignore-columns", "venue", "--json", "--out", tmp_path / "o"
    )
    assert result.exit_code == 0
    summary = json.loads(result.stdout)
    assert (summary["calendar"], summary["lookback"]) == ("24/7", 25)
    assert summary["symbols"]["QUAY"]["returns"] == 25
    assert summary["notes"] == [f"{path}: ignored columns: venue"]
    assert profiles.ensure(tmp_path / "o" / "profiles.csv").notes == ()


def test_quiet_and_standard_input(tmp_path, bars):
    """`-` is read; nothing is said."""
    text = daily_bars().to_csv(index=False)
    result = run("--bars", "-", "--out", tmp_path / "out", "--quiet", input=text)
    assert (result.exit_code, result.output) == (0, "")
    assert (tmp_path / "out" / "market.csv").exists()


def test_nothing_is_written_on_failure(tmp_path, put):
    """Bad cells, too little data: exit status 2 and no directory."""
    short = put("short.csv", daily_bars(10).to_csv(index=False))
    wrong = put("wrong.csv", daily_bars().assign(close=-1).to_csv(index=False))
    for path, words in ((short, "has 9 usable close-to-close returns"), (wrong, "must be above 0")):
        result = run("--bars", path, "--out", tmp_path / "out")
        assert result.exit_code == 2
        assert result.stdout == ""
        assert words in result.stderr
        assert "nothing was written" in result.stderr
        assert not (tmp_path / "out").exists()
    as_data = json.loads(run("--bars", short, "--out", tmp_path / "out", "--json").stdout)
    assert as_data["problems"][0]["value"] == "QUAY"


@pytest.mark.parametrize(
    ("args", "words"),
    [
        (["--out", "o"], "give --bars FILE, --trades FILE, or --fills FILE with --orders"),
        (["--bars", "b.csv"], "Missing option '--out'"),
        (["--bars", "none.csv", "--out", "o"], "there is no such file"),
    ],
)
def test_misuse(args, words):
    """Exit status 2 and what to do."""
    result = run(*args)
    assert result.exit_code == 2
    assert words in result.stderr


def test_a_short_lookback_and_an_unknown_calendar_are_refused(tmp_path, bars):
    """The library's own messages."""
    short = run("--bars", bars, "--out", tmp_path / "o", "--lookback", 5)
    unknown = run("--bars", bars, "--out", tmp_path / "o", "--calendar", "XNYX")
    assert (short.exit_code, unknown.exit_code) == (2, 2)
    assert "lookback must be at least 20 sessions" in short.stderr
    assert "did you mean 'XNYS'?" in unknown.stderr
    assert not (tmp_path / "o").exists()


def test_many_symbols_are_a_line_each(tmp_path, put):
    """No number is cut."""
    frames = [daily_bars(symbol=f"S{n:03d}", seed=n) for n in range(30)]
    path = put("b.csv", pd.concat(frames).to_csv(index=False))
    result = run("--bars", path, "--out", tmp_path / "o")
    first, second = result.stdout.split("\n\n")
    assert len(first.splitlines()) == 31
    assert second.splitlines()[1].startswith("level_rate ")


def test_trades_on_the_command_line(tmp_path, put):
    """Tables of the tape and of the settings; the same figures as JSON."""
    trades = put("t.csv", frame_of(played(3, sessions=5)).to_csv(index=False))
    table = put("m.csv", market_frame().dropna(axis=1).to_csv(index=False))
    options = ("--trades", trades, "--market", table, "--out", tmp_path / "o")
    result = run(*options)
    assert result.exit_code == 0
    tapes, settings = result.stdout.split("\n\n")
    assert tapes.splitlines()[0].split() == [
        *("symbol", "trades", "by", "quote", "by", "tick", "unsigned", "last", "reading")
    ]
    assert tapes.splitlines()[1].split()[:5] == ["QUAY", "5,120", "100%", "0%", "0%"]
    assert settings.splitlines()[1].startswith("reading_weight ")
    assert (tmp_path / "o" / "readings.csv").exists()
    summary = json.loads(run(*options, "--json").stdout)
    assert summary["estimates"]["tapes"]["symbols"]["QUAY"]["trades"] == 5120


def test_fills_without_orders_are_misuse(tmp_path, put):
    fills = put("f.csv", "order_id,time,quantity,price\no-1,2026-02-24T10:00,100,50\n")
    result = run("--fills", fills, "--out", tmp_path / "o")
    assert result.exit_code == 2
    assert "fills and orders belong together; give both" in result.stderr
