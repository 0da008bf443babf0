"""The sessions of the page: each browser has its own tables, and there is an end to how many."""

from __future__ import annotations

import secrets
import threading
from collections import OrderedDict
from dataclasses import dataclass, field

from scheduler.console.desk import Desk

MOST_VISITS = 32


@dataclass
class Visit:
    """One browser's session: its name in the cookie, the key of its page, and its desk."""

    desk: Desk | None
    name: str = field(default_factory=lambda: secrets.token_urlsafe(24))
    key: str = field(default_factory=lambda: secrets.token_urlsafe(24))

    def has_key(self, key: str) -> bool:
        """Whether a request knows the key of this session's page."""
        return secrets.compare_digest(key.encode(), self.key.encode())


class Visits:
    """All sessions; beyond `MOST_VISITS` the one unused for longest goes."""

    def __init__(self, first: Desk | None) -> None:
        self.first = first
        self._known: OrderedDict[str, Visit] = OrderedDict()
        self._lock = threading.Lock()

    def begin(self) -> Visit:
        """A new session with the tables that the console was started with."""
        visit = Visit(self.first)
        with self._lock:
            self._known[visit.name] = visit
            while len(self._known) > MOST_VISITS:
                self._known.popitem(last=False)
        return visit

    def find(self, name: str | None) -> Visit | None:
        """The session of a cookie, if it is still there."""
        with self._lock:
            visit = self._known.get(name or "")
            if visit is not None:
                self._known.move_to_end(visit.name)
            return visit
