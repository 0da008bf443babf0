"""The invented example that comes with the package: a copy of the repository's `examples`."""

from __future__ import annotations

from importlib.resources import files

from scheduler.console.desk import Desk, open_desk
from scheduler.tables.settings_file import settings_of_bytes
from scheduler.tables.source import Upload

TABLES = ("orders", "market", "profiles", "readings")
DATE, AT = "2026-03-05", "09:30:00"


def example_desk() -> Desk:
    """The five orders of the example."""
    folder = files("scheduler.console") / "example"
    sources = {
        name: Upload(f"{name}.csv", (folder / f"{name}.csv").read_bytes()) for name in TABLES
    }
    settings = settings_of_bytes((folder / "settings.toml").read_bytes(), "settings.toml")
    return open_desk("the example", sources, settings=settings, date=DATE, at=AT)
