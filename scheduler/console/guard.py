"""Who may speak to the console.

Every page open in a browser can send requests to this machine, and a name that its owner points at
127.0.0.1 makes them look local. So the Host header must be a loopback name; whatever reads or
changes a session carries that session's key in a header, which no foreign page knows or may send;
and where other machines can reach the console, every request needs its token.
"""

from __future__ import annotations

import secrets
from dataclasses import dataclass
from typing import TYPE_CHECKING
from urllib.parse import urlsplit

from scheduler.errors import MisuseError

if TYPE_CHECKING:
    from starlette.requests import Request

LOOPBACK = frozenset({"127.0.0.1", "localhost", "::1"})
KEY_HEADER = "x-console-key"
_SHORTEST = 16

HEADERS = {
    "Content-Security-Policy": "default-src 'none'; script-src 'self'; connect-src 'self'; "
    "style-src 'self'; img-src 'self' data: blob:; base-uri 'none'; "
    "form-action 'none'; frame-ancestors 'none'",
    "X-Content-Type-Options": "nosniff",
    "Referrer-Policy": "no-referrer",
    "Cache-Control": "no-store",
}
"""Of every answer: nothing from elsewhere runs on the page, and no other page holds it."""


@dataclass(frozen=True)
class Guard:
    """token : what every request must bring, None where only this machine can reach the console."""

    token: str | None = None

    @classmethod
    def of(cls, host: str, token: str | None) -> Guard:
        """The guard of a console on some address: beyond loopback with a token, made if need be.

        Raises:
            MisuseError: a token that could be guessed.
        """
        if token is not None and len(token) < _SHORTEST:
            raise MisuseError(
                f"--token has {len(token)} characters, which can be guessed; give {_SHORTEST} or "
                "more, or leave it out to have one made"
            )
        if token is None and host not in LOOPBACK:
            token = secrets.token_urlsafe(24)
        return cls(token)

    def refusal(self, request: Request) -> str | None:
        """Why a request is refused, if it is."""
        host = host_of(request.headers.get("host", ""))
        if self.token is None and host not in LOOPBACK:
            return (
                f"This console answers to 127.0.0.1 and localhost only, not to {host or 'no name'}."
                " Open the address that was printed where it was started."
            )
        if self.token is not None and not self._knows(request):
            return (
                "This console needs its token: open the whole address that was printed where it "
                "was started, with ?token=... at its end."
            )
        return None

    def _knows(self, request: Request) -> bool:
        assert self.token is not None
        given = (request.query_params.get("token"), request.cookies.get(cookie(request, "token")))
        wanted = self.token.encode()
        return any(secrets.compare_digest((text or "").encode(), wanted) for text in given)


def cookie(request: Request, what: str) -> str:
    """The name of a cookie, with the port: a browser gives one host's cookies to all its ports."""
    return f"console-{what}-{request.url.port or 80}"


def host_of(header: str) -> str:
    """The name in a Host header, without its port; empty if there is none."""
    try:
        return urlsplit(f"//{header}").hostname or ""
    except ValueError:
        return ""
