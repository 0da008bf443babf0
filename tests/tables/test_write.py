"""Files are written whole or not at all, and safe to open in a spreadsheet."""

from __future__ import annotations

import io
import json
from datetime import date, time
from enum import Enum

import numpy as np
import pandas as pd
import pytest

from scheduler.errors import MisuseError, OutputError
from scheduler.tables import write
from scheduler.tables.write import to_json, write_file, write_files, write_table


class Status(Enum):
    PROVEN = "proven"


def _files(folder):
    return {path.name: path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def test_text_that_would_run_as_a_formula_is_neutralised(tmp_path):
    """An apostrophe goes before = + - @ tab and return, in cells and in headings."""
    risky = ["=1+1", "+x", "-x", "@x", "\tx", "\rx", " =x", "fine", None]
    write_table(pd.DataFrame({"note": risky, "=head": 1}), tmp_path / "t.csv")
    table = pd.read_csv(tmp_path / "t.csv", keep_default_na=False)
    assert list(table.columns) == ["note", "'=head"]
    expected = ["'=1+1", "'+x", "'-x", "'@x", "'\tx", "'\nx", "' =x", "fine", ""]
    assert table["note"].tolist() == expected


@pytest.mark.parametrize("suffix", ["csv", "parquet"])
def test_numbers_are_never_touched(tmp_path, suffix):
    """Negative numbers keep their sign and every digit, in number and in text columns."""
    values = [-1.5, -0.1 - 0.2, 1e-300, -7.0]
    frame = pd.DataFrame({"number": values, "text": ["-5", "+1e-3", "-.5", "2"]})
    path = tmp_path / f"t.{suffix}"
    write_table(frame, path)
    back = pd.read_parquet(path) if suffix == "parquet" else pd.read_csv(path, dtype={"text": str})
    assert back["number"].tolist() == values
    assert back["text"].tolist() == ["-5", "+1e-3", "-.5", "2"]


def test_times_are_written_with_offset(tmp_path):
    """Timestamps are ISO 8601 text in CSV; a missing one is an empty cell."""
    times = pd.to_datetime(["2026-01-05 09:30", None]).tz_localize("America/New_York")
    write_table(pd.DataFrame({"start": times, "n": [1, 2]}), tmp_path / "t.csv")
    assert (tmp_path / "t.csv").read_text() == "start,n\n2026-01-05T09:30:00-05:00,1\n,2\n"


def test_standard_output_is_csv(monkeypatch):
    """`-` writes UTF-8 whatever the terminal's encoding."""
    out = io.TextIOWrapper(io.BytesIO(), encoding="ascii")
    monkeypatch.setattr("sys.stdout", out)
    write_table(pd.DataFrame({"symbol": ["ZÜRI"]}), "-")
    assert out.buffer.getvalue() == "symbol\nZÜRI\n".encode()


def test_a_table_has_one_of_two_suffixes(tmp_path):
    """Another one is refused before anything is written."""
    with pytest.raises(MisuseError, match=r"end the name in \.csv or \.parquet"):
        write_files(tmp_path / "out", {"a.csv": pd.DataFrame(), "b.xlsx": pd.DataFrame()})
    assert _files(tmp_path) == {}


def test_json_has_no_nan():
    """Not-a-number and infinity are null; arrays, times and enumerations are plain."""
    data = {
        "a": [np.float64("nan"), float("inf"), np.int64(3), np.bool_(True), -0.5],
        "b": np.array([[1.0, np.nan]]),
        "c": {"at": pd.Timestamp("2026-01-05T10:00-05:00"), "date": date(2026, 1, 5)},
        "d": (Status.PROVEN, None, pd.NaT, time(9, 30), "Zürich"),
    }
    assert json.loads(to_json(data), parse_constant=pytest.fail) == {
        "a": [None, None, 3, True, -0.5],
        "b": [[1.0, None]],
        "c": {"at": "2026-01-05T10:00:00-05:00", "date": "2026-01-05"},
        "d": ["proven", None, None, "09:30:00", "Zürich"],
    }


def test_a_set_of_files_is_written(tmp_path):
    """Into a new directory or an old one, where other files are left alone."""
    out = tmp_path / "new" / "plan"
    files = {"t.csv": pd.DataFrame({"a": [1]}), "s.json": {"x": 1}, "r.html": "<p>", "b.bin": b"\0"}
    assert [path.name for path in write_files(out, files)] == list(files)
    (out / "mine.txt").write_text("kept")
    write_files(out, {"t.csv": pd.DataFrame({"a": [2]})})
    found = _files(tmp_path)
    assert found["t.csv"] == b"a\n2\n"
    assert found["mine.txt"] == b"kept"
    assert set(found) == {*files, "mine.txt"}


def _fail_on(monkeypatch, name, call):
    """Let the `call`-th use of a function fail as on a full disk."""
    module, attribute = name
    original, count = getattr(module, attribute), [0]

    def failing(*args, **kwargs):
        count[0] += 1
        if count[0] == call:
            raise OSError(28, "No space left on device")
        return original(*args, **kwargs)

    monkeypatch.setattr(module, attribute, failing)


@pytest.mark.parametrize("call", [1, 2])
def test_a_full_disk_leaves_everything_as_it_was(tmp_path, monkeypatch, call):
    """Whether the first or the second file fails, old files stay and no scrap remains."""
    out = tmp_path / "plan"
    write_files(out, {"a.csv": "old a", "b.csv": "old b"})
    _fail_on(monkeypatch, (write.os, "fsync"), call)
    with pytest.raises(OutputError, match=r"cannot write .*plan: No space left on device"):
        write_files(out, {"a.csv": "new a", "b.csv": "new b"})
    assert _files(tmp_path) == {"a.csv": b"old a", "b.csv": b"old b"}
    assert [path.name for path in tmp_path.iterdir()] == ["plan"]


@pytest.mark.parametrize("call", [1, 2, 3, 4, 5])
def test_a_failure_while_renaming_is_undone(tmp_path, monkeypatch, call):
    """At whichever rename it fails, the directory holds the old set again."""
    out = tmp_path / "plan"
    write_files(out, {"a.csv": "old a", "b.csv": "old b"})
    renames = write.Path.rename
    count = [0]

    def failing(self, target):
        count[0] += 1
        if count[0] == call:
            raise OSError(5, "Input/output error")
        return renames(self, target)

    monkeypatch.setattr(write.Path, "rename", failing)
    with pytest.raises(OutputError, match="Input/output error"):
        write_files(out, {"a.csv": "new a", "b.csv": "new b", "c.csv": "new c"})
    monkeypatch.undo()
    assert _files(tmp_path) == {"a.csv": b"old a", "b.csv": b"old b"}
    assert [path.name for path in tmp_path.iterdir()] == ["plan"]


def test_one_file_is_replaced_whole_or_kept(tmp_path, monkeypatch):
    """As for a set of files."""
    write_file(tmp_path / "t.csv", "old")
    _fail_on(monkeypatch, (write.os, "fsync"), 1)
    with pytest.raises(OutputError):
        write_file(tmp_path / "t.csv", "new")
    assert _files(tmp_path) == {"t.csv": b"old"}
    write_file(tmp_path / "t.csv", "new")
    assert _files(tmp_path) == {"t.csv": b"new"}


def test_what_is_no_place_to_write_is_said(tmp_path):
    """A file where a directory is needed, the other way round, and a directory not there."""
    (tmp_path / "f").write_text("")
    with pytest.raises(MisuseError, match="is a file"):
        write_files(tmp_path / "f", {"t.csv": ""})
    with pytest.raises(MisuseError, match="is no regular file"):
        write_file(tmp_path, "")
    with pytest.raises(OutputError, match="No such file or directory"):
        write_file(tmp_path / "none" / "t.csv", "")
