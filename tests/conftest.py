"""Fixtures shared by all tests."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest


@pytest.fixture
def put(tmp_path: Path) -> Callable[[str, str | bytes], str]:
    """Write a file into the test's own directory; gives its path."""

    def write(name: str, content: str | bytes) -> str:
        path = tmp_path / name
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return str(path)

    return write
