"""Where a journal is: a file, a PostgreSQL database, or nowhere."""

from __future__ import annotations

import os
import re
import sys
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from scheduler.errors import MisuseError

VARIABLE = "HEADRACE_JOURNAL"
OFF = "off"
_SERVERS = ("postgresql://", "postgres://")


@dataclass(frozen=True)
class Place:
    """A file's path or a server's URL. `asked_for`: somebody named it; it is not the default."""

    address: str
    asked_for: bool = True

    @property
    def is_server(self) -> bool:
        return self.address.startswith(_SERVERS)

    def __str__(self) -> str:
        """The address as it may be shown: a password is left out."""
        if not self.is_server:
            return self.address
        plain = re.sub(r"(//[^/@:]*):[^/]*@", r"\1@", self.address)
        return re.sub(r"([?&]password=)[^&]*", r"\1...", plain)


def find_place(
    option: str | None = None, setting: str = "", environment: Mapping[str, str] = os.environ
) -> Place | None:
    """The journal to use: option, else the environment, else setting, else default.

    None: there is none, because the first of these that is given says `off`.

    Raises:
        MisuseError: an address of an unknown kind; a password in the settings, which are copied
            into every summary.
    """
    if str(Place(setting)) != setting:
        raise MisuseError(
            "settings, journal.place: holds a password, which every summary would repeat; leave it "
            "out and give it by PGPASSWORD or a password file"
        )
    given = option or environment.get(VARIABLE, "") or setting
    if given == OFF:
        return None
    if not given:
        return default_place(environment)
    kind = re.match(r"([A-Za-z][A-Za-z0-9+.-]+)://", given)
    if kind and not given.startswith(_SERVERS):
        raise MisuseError(
            f"journal {kind[0]}...: unknown kind of address; give a file, "
            f"postgresql://HOST/DATABASE or {OFF}"
        )
    return Place(given)


def default_place(environment: Mapping[str, str] = os.environ) -> Place | None:
    """`headrace/journal.db` in the platform's data directory; None if there is no such."""
    named = {"win32": "LOCALAPPDATA", "darwin": ""}.get(sys.platform, "XDG_DATA_HOME")
    usual = {"win32": "AppData/Local", "darwin": "Library/Application Support"}
    base = environment.get(named, "")
    if not Path(base).is_absolute():
        try:
            base = str(Path.home() / usual.get(sys.platform, ".local/share"))
        except RuntimeError:
            return None
    return Place(str(Path(base) / "headrace" / "journal.db"), asked_for=False)
