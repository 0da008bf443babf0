"""The routes: the page, its parts, and what it asks for under /api."""

from __future__ import annotations

import contextlib
import gzip
import json
from collections.abc import Awaitable, Callable
from html import escape
from importlib.resources import files
from pathlib import Path
from string import Template
from typing import Any

from starlette.applications import Starlette
from starlette.concurrency import run_in_threadpool
from starlette.datastructures import UploadFile
from starlette.requests import Request
from starlette.responses import JSONResponse, RedirectResponse, Response
from starlette.routing import Route
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from scheduler.console.answers import Answers, Asked, failure
from scheduler.console.desk import Desk
from scheduler.console.guard import HEADERS, KEY_HEADER, Guard, cookie
from scheduler.console.upload import MOST_BYTES, Sent, check_fields, safe_name, too_large
from scheduler.console.visits import Visit, Visits
from scheduler.errors import HeadraceError, MisuseError
from scheduler.summary import CAUTION
from scheduler.tables.source import Upload

_SCRIPTS = ("page.js", "settings.js", "charts.js", "drawing.js")
_PARTS = {"page.css": "text/css", **dict.fromkeys(_SCRIPTS, "text/javascript")}
_MOST_ASKED = 64_000  # bytes of a question; files have their own bound
_UNUSABLE, _TOO_LARGE, _NO_SESSION, _REFUSED = 422, 413, 401, 403

Answer = Callable[[Visit, dict[str, Any]], Any]


def app(given: Desk | None, guard: Guard, out: Path | None = None) -> ASGIApp:
    """The console as an ASGI application.

    Parameters
    ----------
    given : the desk of the command line's tables, if any. out : where plans may be written.
    """
    rooms = _Rooms(Answers(given, out), guard)
    routes = [
        Route("/", rooms.page),
        *(Route(f"/{name}", _packed(_file(name).encode(), kind)) for name, kind in _PARTS.items()),
        *(Route(f"/api/{name}", rooms.of(answer), methods=["POST"]) for name, answer in rooms.api),
        Route("/api/upload", rooms.upload, methods=["POST"]),
        Route("/api/save", rooms.save, methods=["POST"]),
    ]
    return _Guarded(Starlette(routes=routes), guard)


class _Guarded:
    """Refuses what the guard refuses before anything else looks at it; sets headers on all."""

    def __init__(self, inner: ASGIApp, guard: Guard) -> None:
        self.inner, self.guard = inner, guard

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        async def with_headers(message: Message) -> None:
            if message["type"] == "http.response.start":
                extra = [(name.lower().encode(), text.encode()) for name, text in HEADERS.items()]
                message["headers"] = [*message["headers"], *extra]
            await send(message)

        if scope["type"] != "http":
            if scope["type"] == "lifespan":
                await self.inner(scope, receive, send)
            return
        refusal = self.guard.refusal(Request(scope))
        if refusal is not None:
            response = Response(refusal + "\n", _REFUSED, media_type="text/plain")
            await response(scope, receive, with_headers)
            return
        await self.inner(scope, receive, with_headers)


class _Rooms:
    """The endpoints, each with the session it belongs to."""

    def __init__(self, answers: Answers, guard: Guard) -> None:
        self.answers, self.guard = answers, guard
        self.visits = Visits(answers.given)

    @property
    def api(self) -> tuple[tuple[str, Answer], ...]:
        """Questions with a JSON body, and who answers them."""
        answers = self.answers
        return (
            ("known", lambda visit, _body: answers.known(visit)),
            ("open", lambda visit, body: answers.open(visit, body.get("mark"))),
            ("plan", lambda visit, body: answers.plan(visit, Asked.of(body))),
            (
                "frontier",
                lambda visit, body: answers.frontier(visit, Asked.of(body), body.get("urgencies")),
            ),
            ("write", lambda visit, body: answers.write(visit, Asked.of(body))),
        )

    async def page(self, request: Request) -> Response:
        """The page, with the key of the browser's session; a token goes into a cookie."""
        if "token" in request.query_params:
            there: Response = RedirectResponse("/", 303)
            token = self.guard.token or ""
            there.set_cookie(cookie(request, "token"), token, httponly=True, samesite="lax")
            return there
        visit = self.visits.find(request.cookies.get(cookie(request, "visit")))
        visit = visit or self.visits.begin()
        text = Template(_file("page.html")).substitute(
            key=escape(visit.key), caution=escape(CAUTION)
        )
        answer = Response(text, media_type="text/html")
        answer.set_cookie(cookie(request, "visit"), visit.name, httponly=True, samesite="lax")
        return answer

    def of(self, answer: Answer) -> Callable[[Request], Awaitable[Response]]:
        """An endpoint that reads JSON and answers it, numbered as the question was."""

        async def endpoint(request: Request) -> Response:
            visit = self._visit(request)
            if isinstance(visit, Response):
                return visit
            body = await _question(request)
            if isinstance(body, Response):
                return body
            try:
                found = await run_in_threadpool(answer, visit, body)
            except HeadraceError as error:
                return JSONResponse({"number": body.get("number")} | failure(error), _UNUSABLE)
            return JSONResponse({"number": body.get("number")} | found)

        return endpoint

    async def upload(self, request: Request) -> Response:
        """Files of tables, in place of the session's."""
        visit = self._visit(request)
        if isinstance(visit, Response):
            return visit
        size = _size(request)
        if size is None or size > MOST_BYTES:
            return _failed(MisuseError(too_large(size or 0)), _TOO_LARGE)
        try:
            async with request.form(max_files=12, max_fields=12) as form:
                check_fields(set(form))
                texts = {name: text for name, text in form.items() if isinstance(text, str)}
                sent = {name: f for name, f in form.items() if isinstance(f, UploadFile)}
                uploads = {
                    name: Upload(safe_name(file.filename or ""), await file.read())
                    for name, file in sent.items()
                    if file.filename
                }
            asked = Sent(uploads, texts.get("date", ""), texts.get("at", ""))
            return JSONResponse(await run_in_threadpool(self.answers.upload, visit, asked))
        except HeadraceError as error:
            return _failed(error)

    async def save(self, request: Request) -> Response:
        """The files of a plan as one archive."""
        visit = self._visit(request)
        if isinstance(visit, Response):
            return visit
        body = await _question(request)
        if isinstance(body, Response):
            return body
        try:
            data = await run_in_threadpool(self.answers.save, visit, Asked.of(body))
        except HeadraceError as error:
            return _failed(error)
        named = {"Content-Disposition": 'attachment; filename="plan.zip"'}
        return Response(data, media_type="application/zip", headers=named)

    def _visit(self, request: Request) -> Visit | Response:
        """The session of a request that knows its key, or why not."""
        visit = self.visits.find(request.cookies.get(cookie(request, "visit")))
        if visit is None or not visit.has_key(request.headers.get(KEY_HEADER, "")):
            text = "this page's session is over, or was opened anew elsewhere; reload the page"
            return _failed(MisuseError(text), _NO_SESSION)
        return visit


def _failed(error: HeadraceError, status: int = _UNUSABLE) -> Response:
    return JSONResponse(failure(error), status)


def _size(request: Request) -> int | None:
    """The announced size of a body; None without one, which is refused."""
    with contextlib.suppress(ValueError):
        return int(request.headers.get("content-length", ""))
    return None


async def _question(request: Request) -> dict[str, Any] | Response:
    """The JSON object of a body, or what is wrong with it."""
    size = _size(request)
    if size is None or size > _MOST_ASKED:
        return _failed(MisuseError(f"ask in up to {_MOST_ASKED:,} bytes"), _TOO_LARGE)
    try:
        body = json.loads(await request.body())
    except (ValueError, RecursionError):
        return _failed(MisuseError("ask in JSON"))
    return body if isinstance(body, dict) else _failed(MisuseError("ask with a JSON object"))


def _packed(content: bytes, kind: str) -> Callable[[Request], Response]:
    """An endpoint for a part of the page, compressed once."""
    data = gzip.compress(content, 6, mtime=0)
    return lambda _request: Response(data, media_type=kind, headers={"Content-Encoding": "gzip"})


def _file(name: str) -> str:
    return (files("scheduler.console") / name).read_text(encoding="utf-8")
