"""Serve the console: a socket of its own, so that a port that is taken is said before anything."""

from __future__ import annotations

import contextlib
import socket
from collections.abc import Callable
from importlib import import_module
from pathlib import Path

from scheduler.console.desk import Desk
from scheduler.console.guard import Guard
from scheduler.errors import MissingExtraError, MisuseError

_EVERYWHERE = ("0.0.0.0", "::")
_NEEDED = ("starlette", "uvicorn", "multipart", "plotly")


def need_server() -> None:
    """Check that the libraries of the extra are there.

    Raises:
        MissingExtraError: naming those that are not.
    """
    missing = []
    for name in _NEEDED:
        try:
            import_module("python_multipart" if name == "multipart" else name)
        except ModuleNotFoundError:
            missing.append(name)
    if missing:
        raise MissingExtraError(
            f"the console needs {', '.join(missing)}; pip install 'headrace[console]'"
        )


def serve(
    given: Desk | None,
    *,
    host: str,
    port: int,
    guard: Guard,
    out: Path | None,
    ready: Callable[[str], None],
) -> None:
    """Serve until interrupted; `ready` is told the address to open.

    Raises:
        MissingExtraError: a library is not installed. MisuseError: the address cannot be had.
    """
    need_server()
    import uvicorn  # noqa: PLC0415

    from scheduler.console.app import app  # noqa: PLC0415

    listening = listen(host, port)
    name = socket.gethostname() if host in _EVERYWHERE else f"[{host}]" if ":" in host else host
    address = f"http://{name}:{listening.getsockname()[1]}/"
    application = app(given, guard, out)
    ready(address if guard.token is None else f"{address}?token={guard.token}")
    config = uvicorn.Config(application, log_level="warning", proxy_headers=False, ws="none")
    with contextlib.suppress(KeyboardInterrupt):  # which is how one ends it
        uvicorn.Server(config).run(sockets=[listening])


def listen(host: str, port: int) -> socket.socket:
    """A socket that listens on an address; port 0 is any that is free.

    Raises:
        MisuseError: the address is taken, or not this machine's.
    """
    try:
        family, kind, protocol, _, address = socket.getaddrinfo(
            host, port, type=socket.SOCK_STREAM, proto=socket.IPPROTO_TCP
        )[0]
        # With the protocol named, the event loop sends every answer at once; without it, small
        # ones wait 40 ms for an acknowledgement.
        listening = socket.socket(family, kind, protocol)
    except OSError as error:
        raise _cannot_listen(host, port, error) from None
    try:
        listening.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        listening.bind(address)
    except OSError as error:
        listening.close()
        raise _cannot_listen(host, port, error) from None
    return listening


def _cannot_listen(host: str, port: int, error: OSError) -> MisuseError:
    return MisuseError(
        f"cannot listen on {host}, port {port} ({error.strerror or error}); give another with "
        "--port, or 0 for any that is free"
    )
