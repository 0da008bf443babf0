"""The page in a real browser (Chromium), opened from a file."""

from __future__ import annotations

import re
import shutil
import subprocess
from pathlib import Path

import pytest

from scheduler.report.page import page
from tests.report.plans import nasty_names, three_orders

pytestmark = pytest.mark.slow


def opened(html: str, folder: Path) -> tuple[str, str]:
    """The document as the browser has it once scripts have run, and the browser's log."""
    browser = shutil.which("chromium") or shutil.which("chromium-browser")
    assert browser is not None, "this test needs chromium"
    file = folder / "report.html"
    file.write_text(html, encoding="utf-8")
    flags = (
        "--headless --no-sandbox --disable-gpu --disable-quic --no-first-run "
        "--disable-background-networking --disable-component-update --disable-sync "
        "--enable-logging=stderr --v=0 --virtual-time-budget=10000 --window-size=1366,768"
    )
    run = subprocess.run(
        [
            browser,
            *flags.split(),
            f"--user-data-dir={folder / 'profile'}",
            "--dump-dom",
            file.as_uri(),
        ],
        capture_output=True,
        text=True,
        timeout=120,
        check=True,
    )
    return run.stdout, run.stderr


def body_of(document: str) -> str:
    """The document without scripts and styles."""
    return re.sub(r"<(script|style)\b.*?</\1>", "", document, flags=re.DOTALL)


def test_six_charts_are_drawn_without_complaint(tmp_path):
    """Every chart box holds a drawing, the slices a table, and the console is silent."""
    document, log = opened(page(three_orders()), tmp_path)
    body = body_of(document)
    boxes = body.split('data-chart="')[1:]
    assert len(boxes) == 6
    assert all('class="main-svg"' in box for box in boxes)
    assert re.search(r'<p id="trouble"[^>]* hidden', body)
    assert "Thu 5 Mar 09:30–09:45" in body.split('id="slices"')[1]
    assert "CONSOLE" not in log


def test_another_order_can_be_picked_and_the_table_sorted(tmp_path):
    """A press on a name shows that order; on a heading sorts by it."""
    presses = (
        "<script>setTimeout(() => {"
        "document.querySelectorAll('.pick')[2].click();"
        "document.querySelectorAll('.orders thead button')[3].click();"
        "}, 3000)</script></body>"
    )
    document, log = opened(page(three_orders()).replace("</body>", presses), tmp_path)
    body = body_of(document)
    assert '<h2 id="title">o-3: buy 650,000 LOCK</h2>' in body
    assert re.findall(r'<tr data-order="(\d)"', body) == ["2", "0", "1"]  # 650,000 180,000 42,000
    assert "Fri 6 Mar 09:30 auction" in body.split('id="slices"')[1]
    assert "50 %: " in body  # labels outlive a change of order
    assert "CONSOLE" not in log


def test_markup_in_names_does_not_run(tmp_path):
    document, log = opened(page(nasty_names()), tmp_path)
    assert "<title>Plan 2026-03-05</title>" in document
    assert "<img" not in body_of(document)
    assert "CONSOLE" not in log
