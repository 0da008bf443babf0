"""Entries as a chain: what is hashed, and how."""

from __future__ import annotations

import hashlib
import json
from typing import Any, NamedTuple

SCHEMA = 1
GENESIS = "0" * 64
"""What the first entry is chained to."""


class Entry(NamedTuple):
    """One row of the journal.

    hash : over everything else. previous : the hash of the entry before, GENESIS of the first.
    made : UTC, ISO 8601. brief : what a listing shows, as JSON. manifest : the hash of the content
    that names inputs, outputs, settings and versions.
    """

    number: int
    hash: str
    previous: str
    made: str
    kind: str
    brief: str
    manifest: str


def chained(
    number: int, previous: str, *, made: str, kind: str, brief: str, manifest: str
) -> Entry:
    """An entry with the hash that belongs to it."""
    hashed = digest(canonical([SCHEMA, number, previous, made, kind, brief, manifest]))
    return Entry(number, hashed, previous, made, kind, brief, manifest)


def holds(entry: Entry) -> bool:
    """Whether an entry's hash is that of what it says."""
    parts = {name: value for name, value in entry._asdict().items() if name != "hash"}
    try:
        return chained(**parts) == entry
    except (TypeError, ValueError):  # a cell of another type than was written
        return False


def canonical(data: Any) -> bytes:
    """JSON in one way only: sorted keys, no spaces, ASCII, floats by their shortest digits."""
    return json.dumps(data, sort_keys=True, separators=(",", ":"), allow_nan=False).encode()


def digest(data: bytes) -> str:
    """SHA-256 in hexadecimal."""
    return hashlib.sha256(data).hexdigest()
