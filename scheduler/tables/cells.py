"""What one text cell may say: a parser per kind of word, each refusing with rule and remedy.

A parser takes the text of a cell that is not empty and returns its canonical value.
"""

from __future__ import annotations

import re
from functools import cache

from scheduler.tables.currencies import CODES, MINOR_UNITS

FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")
_SCIENTIFIC = re.compile(r"\d(\.\d+)?[eE]\+\d+")
_SIDES = {
    **dict.fromkeys(("buy", "b", "1"), 1),
    **dict.fromkeys(("sell", "s", "2", "5", "6", "-1"), -1),
}
_YES_NO = {
    **dict.fromkeys(("true", "yes", "y", "1"), True),
    **dict.fromkeys(("false", "no", "n", "0"), False),
}


class CellError(ValueError):
    """A cell that breaks a rule; `remedy` says what to do."""

    def __init__(self, rule: str, remedy: str) -> None:
        super().__init__(rule)
        self.rule = rule
        self.remedy = remedy


def identifier(text: str) -> str:
    """An id or a symbol, kept character for character."""
    if text.startswith(FORMULA_STARTS):
        raise CellError(
            "must not begin with = + - @, tab or return",
            "a spreadsheet would run it as a formula: rename it",
        )
    if text != text.strip():
        raise CellError("has a blank at its beginning or end", "remove the blank")
    if not text.isprintable():
        raise CellError("holds a control or invisible character", "remove the character")
    if "+" in text and _SCIENTIFIC.fullmatch(text):
        raise CellError(
            "is a number in scientific notation: digits of the id are lost",
            "export the column as text",
        )
    return text


def side(text: str) -> int:
    """+1 to buy, -1 to sell; FIX 1 is buy, 2 sell, 5 sell short, 6 sell short exempt."""
    try:
        return _SIDES[text.strip().lower()]
    except KeyError:
        raise CellError("is no side", "write buy or sell (also B, S, FIX 1, 2, 5, 6)") from None


def yes_no(text: str) -> bool:
    """True or false, in the usual spellings and any case."""
    try:
        return _YES_NO[text.strip().lower()]
    except KeyError:
        raise CellError("is neither true nor false", "write true or false") from None


def profile_kind(text: str) -> str:
    """`continuous` or `auction`."""
    kind = text.strip().lower()
    if kind not in {"continuous", "auction"}:
        raise CellError("is no kind of trading", "write continuous or auction")
    return kind


def currency(text: str) -> str:
    """An ISO 4217 code; quotation in pence, cents or agorot is refused."""
    code = text.strip()
    if code in MINOR_UNITS:
        raise CellError(
            "is a minor unit, not an ISO 4217 currency",
            f"divide prices by 100 and write {MINOR_UNITS[code]} (give pounds, not pence)",
        )
    if code not in CODES:
        known = code.upper() in CODES
        remedy = f"did you mean {code.upper()!r}?" if known else "write a code such as USD"
        raise CellError("is no ISO 4217 currency code", remedy)
    return code


def calendar(text: str) -> str:
    """An exchange calendar: an ISO 10383 market code, or 24/7."""
    code = text.strip()
    if code not in calendar_names():
        known = code.upper() in calendar_names()
        remedy = f"did you mean {code.upper()!r}?" if known else "write one such as XNYS, or 24/7"
        raise CellError("is no known exchange calendar (ISO 10383 market code)", remedy)
    return code


@cache
def calendar_names() -> frozenset[str]:
    """Every exchange calendar that can be planned on."""
    from exchange_calendars import get_calendar_names  # noqa: PLC0415

    return frozenset(get_calendar_names(include_aliases=True))


def not_modelled(_text: str) -> str:
    """A column that must stay empty because what it asks for is not modelled."""
    raise CellError("cannot be kept: price limits are not modelled", "leave the cell empty")
