"""A new, empty journal for each test: in a file and, where there is a server, in PostgreSQL."""

from __future__ import annotations

import os
import secrets
from collections.abc import Iterator
from pathlib import Path

import pytest

SERVER = "HEADRACE_TEST_POSTGRESQL"
KINDS = ["sqlite", pytest.param("postgresql", marks=pytest.mark.postgresql)]


@pytest.fixture(params=KINDS)
def place(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[str]:
    """Where the test keeps its journal."""
    if request.param == "sqlite":
        yield str(tmp_path / "journal.db")
        return
    server = os.environ.get(SERVER)
    if not server:
        pytest.skip(f"no PostgreSQL: set {SERVER} to a server's URL")
    psycopg = pytest.importorskip("psycopg")
    schema = f"t_{secrets.token_hex(8)}"
    with psycopg.connect(server, autocommit=True) as connection:
        connection.execute(f"CREATE SCHEMA {schema}")
        yield f"{server}{'&' if '?' in server else '?'}options=-csearch_path%3D{schema}"
        connection.execute(f"DROP SCHEMA {schema} CASCADE")
