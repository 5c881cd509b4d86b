"""Printing: findings, verdicts and tables that fit 80 columns, plain in a pipe."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any, Final

import click
from coilwright.geometry.errors import Finding

EXIT_CODES: Final = {"within_checked_limits": 0, "exceeded": 10, "incomplete": 11}
VERDICT_WORDS: Final = {
    "within_checked_limits": "within the checked limits",
    "exceeded": "EXCEEDED: a limit is exceeded",
    "incomplete": "INCOMPLETE: a value that only the lab can give is missing",
}
WIDTH: Final = 80


def as_json(content: Any) -> None:
    """Print JSON."""
    click.echo(json.dumps(content, indent=1, ensure_ascii=False, allow_nan=False))


def findings(found: Iterable[Finding | str]) -> None:
    """Print findings, one line each."""
    for finding in found:
        click.echo(f"finding: {finding}")


def written(paths: Iterable[Path]) -> None:
    """Print what was written."""
    for path in paths:
        click.echo(f"wrote {path}")


@contextmanager
def progress(what: str, total: int) -> Iterator[Callable[[int], None] | None]:
    """Show how far long work has come, on a terminal only; yields what to call with each step, or None."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import Progress

    with Progress(console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task(what, total=total)
        yield lambda done: bar.update(task, advance=done)


def number(value: float | None, digits: int = 3) -> str:
    """Return a number for a person, or a dash."""
    if value is None:
        return "-"
    return f"{value:.{digits}f}".rstrip("0").rstrip(".") if digits else f"{value:.0f}"


def table(header: Sequence[str], rows: Sequence[Sequence[str]], *, right: Sequence[int] = ()) -> None:
    """Print a table in plain text; columns in `right` are flush right.

    Plain text reads the same on a terminal and in a pipe, and survives being pasted into a protocol.
    """
    widths = [max(len(row[i]) for row in [header, *rows]) for i in range(len(header))]
    for row in [header, *rows]:
        cells = [c.rjust(w) if i in right else c.ljust(w) for i, (c, w) in enumerate(zip(row, widths, strict=True))]
        click.echo("  ".join(cells).rstrip())


def wrapped(text: str, indent: str = "") -> None:
    """Print a paragraph within 80 columns."""
    click.echo(click.wrap_text(text, WIDTH - 1, initial_indent=indent, subsequent_indent=indent + "  "))
