"""Fixtures shared by all tests."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

import pytest

# as the command line does: many small factorisations, for which threads cost more than they give
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
# no test writes to the user's own journal, nor does a process that one starts
os.environ["HEADRACE_JOURNAL"] = "off"


@pytest.fixture
def put(tmp_path: Path) -> Callable[[str, str | bytes], str]:
    """Write a file into the test's own directory; gives its path."""

    def write(name: str, content: str | bytes) -> str:
        path = tmp_path / name
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return str(path)

    return write
