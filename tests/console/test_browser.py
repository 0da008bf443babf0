"""The page in a real browser (Chromium, driven by Playwright) against a console of its own."""

from __future__ import annotations

import json
import os
import re
import shutil
import signal
import subprocess
import sys
import zipfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import pandas as pd
import pytest
from playwright.sync_api import Browser, Page, expect, sync_playwright

from scheduler import plan, read_settings
from scheduler.console.example import AT, DATE
from tests.cli.running import EXAMPLES
from tests.console.page import TABLES
from tests.console.test_upload import MARKET, ORDERS, problems_of_check

pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """The address of a console in a process of its own."""
    folder = tmp_path_factory.mktemp("console")
    command = [sys.executable, "-m", "scheduler", "console", "--port", "0", "--out", folder / "out"]
    environment = os.environ | {"OPENBLAS_NUM_THREADS": "1"}
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True, env=environment) as server:
        assert server.stdout is not None
        yield server.stdout.readline().strip()
        server.send_signal(signal.SIGINT)
        assert server.wait(timeout=20) == 0  # Ctrl-C ends it well


@pytest.fixture(scope="module")
def browser() -> Iterator[Browser]:
    found = shutil.which("chromium") or shutil.which("chromium-browser")
    assert found is not None, "these tests need chromium"
    with sync_playwright() as playwright:
        started = playwright.chromium.launch(executable_path=found, args=["--no-sandbox"])
        yield started
        started.close()


@contextmanager
def opened(browser: Browser, address: str) -> Iterator[Page]:
    """A page in a session of its own; whatever it logs or asks of others is an error."""
    context = browser.new_context(viewport={"width": 1366, "height": 768}, accept_downloads=True)
    page = context.new_page()
    log: list[str] = []
    page.on("pageerror", lambda error: log.append(str(error)))
    page.on("console", lambda m: None if "422" in m.text else log.append(m.text))
    page.on("request", lambda r: log.append(r.url) if _foreign(r.url, address) else None)
    page.goto(address)
    yield page
    context.close()
    assert log == []


def _foreign(url: str, address: str) -> bool:
    there = urlsplit(url)
    return there.scheme not in ("data", "blob") and there.netloc != urlsplit(address).netloc


@pytest.fixture
def page(browser: Browser, home: str) -> Iterator[Page]:
    """A page that shows the example."""
    with opened(browser, home) as page:
        page.get_by_role("button", name="Open the example").click()
        settled(page)
        yield page


def settled(page: Page, address: str = "", without: str = "") -> None:
    """Wait until the page is at rest, and its address holds some text, or no longer another."""
    expect(page.locator("#answer")).to_have_attribute("aria-busy", "false")
    if address:
        expect(page).to_have_url(re.compile(address))
    if without:
        expect(page).not_to_have_url(re.compile(without))


def shown(page: Page, row: str = "this plan") -> list[float]:
    """The figures of a row of the comparison, once the page is at rest."""
    settled(page)
    cells = page.locator("#compared tbody tr", has_text=row).locator("td").all_inner_texts()
    return [float(text.replace(",", "").replace("\u2212", "-")) for text in cells]


def expected(order: str, **values: Any) -> list[float]:
    """Cost and risk in bps and money, and what the plan makes least, from `plan` itself."""
    settings = read_settings(EXAMPLES / "settings.toml").with_values("plan", **values)
    given = {name: EXAMPLES / f"{name}.csv" for name in TABLES[1:]}
    orders = pd.read_csv(EXAMPLES / "orders.csv", dtype=str, keep_default_na=False)
    orders = orders[orders["order_id"] == order]
    result = plan(orders, given.pop("market"), settings=settings, date=DATE, at=AT, **given)
    row = result.summary["orders"][order]
    least = 1e4 * row["objective"] / row["notional"]
    return [
        round(row["expected_cost_bps"], 2),
        round(row["expected_cost"]),
        round(row["cost_std_bps"], 2),
        round(row["cost_std"]),
        round(least, 2),
    ]


def near(values: list[float]) -> Any:
    return pytest.approx(values, abs=0.011, rel=1e-4)


def test_the_example_is_shown_as_plan_has_it(page: Page) -> None:
    """Figures, charts, the caution, and nothing to scroll sideways."""
    assert shown(page) == near(expected("HB-1"))
    for name in ("slices", "left", "frontier"):
        expect(page.locator(f"[data-chart={name}] svg path").first).to_be_attached()
    expect(page.get_by_text("Estimates, not advice.")).to_be_in_viewport()
    width = page.evaluate("document.documentElement.scrollWidth")
    assert width <= 1366
    assert page.locator("#pin").bounding_box()["y"] < 768 - 60  # all settings without scrolling


def test_moving_a_slider_moves_the_numbers(page: Page) -> None:
    """By its position, by keys, and exactly by number; each is what `plan` gives for the value."""
    slider = page.get_by_role("slider", name="Urgency U")
    before = shown(page)
    slider.fill("140")
    after = shown(page)
    urgency = float(page.get_by_label("Urgency U, exactly").input_value())
    assert after != before
    assert after == near(expected("HB-1", urgency=urgency))
    slider.press("ArrowRight")
    settled(page, without="urgency={urgency:g}&")
    moved = float(page.get_by_label("Urgency U, exactly").input_value())
    assert moved > urgency
    assert shown(page) == near(expected("HB-1", urgency=moved))
    page.get_by_label("Urgency U, exactly").fill("0.35")
    page.get_by_label("Urgency U, exactly").press("Enter")
    settled(page, address="urgency=0.35")
    assert shown(page) == near(expected("HB-1", urgency=0.35))
    page.get_by_role("button", name="Urgency U: as given").click()
    settled(page, without="urgency")
    assert shown(page) == before


def test_the_latest_of_many_moves_wins(page: Page) -> None:
    """Thirty moves faster than answers come; one question at a time, the last one's answer."""
    page.evaluate(
        """() => { window.most = 0; let open = 0; const plain = window.fetch;
        window.fetch = async (...all) => { if (!all[0].endsWith('plan')) return plain(...all);
        open += 1; window.most = Math.max(window.most, open);
        try { return await plain(...all); } finally { open -= 1; } };
        const slider = document.getElementById('urgency');
        for (let p = 60; p < 90; p += 1) { slider.value = p;
        slider.dispatchEvent(new Event('input', { bubbles: true })); } }"""
    )
    settled(page, address="urgency")
    urgency = float(page.get_by_label("Urgency U, exactly").input_value())
    assert page.get_by_role("slider", name="Urgency U").input_value() == "89"
    assert shown(page) == near(expected("HB-1", urgency=urgency))
    assert page.evaluate("window.most") == 1


def test_times_and_worlds_move_the_plan(page: Page) -> None:
    before = shown(page)
    page.get_by_role("slider", name="Not before").fill("4")
    settled(page, address="start=")
    expect(page.locator("#headline")).to_contain_text("at 10:30")
    later = shown(page)
    page.get_by_label("Impact law", exact=True).select_option("rate-power")
    settled(page, address="impact_law=")
    assert len({tuple(before), tuple(later), tuple(shown(page))}) == 3
    page.get_by_role("button", name="All as given").click()
    settled(page, without="start=")
    assert shown(page) == before


def test_a_pinned_plan_stays_beside_the_others(page: Page) -> None:
    before = shown(page)
    page.get_by_role("button", name="Pin this plan").click()
    page.get_by_role("slider", name="Most of the volume").fill("11")
    settled(page, address="max_participation=0.12")
    assert shown(page, "pinned")[:4] == before[:4]
    assert shown(page) != before
    expect(page.locator("#differences li").first).to_contain_text("Pinned: cost")
    page.get_by_role("button", name="Back to it").click()
    settled(page, without="&max_participation")
    assert shown(page) == before
    page.get_by_role("button", name="Unpin").click()
    expect(page.locator("#compared")).not_to_contain_text("pinned")


def test_the_address_opens_the_same_view_for_a_colleague(
    page: Page, browser: Browser, home: str
) -> None:
    """Another session of the same console: order, settings and what is pinned."""
    page.get_by_label("Order", exact=True).select_option("HB-4")
    settled(page, address="order=HB-4")
    page.get_by_role("button", name="Pin this plan").click()
    page.get_by_role("slider", name="Volume of others").fill("60")
    settled(page, address="&volume=")
    figures, pinned = shown(page), shown(page, "pinned")
    with opened(browser, page.url) as other:
        settled(other)
        expect(other.get_by_label("Order", exact=True)).to_have_value("HB-4")
        expect(other.locator("#compared")).to_contain_text("pinned")
        assert shown(other) == figures
        assert shown(other, "pinned") == pinned


def test_the_whole_list_and_back_to_one_order(page: Page) -> None:
    page.get_by_label("Order", exact=True).select_option(label="all 5 orders, each alone")
    settled(page, address="order=all")
    expect(page.locator("[data-chart=frontier]")).to_contain_text("without a risk table")
    expect(page.locator("#slices tbody tr")).to_have_count(5)
    page.get_by_role("button", name="HB-2").click()
    settled(page, address="order=HB-2")
    assert shown(page) == near(expected("HB-2"))


def test_saving_gives_the_plans_files(page: Page, tmp_path: Path) -> None:
    with page.expect_download() as waiting:
        page.get_by_role("button", name="Save files").click()
    assert waiting.value.suggested_filename == "plan-2026-03-05-HB-1.zip"
    waiting.value.save_as(tmp_path / "plan.zip")
    with zipfile.ZipFile(tmp_path / "plan.zip") as packed:
        assert set(packed.namelist()) == {"schedule.csv", "summary.json", "report.html"}
        cost = json.loads(packed.read("summary.json"))["orders"]["HB-1"]["expected_cost_bps"]
    assert round(cost, 2) == shown(page)[0]
    page.get_by_role("button", name=re.compile("^Write to")).click()
    expect(page.locator("#status")).to_contain_text("written to")


def test_what_cannot_be_planned_is_said_and_the_page_goes_on(page: Page) -> None:
    before = shown(page)
    page.get_by_role("slider", name="Most of the volume").fill("0")
    trouble = page.locator("#trouble")
    expect(trouble).to_contain_text("at most 44,848 of 180,000 shares")
    expect(page.locator("#answer")).to_have_class("old")
    page.get_by_role("button", name="All as given").click()
    expect(trouble).to_be_hidden()
    assert shown(page) == before


def test_a_broken_table_is_told_as_check_tells_it(page: Page, tmp_path: Path) -> None:
    """Every problem with file, row, column, value, rule and remedy; the plan shown stays."""
    before = shown(page)
    files = {"orders": ("o.csv", ORDERS), "market": ("m.csv", MARKET)}
    problems = problems_of_check(files, tmp_path)
    page.get_by_role("button", name="Tables").click()
    for name, (file, _) in files.items():
        page.locator(f"#file-{name}").set_input_files(tmp_path / file)
    page.get_by_role("button", name="Use these files").click()
    rows = page.locator("#upload-trouble tbody tr")
    expect(rows).to_have_count(len(problems))
    told = [row.locator("th, td").all_inner_texts() for row in rows.all()]
    assert sorted(told) == sorted(
        ["" if value is None else str(value) for value in problem.values()] for problem in problems
    )
    page.get_by_role("button", name="Close").click()
    assert shown(page) == before


def test_two_sessions_at_once_have_their_own_tables(
    page: Page, browser: Browser, home: str, tmp_path: Path
) -> None:
    """And what a table holds is text on the page, whatever it looks like."""
    strange = "<img src=x onerror=alert(1)>"
    text = (EXAMPLES / "orders.csv").read_text().replace("HB-1", strange)
    (tmp_path / "orders.csv").write_text(text)
    with opened(browser, home) as other:
        other.locator("#file-orders").set_input_files(tmp_path / "orders.csv")
        for name in ("market", "profiles"):
            other.locator(f"#file-{name}").set_input_files(EXAMPLES / f"{name}.csv")
        other.locator("[name=date]").fill(DATE)
        other.locator("[name=at]").fill("09:30")
        other.get_by_role("button", name="Use these files").click()
        settled(other)
        assert other.locator("#order option").nth(1).inner_text().startswith(strange)
        assert other.locator("img").count() == 0
        assert shown(other) != shown(page)
        assert page.locator("#order option").nth(1).inner_text().startswith("HB-1")


def test_everything_is_reached_by_keys_and_seen_to_be(page: Page) -> None:
    """Tab goes from the order through every setting; what has the focus is outlined."""
    page.get_by_label("Order", exact=True).focus()
    reached = []
    for _ in range(24):
        page.keyboard.press("Tab")
        name, outline = page.evaluate(
            "[document.activeElement.id, getComputedStyle(document.activeElement).outlineWidth]"
        )
        reached.append(name)
        assert outline == "3px", name
        if name == "pin":
            break
    sliders = ["urgency", "max_participation", "start", "end", "volume", "volatility", "reading"]
    assert [name for name in reached if name in sliders] == sliders
    assert reached[-2:] == ["impact_law", "pin"]
    for name in sliders:
        assert page.locator(f"#{name}").get_attribute("aria-valuetext")
