"""How many pulses a person was given on earlier days: an append-only table a person, counted over rolling windows.

``when`` carries its offset from UTC, so that time zones and daylight saving change nothing; pulses whose outcome is
unknown count. A person is a code, never a name.
"""

from __future__ import annotations

import datetime as dt
import os
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from coilwright.geometry.errors import InputError
from coilwright.geometry.tables import check_cell, read_tsv

COLUMNS: Final = ("person", "when", "pulses", "what", "session")


@dataclass(frozen=True)
class Entry:
    """Pulses given at one time.

    Attributes
    ----------
    when : datetime
        With its offset from UTC: when the last of them was given.
    pulses : int
    what : str
        ``session``, ``threshold``, ``trial`` or words.
    session : str
        Which record they come from; ``n/a`` if they were entered by hand.
    """

    when: dt.datetime
    pulses: int
    what: str
    session: str = "n/a"


def ledger_path(folder: Path, person: str) -> Path:
    """Return the file of a person."""
    return folder / f"{person}.tsv"


def read_ledger(folder: Path, person: str) -> tuple[Entry, ...]:
    """Read a person's entries; no file means no earlier pulses (it is created on the first run).

    Raises
    ------
    InputError
        A damaged file, or one of another person: nothing is counted from it in silence.
    """
    path = ledger_path(folder, person)
    try:
        data = path.read_bytes()
    except FileNotFoundError:
        return ()
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror})") from None
    table = read_tsv(data, str(path), COLUMNS, exact=True)
    entries, problems = [], []
    for i, (who, when, pulses, what, session) in enumerate(zip(*(table[c] for c in COLUMNS), strict=True)):
        where = f"{path}:{i + 2}"
        if who != person:
            problems.append(f"{where}: person: this line is of {who!r}, the protocol is of {person!r}")
            continue
        moment = _moment(when)
        if moment is None:
            problems.append(
                f"{where}: when: expected a time with its offset such as 2026-05-04T10:30:00+02:00, got {when!r}"
            )
            continue
        if not (pulses.isascii() and pulses.isdigit() and len(pulses) < 12):
            problems.append(f"{where}: pulses: expected a whole number from 0, got {pulses!r}")
            continue
        entries.append(Entry(moment, int(pulses), what, session))
    if problems:
        raise InputError(*problems)
    return tuple(entries)


def _moment(text: str) -> dt.datetime | None:
    """A time with its offset, or None."""
    try:
        moment = dt.datetime.fromisoformat(text)
    except ValueError:
        return None
    return moment if moment.tzinfo else None


def pulses_since(entries: tuple[Entry, ...], now: dt.datetime, hours: float) -> int:
    """Return the pulses of the last `hours` hours before `now`; entries in the future count, because clocks err.

    Examples
    --------
    >>> noon = dt.datetime(2026, 5, 4, 12, tzinfo=dt.timezone.utc)
    >>> pulses_since((Entry(noon, 10, "session"),), noon + dt.timedelta(hours=24), 24)
    10
    """
    start = now.astimezone(dt.timezone.utc) - dt.timedelta(hours=hours)
    return sum(entry.pulses for entry in entries if entry.when.astimezone(dt.timezone.utc) >= start)


def append(folder: Path, person: str, entry: Entry) -> Path:
    """Add one line to a person's ledger and wait until it is on the disk; nothing is ever changed or taken out."""
    read_ledger(folder, person)  # a damaged ledger is not written to
    path = ledger_path(folder, person)
    cells = [person, entry.when.isoformat(timespec="seconds"), str(entry.pulses), entry.what, entry.session]
    if entry.when.tzinfo is None:
        raise InputError("ledger: a time needs its offset from UTC")
    line = "\t".join(map(check_cell, cells)) + "\n"
    folder.mkdir(parents=True, exist_ok=True)
    handle = os.open(path, os.O_WRONLY | os.O_APPEND | os.O_CREAT, 0o644)
    try:
        head = "" if os.fstat(handle).st_size else "\t".join(COLUMNS) + "\n"
        os.write(handle, (head + line).encode())
        os.fsync(handle)
    finally:
        os.close(handle)
    return path
