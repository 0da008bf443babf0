"""Empty tables and a settings file, made from the rules that read them."""

from __future__ import annotations

import textwrap
from dataclasses import MISSING, Field, fields
from typing import Any

import pandas as pd

from scheduler.settings import SECTIONS
from scheduler.tables.columns import Column, Number
from scheduler.tables.draft import Table
from scheduler.tables.inputs import TABLES


def template_files() -> dict[str, pd.DataFrame | str]:
    """Content by file name: a header for each table, what columns mean, and the settings."""
    tables: dict[str, pd.DataFrame | str] = {
        f"{name}.csv": pd.DataFrame(columns=module.TABLE.header) for name, module in TABLES.items()
    }
    guide = pd.concat([_guide(module.TABLE) for module in TABLES.values()], ignore_index=True)
    return {**tables, "columns.csv": guide, "settings.toml": settings_text()}


def settings_text() -> str:
    """A settings file in which every setting stands, commented out, with its default."""
    lines = ["# Every setting with its default. Remove a # to set another value."]
    for name, section in SECTIONS.items():
        lines += ["", f"[{name}]"]
        for item in fields(section):
            lines += textwrap.wrap(_meaning(item), 96, initial_indent="# ", subsequent_indent="# ")
            lines += [f"#{item.name} = {_toml(item.default)}".rstrip(), ""]
        lines.pop()
    return "\n".join(lines) + "\n"


def _guide(table: Table) -> pd.DataFrame:
    return pd.DataFrame(
        [
            {
                "table": table.name,
                "column": column.name,
                "required": "yes" if column.required else "no",
                "meaning": column.doc,
                "range": column.range if isinstance(column, Number) else "",
                "if_empty": "" if column.required else _if_empty(column),
            }
            for column in (*table.columns, *([table.rest] if table.rest else []))
            if column.kept
        ]
    )


def _if_empty(column: Column) -> str:
    if column.empty:
        return column.empty
    default = column.default
    if isinstance(default, bool):
        return str(default).lower()
    return f"{default:g}" if isinstance(default, float) else str(default)


def _meaning(item: Field[Any]) -> str:
    meta = item.metadata
    text = str(meta["doc"])
    if "choices" in meta:
        return f"{text}: {', '.join(meta['choices'])}"
    return f"{text} (from {meta['low']:g} to {meta['high']:g})" if "low" in meta else text


def _toml(default: Any) -> str:
    if default is None or default is MISSING:
        return ""
    return f'"{default}"' if isinstance(default, str) else repr(default)
