"""Tab-separated tables with a sidecar: UTF-8, ``n/a`` for missing, one description a column.

Numbers are written with ``repr``: the shortest text that reads back as the same double.
"""

from __future__ import annotations

import json
import math
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from .errors import InputError, did_you_mean
from .frames import FloatArray

MISSING: Final = "n/a"
# A number as tables hold it: ASCII digits, no spaces, no underscores.
NOT_FINITE: Final = ("nan", "inf", "infinity")
PLAIN: Final = re.compile(r"[+-]?([0-9]+\.?[0-9]*|\.[0-9]+)([eE][+-]?[0-9]+)?")


@dataclass(frozen=True)
class Column:
    """What a column means: a sentence, and a unit where it has one."""

    description: str
    units: str | None = None
    levels: Mapping[str, str] | None = None

    def sidecar(self) -> dict[str, Any]:
        """Return the BIDS-style entry."""
        entry: dict[str, Any] = {"Description": self.description}
        if self.units:
            entry["Units"] = self.units
        if self.levels:
            entry["Levels"] = dict(self.levels)
        return entry


def number_text(value: float) -> str:
    """Return the shortest text that reads back as the same double; ``n/a`` for NaN.

    Examples
    --------
    >>> number_text(0.1), number_text(96.0), number_text(float("nan"))
    ('0.1', '96.0', 'n/a')
    """
    return MISSING if math.isnan(value) else repr(float(value) + 0.0)


def column_texts(values: Iterable[Any]) -> list[str]:
    """Return the cells of a column as text; refuses text that would break the table."""
    if isinstance(values, np.ndarray) and values.dtype.kind == "f":
        return list(map(number_text, values.tolist()))
    return [check_cell(str(v)) for v in values]


def check_cell(text: str) -> str:
    """Return text that fits into a cell; tabs and line ends are refused, never replaced."""
    if not text or any(c in text for c in "\t\r\n"):
        raise InputError(f"{text!r} does not fit into a table: empty, or with a tab or a line end in it; rename it")
    return text


def to_tsv(columns: Mapping[str, Sequence[str]]) -> bytes:
    """Return a table of texts as bytes."""
    rows = zip(*columns.values(), strict=True)
    return ("\n".join(["\t".join(columns), *map("\t".join, rows)]) + "\n").encode()


def sidecar_bytes(columns: Mapping[str, Column], extra: Mapping[str, Any]) -> bytes:
    """Return the sidecar: an entry a column, then what holds for the whole table."""
    content = {name: column.sidecar() for name, column in columns.items()} | dict(extra)
    return json_bytes(content)


def json_bytes(content: Any) -> bytes:
    """Return JSON as bytes, indented by one, never with NaN in it."""
    return (json.dumps(content, indent=1, ensure_ascii=False, allow_nan=False) + "\n").encode()


def read_tsv(data: bytes, name: str, required: Sequence[str], *, exact: bool = False) -> dict[str, list[str]]:
    r"""Read a table of texts.

    Parameters
    ----------
    data : bytes
    name : str
        Its path, for messages.
    required : sequence of str
        Columns that must be there.
    exact : bool
        Whether other columns are refused.

    Raises
    ------
    InputError
        One line for each missing, unknown or doubled column, and for each row of the wrong length.

    Examples
    --------
    >>> read_tsv(b"pose\tx_mm\na\t1\n", "t.tsv", ["pose"])
    {'pose': ['a'], 'x_mm': ['1']}
    """
    try:
        text = data.decode("utf-8").removeprefix("\ufeff").replace("\r\n", "\n").removesuffix("\n")
    except UnicodeDecodeError as error:
        raise InputError(f"{name}:1:1: not UTF-8 text (byte {error.start}); save the table as UTF-8") from None
    if not text:
        raise InputError(f"{name}:1:1: empty; expected the columns {' '.join(required)}, tab-separated")
    first, _, body = text.partition("\n")
    header = first.split("\t")
    _check_header(header, name, required, exact=exact)
    if not body:
        return {column: [] for column in header}
    _check_rows(body, len(header), name)
    cells = body.replace("\n", "\t").split("\t")  # one flat list: a million small ones would keep the collector busy
    return {column: cells[i :: len(header)] for i, column in enumerate(header)}


def _check_rows(body: str, columns: int, name: str) -> None:
    """Refuse rows with a wrong number of cells."""
    raw = np.frombuffer(body.encode(), dtype=np.uint8)
    ends = np.append(np.flatnonzero(raw == ord("\n")), len(raw))
    tabs = np.searchsorted(np.flatnonzero(raw == ord("\t")), ends)
    cells = np.diff(tabs, prepend=0) + 1
    wrong = np.flatnonzero(cells != columns)
    if wrong.size:
        raise InputError(
            *(f"{name}:{i + 2}:1: expected {columns} cells split by tabs, got {cells[i]}" for i in wrong[:20].tolist())
        )


def _check_header(header: list[str], name: str, required: Sequence[str], *, exact: bool) -> None:
    problems = [
        f"{name}:1:1: the column {column!r} is missing; expected {' '.join(required)}, tab-separated"
        for column in required
        if column not in header
    ]
    problems += [
        f"{name}:1:1: the column {c!r} stands there twice" for c in dict.fromkeys(header) if header.count(c) > 1
    ]
    if exact:
        problems += [
            f"{name}:1:1: unknown column {c!r}{did_you_mean(c, required)}" for c in header if c not in required
        ]
    if problems:
        raise InputError(*problems)


def floats(cells: Sequence[str], name: str, column: str, *, missing: bool = False) -> FloatArray:
    """Read a column of finite numbers; ``n/a`` becomes NaN where `missing` is allowed, everything else is refused."""
    values, problems = np.full(len(cells), np.nan), []
    for i, cell in enumerate(cells):
        if cell == MISSING and missing:
            continue
        if PLAIN.fullmatch(cell):
            values[i] = float(cell)
            if math.isfinite(values[i]):
                continue
        wanted = "a finite number" if cell.lower().lstrip("+-") in NOT_FINITE or PLAIN.fullmatch(cell) else "a number"
        problems.append(f"{name}:{i + 2}: {column}: expected {wanted}, got {cell!r}")
    if problems:
        raise InputError(*problems[:20])
    return values
