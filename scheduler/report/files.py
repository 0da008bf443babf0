"""Files that pages are made of, and data packed into a page."""

from __future__ import annotations

import base64
import gzip
from importlib.resources import files


def page_file(name: str) -> str:
    """The text of a template, style sheet or script."""
    return (files("scheduler.report") / name).read_text(encoding="utf-8")


def packed(text: str) -> str:
    """Text as base64 of its gzip, for the page to unpack; the same text gives the same bytes."""
    return base64.b64encode(gzip.compress(text.encode(), 6, mtime=0)).decode()
