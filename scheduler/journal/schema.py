"""Two tables, in the words of each database; neither lets a row be changed or taken out."""

from __future__ import annotations

TABLES = ("headrace_entries", "headrace_contents")
_REFUSAL = "the journal is append-only"


def _tables(number: str, data: str) -> tuple[str, ...]:
    return (
        f"""CREATE TABLE IF NOT EXISTS headrace_contents (
            sha256 TEXT PRIMARY KEY NOT NULL,
            size {number} NOT NULL,
            packed_sha256 TEXT NOT NULL,
            packed {data} NOT NULL
        )""",
        f"""CREATE TABLE IF NOT EXISTS headrace_entries (
            number {number} PRIMARY KEY NOT NULL,
            hash TEXT NOT NULL UNIQUE,
            previous TEXT NOT NULL UNIQUE,
            made TEXT NOT NULL,
            kind TEXT NOT NULL,
            brief TEXT NOT NULL,
            manifest TEXT NOT NULL
        )""",
    )


SQLITE = (
    *_tables("INTEGER", "BLOB"),
    *(
        f"""CREATE TRIGGER IF NOT EXISTS {table}_{action.lower()} BEFORE {action} ON {table}
            BEGIN SELECT RAISE(ABORT, '{_REFUSAL}'); END"""
        for table in TABLES
        for action in ("UPDATE", "DELETE")
    ),
)

POSTGRESQL = (
    *_tables("BIGINT", "BYTEA"),
    f"""CREATE OR REPLACE FUNCTION headrace_append_only() RETURNS trigger LANGUAGE plpgsql
        AS $$ BEGIN RAISE EXCEPTION '{_REFUSAL}'; END $$""",
    *(
        f"""CREATE OR REPLACE TRIGGER {table}_kept BEFORE UPDATE OR DELETE OR TRUNCATE ON {table}
            FOR EACH STATEMENT EXECUTE FUNCTION headrace_append_only()"""
        for table in TABLES
    ),
)
