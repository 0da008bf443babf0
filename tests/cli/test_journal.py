"""`headrace journal`, and what `headrace plan` does where the journal cannot be written."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from scheduler.cli import main
from scheduler.cli.journal import command
from tests.cli.running import EXAMPLES, WHEN

ROOT = EXAMPLES.parent
PLAN = ("plan", EXAMPLES / "orders.csv", "--market", EXAMPLES / "market.csv")
PLAN = (*PLAN, "--profiles", EXAMPLES / "profiles.csv", *WHEN)
README = (ROOT / "README.md").read_text()


def run(*args: object, variable: str | None = None) -> Result:
    """`headrace` with these arguments; an exception that is no exit is a failure."""
    environment = {"HEADRACE_JOURNAL": variable}
    result = CliRunner().invoke(main, [*map(str, args)], env=environment)
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result


@pytest.fixture
def place(tmp_path: Path) -> str:
    """A journal of two plans, the second more urgent and of Parquet files."""
    where = str(tmp_path / "kept.db")
    assert run(*PLAN, "--journal", where, "--out", tmp_path / "one").exit_code == 0
    more = ("--urgency", "1", "--parquet", "--out", tmp_path / "two")
    assert run(*PLAN, *more, "--journal", where, "--quiet").exit_code == 0
    return where


def test_what_was_kept_is_listed_and_shown(place: str) -> None:
    listed = run("journal", "list", "--journal", place)
    lines = listed.stdout.splitlines()
    assert [line.split()[0] for line in lines] == ["entry", "1", "2"]
    assert "2026-03-05" in lines[1]
    assert f"{place}: 2 entries from " in listed.stderr
    assert "Entries are kept for good" in listed.stderr
    data = json.loads(run("journal", "list", "--json", "--newest", 1, "--journal", place).stdout)
    assert (data["entries"], [row["number"] for row in data["rows"]]) == (2, [2])
    shown = run("journal", "show", "last", variable=place).stdout
    assert data["rows"][0]["hash"] in shown
    assert "schedule.parquet" in shown
    assert "[plan] " in shown
    assert "urgency 1" in shown
    none = run("journal", "list", "--kind", "review", "--journal", place)
    assert none.stdout == "no entries\n"


def test_entries_are_compared_verified_exported_and_made_again(place: str, tmp_path: Path) -> None:
    compared = run("journal", "compare", 1, 2, "--journal", place)
    assert "plan.urgency: none | 1.0" in compared.stdout
    assert "inputs: market same, orders same, profiles same" in compared.stdout
    verified = run("journal", "verify", "--journal", place)
    assert verified.stdout.startswith("2 entries, unchanged; head ")
    head = verified.stdout.split()[-1]
    assert run("journal", "verify", "--head", head, "--journal", place).exit_code == 0
    out = tmp_path / "exported"
    assert run("journal", "export", 1, "--out", out, "--journal", place).exit_code == 0
    for name in ("schedule.csv", "summary.json"):
        assert (out / name).read_bytes() == (tmp_path / "one" / name).read_bytes()
    again = run("journal", "reproduce", 2, "--out", tmp_path / "again", "--journal", place)
    assert again.exit_code == 0, again.output
    assert again.stdout.startswith("Entry 2: the same plan")
    assert (tmp_path / "again" / "schedule.csv").exists()


def test_a_change_ends_in_exit_status_1(place: str) -> None:
    import sqlite3

    connection = sqlite3.connect(place)
    connection.execute("DROP TRIGGER headrace_entries_update")
    connection.execute("UPDATE headrace_entries SET kind = 'plam' WHERE number = 1")
    connection.commit()
    connection.close()
    result = run("journal", "verify", "--journal", place)
    assert result.exit_code == 1
    assert "entry 1: was changed" in result.stderr
    assert "is not as it was written" in result.stderr
    data = json.loads(run("journal", "verify", "--json", "--journal", place).stdout)
    assert data["sound"] is False
    assert len(data["problems"]) == 2
    wrong = run("journal", "verify", "--head", "f" * 64, "--journal", place)
    assert f"head {'f' * 64}: no entry has this hash" in wrong.stderr


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("list", "--journal", "none.db"), "journal none.db: there is none yet"),
        (("list", "--journal", "off"), "the journal is off"),
        (("list", "--journal", "ftp://x/y"), "unknown kind of address"),
        (("show", "7"), "no entry 7"),
        (("compare", "1", "7"), "no entry 7"),
        (("verify", "--head", "xyz"), "is no hash"),
        (("export", "1", "--out", "-"), "is no directory"),
    ],
)
def test_misuse_is_refused(place: str, arguments: tuple[str, ...], words: str) -> None:
    result = run("journal", *arguments, variable=place)
    assert result.exit_code == 2
    assert words in result.stderr
    assert result.stdout == ""


def test_every_option_of_its_commands_is_documented() -> None:
    flags = {flag for each in command.commands.values() for p in each.params for flag in p.opts}
    missing = {flag for flag in flags if flag.startswith("--") and flag not in README}
    assert missing <= {"--help"}
    assert all(f"`{name}" in README for name in command.commands)


def test_off_by_option_setting_or_environment(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """And on by default, in the platform's directory."""
    monkeypatch.setenv("XDG_DATA_HOME", str(tmp_path / "data"))
    monkeypatch.setattr("sys.platform", "linux")
    off = tmp_path / "off.toml"
    off.write_text('[journal]\nplace = "off"\n')
    kept = tmp_path / "data" / "headrace" / "journal.db"
    for arguments, variable in (
        (("--no-journal",), None),
        (("--settings", off), None),
        ((), "off"),
    ):
        result = run(*PLAN, *arguments, variable=variable)
        assert result.exit_code == 0
        assert "Journal" not in result.stderr
        assert not kept.parent.exists()
    result = run(*PLAN)
    assert "Journal: entry 1, " in result.stderr
    assert kept.exists()
    both = run(*PLAN, "--no-journal", "--journal", "x.db")
    assert both.exit_code == 2
    assert "exclude each other" in both.stderr


def test_a_journal_that_fails_leaves_the_plan_and_is_noticed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Exit status 3 at a place that was named, 0 with a warning at the default; files are whole."""
    wrong = tmp_path / "text.db"
    wrong.write_text("no database " * 100)
    named = run(*PLAN, "--journal", wrong, "--out", tmp_path / "a", "--quiet")
    monkeypatch.setenv("XDG_DATA_HOME", str(wrong))
    monkeypatch.setattr("sys.platform", "linux")
    default = run(*PLAN, "--out", tmp_path / "b", "--quiet")
    assert (named.exit_code, default.exit_code) == (3, 0)
    warning = "Warning: NOT IN THE JOURNAL; the result itself is complete. journal "
    assert named.stderr == f"{warning}{wrong}: is no journal; name another file\n"
    assert default.stderr.startswith(f"{warning}{wrong}/headrace/journal.db: cannot be made (")
    for folder in ("a", "b"):
        assert sorted(path.name for path in (tmp_path / folder).iterdir()) == [
            "schedule.csv",
            "summary.json",
        ]
    assert (tmp_path / "a" / "schedule.csv").read_bytes() == (
        tmp_path / "b" / "schedule.csv"
    ).read_bytes()


def test_misuse_of_the_journal_is_told_before_anything_is_written(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    result = run(*PLAN, "--journal", "mysql://x/y", "--out", tmp_path / "out")
    monkeypatch.setattr("scheduler.journal.databases.find_spec", lambda _name: None)
    missing = run(*PLAN, "--journal", "postgresql://x/y", "--out", tmp_path / "out")
    assert (result.exit_code, missing.exit_code) == (2, 2)
    assert "pip install 'headrace[postgres]'" in missing.stderr
    assert not (tmp_path / "out").exists()


def test_without_sqlite_a_plan_is_made_all_the_same(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Some builds of Python lack it."""
    monkeypatch.setenv("XDG_DATA_HOME", str(tmp_path / "data"))
    monkeypatch.setattr("sys.platform", "linux")
    monkeypatch.setitem(sys.modules, "sqlite3", None)
    result = run(*PLAN, "--out", tmp_path / "out")
    assert result.exit_code == 0
    assert "NOT IN THE JOURNAL" in result.stderr
    assert "built without sqlite3" in result.stderr
    assert (tmp_path / "out" / "schedule.csv").exists()


# on a disk of 600 kB of its own, in a name space that ends with the process
DISK = """
mount -t tmpfs -o size=600k none disk || exit 77
headrace() { "$PYTHON" -m scheduler "$@"; echo "status $?"; }
headrace $PLAN --out before
head -c 10M /dev/zero > disk/filler 2>/dev/null
headrace $PLAN --urgency 1 --out full
headrace journal verify
rm disk/filler
mount -o remount,ro disk
headrace $PLAN --urgency 2 --out read-only
headrace journal verify
"""


def test_a_full_or_read_only_disk_leaves_plans_and_journal_whole(tmp_path: Path) -> None:
    """The real thing: told in plain words, exit status 3, files whole, one sound entry."""
    if shutil.which("unshare") is None:
        pytest.skip("no unshare, with which to make a disk of the test's own")
    (tmp_path / "disk").mkdir()
    environment = {
        "PATH": "/usr/sbin:/usr/bin:/sbin:/bin",
        "PYTHON": sys.executable,
        "PYTHONPATH": str(ROOT),
        "PLAN": " ".join([*map(str, PLAN), "--quiet"]),
        "HEADRACE_JOURNAL": "disk/journal.db",
    }
    shell = ["unshare", "--user", "--map-root-user", "--mount", "sh", "-c", DISK]
    result = subprocess.run(
        shell, capture_output=True, text=True, env=environment, cwd=tmp_path, check=False
    )
    if result.returncode == 77 or "unshare" in result.stderr:
        pytest.skip("no leave to make a disk of the test's own")
    first, full, _, read_only, _ = (
        line.removeprefix("status ") for line in result.stdout.splitlines() if "status" in line
    )
    assert (first, full, read_only) == ("0", "3", "3"), result.stderr
    warning = (
        "Warning: NOT IN THE JOURNAL; the result itself is complete. journal disk/journal.db: "
    )
    assert result.stderr.splitlines() == [
        f"{warning}the disk is full; make room, or keep the journal elsewhere",
        f"{warning}is read-only; change its permissions, or keep the journal elsewhere",
    ]
    assert result.stdout.count("1 entries, unchanged") == 2
    for folder in ("before", "full", "read-only"):
        assert (tmp_path / folder / "schedule.csv").read_text().count("\n") > 10
        assert json.loads((tmp_path / folder / "summary.json").read_text())["orders"]
