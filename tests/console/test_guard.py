"""Who is answered: loopback names, a session's own page, and nobody without the token."""

from __future__ import annotations

import re
import socket
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from scheduler.cli import main
from scheduler.console.guard import HEADERS, Guard, host_of
from scheduler.console.serve import listen
from scheduler.console.visits import MOST_VISITS, Visits
from scheduler.errors import MisuseError
from tests.console.page import HOME, Page, console, page

TOKEN = "0123456789abcdef"


@pytest.mark.parametrize(
    "host", ["evil.example", "evil.example:8750", "127.0.0.1.evil.example", "", "0.0.0.0", "[::2]"]
)
@pytest.mark.parametrize("path", ["/", "/page.js", "/api/known"])
def test_foreign_names_are_refused(host: str, path: str) -> None:
    """A name that is pointed at this machine from outside is not answered, whatever it asks."""
    answer = Page(console()).client.get(path, headers={"Host": host})
    assert answer.status_code == 403
    assert "127.0.0.1 and localhost only" in answer.text
    assert "set-cookie" not in answer.headers


@pytest.mark.parametrize("host", ["127.0.0.1:8750", "localhost:9", "LOCALHOST", "[::1]:8750"])
def test_loopback_names_are_answered(host: str) -> None:
    assert Page(console()).client.get("/", headers={"Host": host}).status_code == 200


def test_a_host_header_beyond_reason_has_no_name() -> None:
    assert host_of("[::1") == ""
    assert host_of("a:b:c@localhost") == "localhost"  # what follows @ is the name


@pytest.mark.parametrize("name", ["known", "open", "plan", "frontier", "save", "write", "upload"])
def test_nothing_is_told_or_done_without_the_key(name: str) -> None:
    """A foreign page can make a browser send its cookie, but knows no key."""
    browser = page().example()
    browser.key = "guessed"
    assert browser.post(name).status_code == 401
    no_header = browser.client.post(f"/api/{name}", json={})
    assert no_header.status_code == 401
    assert "reload the page" in no_header.json()["message"]


def test_questions_cannot_be_put_into_an_address() -> None:
    """GET asks nothing of a session."""
    browser = page().example()
    assert browser.client.get("/api/plan").status_code == 405


def test_one_sessions_key_is_not_anothers() -> None:
    server = console()
    one, two = Page(server).load(), Page(server).load()
    one.key = two.key
    assert one.post("known").status_code == 401
    assert two.post("known").status_code == 200


def test_every_answer_says_what_may_run_on_it() -> None:
    browser = page()
    for path in ("/", "/page.js", "/nowhere"):
        answer = browser.client.get(path)
        for name, text in HEADERS.items():
            assert answer.headers[name] == text
    cookie = Page(console()).client.get("/").headers["set-cookie"]
    assert "HttpOnly" in cookie
    assert "SameSite=lax" in cookie


def test_the_page_asks_for_nothing_from_elsewhere() -> None:
    """Every script, style and picture is of this console."""
    text = page().client.get("/").text
    found = re.findall(r'(?:src|href)="([^"]*)"', text)
    assert found
    assert all(link.startswith(("/", "data:")) and link[:2] != "//" for link in found)
    for link in found:
        if link.startswith("/"):
            assert page().client.get(link).status_code == 200, link


def test_the_caution_is_always_on_the_page() -> None:
    from scheduler.summary import CAUTION

    assert CAUTION in page().client.get("/").text


@pytest.mark.parametrize("path", ["/", "/page.css", "/?token=wrong", "/api/known"])
def test_beyond_this_machine_the_token_is_needed(path: str) -> None:
    client = Page(console(token=TOKEN), "http://10.1.2.3:8750").client
    answer = client.get(path)
    assert answer.status_code == 403
    assert "token" in answer.text
    assert TOKEN not in answer.text


def test_the_token_is_taken_from_the_address_once() -> None:
    """It goes into a cookie, and out of the address."""
    browser = Page(console(token=TOKEN), "http://10.1.2.3:8750")
    first = browser.client.get(f"/?token={TOKEN}", follow_redirects=False)
    assert (first.status_code, first.headers["location"]) == (303, "/")
    assert "HttpOnly" in first.headers["set-cookie"]
    assert browser.load().post("known").status_code == 200


def test_a_token_is_made_where_others_can_reach_the_console() -> None:
    assert Guard.of("127.0.0.1", None).token is None
    assert Guard.of("::1", None).token is None
    made = {Guard.of("0.0.0.0", None).token for _ in range(2)}
    assert len(made) == 2
    assert all(token is not None and len(token) >= 32 for token in made)
    assert Guard.of("127.0.0.1", TOKEN).token == TOKEN
    with pytest.raises(MisuseError, match="4 characters, which can be guessed"):
        Guard.of("0.0.0.0", "easy")


def test_sessions_are_counted() -> None:
    """The one unused for longest gives way."""
    visits = Visits(None)
    first = visits.begin()
    second = visits.begin()
    for _ in range(MOST_VISITS - 2):
        visits.begin()
    assert visits.find(first.name) is first  # used: now the second is the oldest
    visits.begin()
    assert visits.find(second.name) is None
    assert visits.find(first.name) is first
    assert visits.find(None) is None


def test_a_port_that_is_taken_is_said() -> None:
    with socket.socket() as held:
        held.bind(("127.0.0.1", 0))
        held.listen()
        port = held.getsockname()[1]
        with pytest.raises(MisuseError, match=f"port {port} .*--port"):
            listen("127.0.0.1", port)
    result = CliRunner().invoke(main, ["console", "--host", "203.0.113.9", "--port", "0"])
    assert result.exit_code == 2
    assert "cannot listen on 203.0.113.9" in result.output


def test_broken_tables_of_the_command_line_end_it(tmp_path: Path) -> None:
    """With all their problems, before anything listens."""
    bad = tmp_path / "orders.csv"
    bad.write_text("order_id,symbol,side,quantity\nA,OAK,buy,-5\nA,OAK,hold,7\n")
    market = tmp_path / "market.csv"
    market.write_text("symbol,price,adv,daily_vol\nOAK,50,1000000,0.02\n")
    result = CliRunner().invoke(main, ["console", str(bad), "--market", str(market)])
    assert result.exit_code == 2
    assert "row 2, column quantity" in result.output
    assert "row 3, column side" in result.output


def test_a_missing_library_is_named(monkeypatch: pytest.MonkeyPatch) -> None:
    import sys

    monkeypatch.setitem(sys.modules, "uvicorn", None)
    result = CliRunner().invoke(main, ["console"])
    assert result.exit_code == 2
    assert "needs uvicorn; pip install 'headrace[console]'" in result.output


def test_a_session_that_is_over_is_told_to_reload() -> None:
    server: Any = console()
    browser = Page(server).load()
    browser.client.cookies.clear()
    answer = browser.post("known")
    assert answer.status_code == 401
    assert HOME not in answer.text
