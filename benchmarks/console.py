"""The console: from a moved slider to the redrawn page, in a browser, beside an empty question."""

from __future__ import annotations

import shutil
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np

from benchmarks.timing import milliseconds, table

_EXAMPLES = Path(__file__).parent.parent / "examples"
_LIST = _EXAMPLES / "transition"

# Until the answer is drawn and the browser has painted it.
_MOVE = """async ([name, position]) => {
  const slider = document.getElementById(name);
  const shown = document.body.dataset.shown;
  const started = performance.now();
  slider.value = String(position);
  slider.dispatchEvent(new Event("input", { bubbles: true }));
  while (document.body.dataset.shown === shown) await new Promise((go) => setTimeout(go, 1));
  await new Promise((go) => requestAnimationFrame(() => setTimeout(go, 0)));
  return performance.now() - started;
}"""

_EMPTY = """async () => {
  const key = document.querySelector("[name=console-key]").content;
  const started = performance.now();
  const headers = { "X-Console-Key": key, "Content-Type": "application/json" };
  await (await fetch("/api/open", { method: "POST", headers, body: "{}" })).json();
  return performance.now() - started;
}"""


def run() -> None:
    from playwright.sync_api import sync_playwright  # noqa: PLC0415

    browser = shutil.which("chromium") or shutil.which("chromium-browser")
    if browser is None:
        print("The console: left out, there is no chromium here\n")
        return
    with sync_playwright() as playwright:
        started = playwright.chromium.launch(executable_path=browser, args=["--no-sandbox"])
        rows = [*_rows(started, "one order", _one(), 40), *_rows(started, "400 names", _list(), 8)]
        started.close()
    header = ("planned", "moved", "median", "95 %", "empty question", "ratio of medians")
    print(table("The console, from a moved slider to the redrawn page:", header, rows))


def _one() -> list[object]:
    given = [_EXAMPLES / "orders.csv", "--market", _EXAMPLES / "market.csv"]
    given += ["--profiles", _EXAMPLES / "profiles.csv", "--readings", _EXAMPLES / "readings.csv"]
    return [*given, "--settings", _EXAMPLES / "settings.toml", "--at", "09:30"]


def _list() -> list[object]:
    given = [_LIST / "orders.csv", "--market", _LIST / "market.csv"]
    given += ["--exposures", _LIST / "exposures.csv"]
    given += ["--factor-covariance", _LIST / "factor_covariance.csv"]
    given += ["--corridors", _LIST / "corridors.csv", "--settings", _LIST / "settings.toml"]
    return [*given, "--at", "2026-03-05T08:00Z"]


def _rows(browser: object, what: str, given: list[object], moves: int) -> Iterator[tuple[str, ...]]:
    with _served(given) as address:
        page = browser.new_page(viewport={"width": 1366, "height": 768})  # type: ignore[attr-defined]
        page.goto(address)
        page.wait_for_selector("body[data-shown]")
        for name, first in (("urgency", 60), ("max_participation", 19)):
            empty, moved = [], []
            for move in range(moves + 3):  # three to warm up
                empty.append(page.evaluate(_EMPTY))
                moved.append(page.evaluate(_MOVE, [name, first + move]))
            base, median = (float(np.median(times[3:])) / 1e3 for times in (empty, moved))
            most = float(np.quantile(moved[3:], 0.95)) / 1e3
            words = (milliseconds(median), milliseconds(most), milliseconds(base))
            yield (what, name, *words, f"{median / base:.0f}")
        page.close()


@contextmanager
def _served(given: list[object]) -> Iterator[str]:
    """The address of a console with these tables, in a process of its own."""
    command = [sys.executable, "-m", "scheduler", "console", *map(str, given)]
    command += ["--date", "2026-03-05", "--port", "0", "--quiet"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as server:
        assert server.stdout is not None
        yield server.stdout.readline().strip()
        server.terminate()
