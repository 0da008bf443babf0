"""A browser's side of the console without a browser: its cookie, its key, its questions."""

from __future__ import annotations

import re
from pathlib import Path
from typing import Any

from starlette.testclient import TestClient

from scheduler.console.app import app
from scheduler.console.desk import Desk
from scheduler.console.guard import Guard
from tests.cli.running import EXAMPLES

HOME = "http://127.0.0.1:8750"
TABLES = ("orders", "market", "profiles", "readings")


class Page:
    """One browser on one console."""

    def __init__(self, console: Any, home: str = HOME) -> None:
        self.client = TestClient(console, base_url=home)
        self.key = ""

    def load(self) -> Page:
        text = self.client.get("/").raise_for_status().text
        found = re.search(r'name="console-key" content="([^"]+)"', text)
        assert found is not None
        self.key = found[1]
        return self

    def post(self, name: str, body: Any = None, **more: Any) -> Any:
        """The answer to a question; an error is an answer, too."""
        headers = {"X-Console-Key": self.key}
        content = more if more else {"json": {} if body is None else body}
        return self.client.post(f"/api/{name}", headers=headers, **content)

    def ask(self, name: str, body: Any = None) -> dict[str, Any]:
        return self.post(name, body).raise_for_status().json()

    def plan(self, order: str | None, number: int = 1, **values: Any) -> dict[str, Any]:
        return self.ask("plan", {"number": number, "order": order, "values": values})

    def example(self) -> Page:
        """Turn to the example."""
        self.ask("open", {"mark": self.ask("known")["example"]})
        return self

    def upload(self, files: dict[str, tuple[str, bytes]], **fields: str) -> Any:
        headers = {"X-Console-Key": self.key}
        return self.client.post("/api/upload", headers=headers, files=files, data=fields)


def console(given: Desk | None = None, token: str | None = None, out: Path | None = None) -> Any:
    """The application."""
    return app(given, Guard(token), out)


def page(given: Desk | None = None, **options: Any) -> Page:
    """A browser that has loaded the page of a console of its own."""
    return Page(console(given, **options)).load()


def example_files() -> dict[str, tuple[str, bytes]]:
    """The example's tables as a form's files."""
    files = {name: f"{name}.csv" for name in TABLES} | {"settings": "settings.toml"}
    return {name: (file, (EXAMPLES / file).read_bytes()) for name, file in files.items()}
