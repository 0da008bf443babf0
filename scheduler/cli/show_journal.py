"""A journal at the terminal."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

from scheduler.cli.show import aligned

if TYPE_CHECKING:
    from scheduler.journal.chain import Entry
    from scheduler.journal.place import Place
    from scheduler.journal.reproduce import Reproduction
    from scheduler.journal.store import Size

_SHOWN = 20
_HASH = 12  # digits of a hash that are enough to tell entries apart


def listing(entries: Sequence[Entry]) -> str:
    """One line an entry; columns of one width each, so that a hundred thousand take no second."""
    if not entries:
        return "no entries"
    header = _line("entry", "made (UTC)", "kind", "hash", "session")
    header += _more("orders", "notional", "cost bps", "optimum")
    return "\n".join([header, *map(_row, entries)])


def _line(number: object, made: str, kind: str, hashed: str, session: str) -> str:
    return f"{number:>7}  {made:<19}  {kind:<8}  {hashed:<12}  {session:<10}"


def _more(orders: object, notional: str, cost: str, optimum: str) -> str:
    return f"  {orders:>6}  {notional:>19}  {cost:>8}  {optimum}".rstrip()


def _row(entry: Entry) -> str:
    brief = json.loads(entry.brief).get
    notional, cost = brief("notional"), brief("cost_bps")
    money = "" if notional is None else f"{notional:,.0f} {brief('currency') or ''}".rstrip()
    first = _line(
        entry.number,
        entry.made[:19].replace("T", " "),
        entry.kind,
        entry.hash[:_HASH],
        brief("session") or "",
    )
    costs = "" if cost is None else f"{cost:.2f}"
    return first + _more(brief("orders", ""), money, costs, brief("optimum") or "")


def size_text(place: Place, size: Size) -> str:
    """How much is kept, and for how long."""
    if not size.entries:
        return f"{place}: empty"
    since, until = (str(moment)[:10] for moment in (size.oldest, size.newest))
    return (
        f"{place}: {size.entries:,} entries from {since} to {until}; {size.contents:,} contents, "
        f"{_bytes(size.kept)} compressed ({_bytes(size.plain)} plain). Entries are kept for good: "
        "to start anew, name another place"
    )


def entry_text(entry: Entry, manifest: Mapping[str, Any]) -> str:
    """Everything an entry says, files by their hash."""
    by = manifest["made_by"]
    lines = [
        f"Entry {entry.number}: {entry.kind}, made {entry.made} by {by['user']} on {by['host']}",
        f"hash      {entry.hash}",
        f"previous  {entry.previous}",
        "",
        _files(manifest),
        "",
    ]
    for part in ("asked", "certificate", "versions"):
        words = ", ".join(f"{key} {_word(value)}" for key, value in (manifest[part] or {}).items())
        lines.append(f"{part}: {words}")
    lines += [f"[{name}] {_pairs(values)}" for name, values in (manifest["settings"] or {}).items()]
    return "\n".join(lines)


def _files(manifest: Mapping[str, Any]) -> str:
    rows = [
        (kind, name, part.get("source", ""), part["sha256"], f"{part['bytes']:,}")
        for kind, files in (("read", manifest["inputs"]), ("written", manifest["outputs"]))
        for name, part in files.items()
    ]
    return aligned(("", "file", "from", "SHA-256", "bytes"), rows, left=4)


def comparison_text(found: Mapping[str, Any]) -> str:
    """What differs, and the figures of both side by side."""
    one, other = found["entries"]
    blocks = [f"Entries {one} and {other}"]
    for part in ("asked", "settings", "versions"):
        changed = found[part]
        rows = [f"  {key}: {_word(a)} | {_word(b)}" for key, (a, b) in changed.items()]
        blocks.append("\n".join([f"{part}: {'alike' if not rows else ''}".rstrip(), *rows]))
    blocks.append("inputs: " + ", ".join(f"{key} {word}" for key, word in found["inputs"].items()))
    header = ("order", "cost bps", "", "risk bps", "", "shares at another time")
    figures = [_figures(name, row) for name, row in found["orders"].items()]
    figures.append(_figures("total", found["total"]))
    blocks.append(aligned(header, figures))
    return "\n\n".join(blocks)


def _figures(name: str, row: Mapping[str, Any]) -> tuple[str, ...]:
    none = [None, None]
    values = [*row.get("expected_cost_bps", none), *row.get("cost_std_bps", none)]
    moved = row.get("moved")
    return (
        name,
        *("" if value is None else f"{value:.2f}" for value in values),
        "" if moved is None else f"{moved:,.10g}",
    )


def reproduction_text(found: Reproduction) -> str:
    """Whether it is the same plan; if not, where not, and what else differs."""
    lines = list(found.differences[:_SHOWN])
    if (more := len(found.differences) - _SHOWN) > 0:
        lines.append(f"... and {more} more; --json lists all of them")
    lines += [f"Other than then: {text}" for text in found.elsewhere]
    what = "the same plan" if found.same else "another plan"
    lines.append(
        f"Entry {found.entry.number}: {what}; shares compared exactly, other figures at ten digits"
    )
    return "\n".join(lines)


def _pairs(values: Mapping[str, Any]) -> str:
    return ", ".join(f"{key} {_word(value)}" for key, value in values.items())


def _word(value: Any) -> str:
    if isinstance(value, list):
        return " ".join(map(str, value)) or "none"
    return "none" if value in (None, "") else str(value)


def _bytes(count: int) -> str:
    size = float(count)
    for unit in ("bytes", "kB", "MB"):
        if size < 1000.0:
            return f"{size:.3g} {unit}"
        size /= 1000.0
    return f"{size:,.1f} GB"
