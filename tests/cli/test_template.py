"""`headrace template`: what is written reads back, and nothing is overwritten unasked."""

from __future__ import annotations

import re
import tomllib

import pandas as pd
import pytest
from click.testing import CliRunner

from scheduler.cli import main
from scheduler.settings import SECTIONS, Settings, settings_from_dict
from scheduler.tables.inputs import TABLES
from scheduler.tables.settings_file import read_settings
from tests.samples import SAMPLES, refused


def run(*args):
    return CliRunner().invoke(main, ["template", *map(str, args)])


def test_the_files_are_written(tmp_path):
    """One file per table, the guide to their columns and the settings."""
    result = run("--out", tmp_path / "new")
    assert result.exit_code == 0
    names = {path.name for path in (tmp_path / "new").iterdir()}
    assert names == {*(f"{name}.csv" for name in TABLES), "columns.csv", "settings.toml"}
    assert set(TABLES) == set(SAMPLES)


@pytest.mark.parametrize("name", TABLES)
def test_a_table_reads_back(tmp_path, name):
    """Empty, it lacks nothing but rows; with columns and rows added, it is a table."""
    run("--out", tmp_path)
    path = tmp_path / f"{name}.csv"
    (problem,) = refused(TABLES[name].ensure, path)
    assert problem.rule == "has no rows"
    header = path.read_text().strip().split(",")
    further = [column for column in SAMPLES[name] if column not in header]
    assert not further or TABLES[name].TABLE.rest is not None
    rows = pd.DataFrame(SAMPLES[name]).reindex(columns=header + further)
    path.write_text(rows.to_csv(index=False))
    assert path.read_text().startswith(",".join(header))
    assert len(TABLES[name].ensure(path).frame) == len(rows)


def test_the_settings_read_back_as_the_defaults(tmp_path):
    """As written and with every default uncommented; each setting stands there once."""
    run("--out", tmp_path)
    path = tmp_path / "settings.toml"
    assert read_settings(path) == Settings()
    text = path.read_text()
    assigned = re.sub(r"(?m)^#(\w+ = .+)$", r"\1", text)
    assert settings_from_dict(tomllib.loads(assigned)) == Settings()
    for section, kind in SECTIONS.items():
        part = text.split(f"[{section}]")[1].split("\n[")[0]
        names = re.findall(r"(?m)^#(\w+) =", part)
        assert names == list(kind.__dataclass_fields__)


def test_the_guide_names_every_column(tmp_path):
    """Each with its meaning, and with what an empty cell stands for unless it is required."""
    run("--out", tmp_path)
    guide = pd.read_csv(tmp_path / "columns.csv", keep_default_na=False)
    for name, module in TABLES.items():
        rest = [] if module.TABLE.rest is None else [module.TABLE.rest.name]
        named = guide.loc[guide["table"] == name, "column"].tolist()
        assert named == module.TABLE.header + rest
    assert (guide["meaning"] != "").all()
    assert ((guide["if_empty"] == "") == (guide["required"] == "yes")).all()
    assert not guide["if_empty"].isin(["nan", "None"]).any()


def test_nothing_is_overwritten_without_force(tmp_path):
    """A file of the same name is a refusal; with --force it is replaced."""
    (tmp_path / "market.csv").write_text("mine")
    result = run("--out", tmp_path)
    assert result.exit_code == 2
    assert "market.csv; use --force" in result.stderr
    assert [path.name for path in tmp_path.iterdir()] == ["market.csv"]
    assert (tmp_path / "market.csv").read_text() == "mine"
    assert run("--out", tmp_path, "--force").exit_code == 0
    assert (tmp_path / "market.csv").read_text().startswith("symbol,price")


def test_what_cannot_be_written_is_said(tmp_path):
    """A file in the place of the directory: exit status 2, no traceback."""
    (tmp_path / "f").write_text("")
    result = run("--out", tmp_path / "f")
    assert result.exit_code == 2
    assert "is a file; give the name of a directory" in result.stderr
    below = run("--out", tmp_path / "f" / "g")
    assert below.exit_code == 2
    assert "cannot write" in below.stderr
