"""``schedule.tsv``: written from a schedule; read from this program's, another program's or a hand's.

Onsets in seconds with six decimals, outputs in percent; what is finer than the integers inside is refused, not rounded.
"""

from __future__ import annotations

from decimal import Decimal
from fractions import Fraction
from typing import Any, Final

import numpy as np
from coilwright.geometry.errors import InputError
from coilwright.geometry.frames import IntArray
from coilwright.geometry.tables import MISSING, NOT_FINITE, PLAIN, Column, read_tsv, to_tsv

from .schedule import KINDS, MILLI, NO_TRAIN, US, Schedule, rounded_down

# How far a stated threshold_percent may be from the one computed again before the schedule is bad input.
PERCENT_TOLERANCE: Final = Fraction(5, 100)

COLUMNS: Final[dict[str, Column]] = {
    "pulse": Column("Number of the pulse, from 1; it never changes"),
    "onset_s": Column("Onset from the first pulse", "s"),
    "pose": Column("Name of the pose in poses.tsv"),
    "output_percent": Column("Output of the stimulator, rounded down to the coil's output step", "% of output"),
    "threshold_percent": Column(
        "Output as a share of the threshold that the protocol refers to, after rounding; n/a without a threshold", "%"
    ),
    "kind": Column("Whether the pulse is meant to stimulate", levels={"active": "stimulates", "sham": "does not"}),
    "train": Column("Number of the train that the pulse belongs to; n/a for single pulses"),
}


def milli_text(value: int) -> str:
    """Return thousandths as the shortest decimal.

    Examples
    --------
    >>> milli_text(50000), milli_text(50600)
    ('50', '50.6')
    """
    whole, rest = divmod(value, MILLI)
    return f"{whole}.{rest:03d}".rstrip("0").rstrip(".")


def percent_text(output_milli: int, threshold_milli: int | None) -> str:
    """Return the share of the threshold with three decimals at most, rounded half up in integers."""
    if threshold_milli is None:
        return MISSING
    return milli_text((2 * output_milli * 100 * MILLI + threshold_milli) // (2 * threshold_milli))


def onset_text(us: int) -> str:
    """Return microseconds as seconds with six decimals."""
    return f"{us // US}.{us % US:06d}"


def write_schedule(schedule: Schedule) -> bytes:
    """Return ``schedule.tsv``."""
    values, rows = np.unique(schedule.output_milli, return_inverse=True)
    outputs = [milli_text(v) for v in values.tolist()]
    shares = [percent_text(v, schedule.threshold_milli) for v in values.tolist()]
    level = rows.reshape(-1).tolist()
    columns = {
        "pulse": list(map(str, range(1, len(schedule) + 1))),
        "onset_s": list(map(onset_text, schedule.onset_us.tolist())),
        "pose": [schedule.pose_names[i] for i in schedule.pose.tolist()],
        "output_percent": [outputs[i] for i in level],
        "threshold_percent": [shares[i] for i in level],
        "kind": [KINDS[i] for i in schedule.kind.tolist()],
        "train": [str(i) if i else MISSING for i in schedule.train.tolist()],
    }
    return to_tsv(columns)


def read_schedule(
    data: bytes,
    name: str,
    *,
    reachable: dict[str, bool],
    threshold_milli: int | None,
    step_percent: float,
    rate_hz: float | None = None,
) -> Schedule:
    """Read ``schedule.tsv``, written by this program, by another or by hand.

    Parameters
    ----------
    data : bytes
    name : str
        Its path, for messages.
    reachable : dict
        Pose name to whether it can be reached.
    threshold_milli : int or None
        Of the protocol; percentages are computed again and must agree within 0.05.
    step_percent : float
        Outputs are rounded down to it.
    rate_hz : float, optional
        Declared rate inside trains.

    Raises
    ------
    InputError
        One line for each fault: numbering, onsets out of order, unknown or unreachable poses, numbers that are none.
    """
    table = read_tsv(data, name, list(COLUMNS), exact=True)
    if not table["pulse"]:
        raise InputError(f"{name}:2:1: the schedule holds no pulse")
    problems: list[str] = []
    onset = _parsed(table["onset_s"], name, "onset_s", lambda t: _exact(t, US), problems)
    output = _parsed(table["output_percent"], name, "output_percent", lambda t: _output(t, step_percent), problems)
    kind = _parsed(table["kind"], name, "kind", KINDS.index, problems, f"one of {', '.join(KINDS)}")
    train = _parsed(table["train"], name, "train", _train, problems, "a whole number from 1, or n/a")
    names = tuple(reachable)
    index = {pose: i for i, pose in enumerate(names)}
    pose = _parsed(table["pose"], name, "pose", index.__getitem__, problems, "a pose of this protocol")
    problems += _order_problems(table, name, onset, reachable)
    if not problems:
        problems += _percent_problems(table, name, output, threshold_milli)
    if problems:
        raise InputError(*problems[:50])
    return Schedule(onset, pose, output, kind, train, names, threshold_milli, rate_hz)


def _parsed(
    cells: list[str], name: str, column: str, parse: Any, problems: list[str], expected: str = "a number"
) -> IntArray:
    """Parse a column by its distinct texts; one line for the first row of each text that does not fit."""
    known: dict[str, int] = {}
    for i, cell in enumerate(cells):
        if cell in known:
            continue
        try:
            known[cell] = parse(cell)
        except InputError as error:
            problems.append(f"{name}:{i + 2}: {column}: {error}")
            known[cell] = -1
        except (ValueError, KeyError, ArithmeticError):
            problems.append(f"{name}:{i + 2}: {column}: expected {expected}, got {cell!r}")
            known[cell] = -1
    return np.fromiter((known[cell] for cell in cells), dtype=np.int64, count=len(cells))


def _decimal(text: str) -> Decimal:
    if not PLAIN.fullmatch(text) and text.lower().lstrip("+-") not in NOT_FINITE:
        raise ValueError(text)
    value = Decimal(text)
    if not value.is_finite() or value.is_signed() or not value < 10**9:
        raise InputError(f"expected a number from 0 to 1e9, got {text!r}")
    return value


def _exact(text: str, scale: int) -> int:
    digits = text[:-7] + text[-6:]
    if scale == US and text[-7:-6] == "." and len(text) < 17 and digits.isascii() and digits.isdigit():
        return int(digits)  # as this program writes onsets: a million of them must not take ten seconds
    scaled = _decimal(text) * scale
    if scaled != scaled.to_integral_value():
        raise InputError(f"finer than the {len(str(scale)) - 1} decimals kept here, got {text!r}")
    return int(scaled)


def _output(text: str, step_percent: float) -> int:
    level = rounded_down(_decimal(text), Decimal(str(step_percent)))
    if not level:
        raise InputError(f"rounds down to no output at steps of {step_percent:g} %, got {text!r}")
    return level


def _train(text: str) -> int:
    if text == MISSING:
        return NO_TRAIN
    if not (text.isascii() and text.isdigit() and 1 <= len(text) <= 12 and int(text) >= 1):
        raise ValueError(text)
    return int(text)


def _order_problems(table: dict[str, list[str]], name: str, onset: IntArray, reachable: dict[str, bool]) -> list[str]:
    problems = [
        f"{name}:{i + 2}: pulse: expected {i + 1}, got {cell!r}; pulses count from 1, one a row"
        for i, cell in enumerate(table["pulse"])
        if cell != str(i + 1)
    ][:10]
    known = (onset >= 0).all()  # what is no number has been said already
    late = np.flatnonzero(~(np.diff(onset) > 0)) if known else np.empty(0, dtype=np.int64)
    problems += [
        f"{name}:{i + 3}: onset_s: {table['onset_s'][i + 1]} is not after {table['onset_s'][i]}; onsets rise"
        for i in late[:10]
    ]
    if known and onset[0] != 0:
        problems.append(f"{name}:2: onset_s: the first onset is {table['onset_s'][0]}; onsets count from 0")
    blocked = {pose for pose, reached in reachable.items() if not reached}
    problems += [
        f"{name}:{i + 2}: pose: {cell!r} cannot be reached (see poses.tsv); it has no place in a schedule"
        for i, cell in enumerate(table["pose"])
        if cell in blocked
    ][:10]
    return problems


def _percent_problems(table: dict[str, list[str]], name: str, output: IntArray, threshold: int | None) -> list[str]:
    problems, seen = [], set()
    for i, (text, level) in enumerate(zip(table["threshold_percent"], output.tolist(), strict=True)):
        if (text, level) in seen:
            continue
        seen.add((text, level))
        if text == MISSING:
            continue
        where = f"{name}:{i + 2}: threshold_percent"
        if threshold is None:
            problems.append(f"{where}: {text}, but the protocol has no threshold; say n/a")
            continue
        try:
            stated = Fraction(_decimal(text))
        except (InputError, ArithmeticError, ValueError):
            problems.append(f"{where}: expected a number or n/a, got {text!r}")
            continue
        computed = Fraction(level * 100, threshold)
        if not abs(stated - computed) <= PERCENT_TOLERANCE:
            problems.append(
                f"{where}: {text} disagrees with {float(computed):.3f}, computed from the output and the threshold of"
                f" {milli_text(threshold)} %"
            )
    return problems
