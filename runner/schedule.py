"""Pulses in order: onset, pose, output, kind, train. Integers inside: microseconds and thousandths of a percent.

The same protocol and seed give the same bytes on any machine.
"""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from typing import Any, Final

import numpy as np
from coilwright.geometry.draws import Draws
from coilwright.geometry.errors import InputError
from coilwright.geometry.frames import FloatArray, IntArray
from coilwright.geometry.tables import MISSING, NOT_FINITE, PLAIN, Column, read_tsv, to_tsv

from .orders import Constraints, order_entries, sham_entries
from .protocol import Protocol

US: Final = 1_000_000
MILLI: Final = 1000
ACTIVE, SHAM = 0, 1
KINDS: Final = ("active", "sham")
NO_TRAIN: Final = 0
MOST_PULSES: Final = 20_000_000
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


@dataclass(frozen=True, eq=False)
class Schedule:
    """A session's pulses.

    Attributes
    ----------
    onset_us : ndarray of int, shape (N,)
        Rising, from 0.
    pose : ndarray of int, shape (N,)
        Index into `pose_names`.
    output_milli : ndarray of int, shape (N,)
        Thousandths of a percent of output.
    kind : ndarray of int, shape (N,)
        `ACTIVE` or `SHAM`.
    train : ndarray of int, shape (N,)
        Number of the train, `NO_TRAIN` for single pulses.
    pose_names : tuple of str
    threshold_milli : int or None
        The threshold that percentages refer to, thousandths of a percent of output.
    rate_hz : float or None
        Declared rate inside trains.
    """

    onset_us: IntArray
    pose: IntArray
    output_milli: IntArray
    kind: IntArray
    train: IntArray
    pose_names: tuple[str, ...]
    threshold_milli: int | None
    rate_hz: float | None = None

    def __post_init__(self) -> None:
        for name in ("onset_us", "pose", "output_milli", "kind", "train"):
            array = np.array(getattr(self, name), dtype=np.int64)
            array.setflags(write=False)
            object.__setattr__(self, name, array)

    def __len__(self) -> int:
        return len(self.onset_us)

    @property
    def duration_us(self) -> int:
        """From the first pulse to the last."""
        return int(self.onset_us[-1] - self.onset_us[0]) if len(self) else 0


def milli(value: float, name: str) -> int:
    """Return a percentage as thousandths; more than three decimals are refused, not rounded.

    Examples
    --------
    >>> milli(50.6, "output_percent")
    50600
    """
    scaled = Decimal(str(value)) * MILLI
    if scaled != scaled.to_integral_value():
        raise InputError(f"{name}: at most three decimals, got {value}")
    return int(scaled)


def rounded_down(percent: Decimal, step: Decimal) -> int:
    """Return an output in thousandths of a percent, rounded down to the coil's step.

    Examples
    --------
    >>> rounded_down(Decimal("46") * Decimal("1.1"), Decimal(1))
    50000
    """
    scaled = percent // step * step * MILLI
    if scaled != scaled.to_integral_value():
        raise InputError(f"output_step_percent: expected a multiple of 0.001, got {step}")
    return int(scaled)


def output_levels(protocol: Protocol, step_percent: float) -> tuple[list[int], int | None]:
    """Return the outputs of the protocol's intensities, rounded down, and the threshold they refer to.

    Raises
    ------
    InputError
        An intensity that rounds down to nothing.
    """
    threshold = protocol.threshold_of(protocol.reference_kind)
    step = Decimal(str(step_percent))
    pulses = protocol.fired
    if pulses.output_percent is not None:
        wanted = [Decimal(str(value)) for value in pulses.output_percent]
    else:
        assert threshold is not None  # the protocol refuses a share of nothing
        assert pulses.threshold_percent is not None  # one of the two is given
        wanted = [Decimal(str(threshold.output_percent)) * Decimal(str(p)) / 100 for p in pulses.threshold_percent]
    levels = [rounded_down(value, step) for value in wanted]
    if not all(levels):
        raise InputError(f"pulses: an intensity rounds down to no output at steps of {step_percent:g} %; give more")
    return levels, None if threshold is None else milli(threshold.output_percent, "threshold.output_percent")


def build_schedule(
    protocol: Protocol, pose_names: tuple[str, ...], origins: FloatArray, *, step_percent: float
) -> Schedule:
    """Draw the order and the onsets of a session.

    Parameters
    ----------
    protocol : Protocol
    pose_names : tuple of str
        Poses that can be reached, in the order of the protocol.
    origins : ndarray, shape (P, 3)
        Their contact points, head frame, mm.
    step_percent : float
        The coil's output step.

    Raises
    ------
    InputError
        No pose to fire at, an order that does not exist, too many pulses.
    """
    levels, threshold = output_levels(protocol, step_percent)
    order, pulses = protocol.order, protocol.fired
    if not pose_names:
        raise InputError("no pose of this protocol can be reached; there is nothing to schedule")
    offsets, trains = _visit(protocol)
    total = len(pose_names) * len(levels) * pulses.per_pose * len(offsets)
    if total > MOST_PULSES:
        raise InputError(f"pulses: {total} pulses; at most {MOST_PULSES} make a session")
    entries = order_entries(
        order.kind,
        len(pose_names),
        len(levels),
        pulses.per_pose,
        seed=order.seed,
        constraints=Constraints(origins, order.apart_mm, order.longest_run),
    )
    sham = sham_entries(entries.pose, order.sham_share, order.seed)
    starts = _starts(protocol, len(entries.pose), offsets)
    count, per_visit = len(entries.pose), int(trains.max(initial=0))
    numbers = (
        trains[None] + np.arange(count)[:, None] * per_visit if per_visit else np.zeros((count, 1), dtype=np.int64)
    )
    return Schedule(
        (starts[:, None] + offsets[None]).ravel(),
        np.repeat(entries.pose, len(offsets)),
        np.repeat(np.array(levels)[entries.level], len(offsets)),
        np.repeat(np.where(sham, SHAM, ACTIVE), len(offsets)),
        numbers.ravel(),
        pose_names,
        threshold,
        pulses.train.rate_hz if pulses.train else None,
    )


def _visit(protocol: Protocol) -> tuple[IntArray, IntArray]:
    """Onsets within one visit, us, and the number of the train of each pulse (0: a single pulse)."""
    pulses = protocol.fired
    if pulses.train:
        return train_offsets(pulses.train.rate_hz, pulses.train.pulses), np.ones(pulses.train.pulses, dtype=np.int64)
    if pulses.pattern:
        return theta_burst_offsets(pulses.pattern)
    return np.zeros(1, dtype=np.int64), np.zeros(1, dtype=np.int64)


def train_offsets(rate_hz: float, pulses: int) -> IntArray:
    """Return the onsets of a train, us: each rounded down on its own, so that nothing drifts.

    Examples
    --------
    >>> train_offsets(3.0, 4).tolist()
    [0, 333333, 666666, 1000000]
    """
    period = US / Fraction(str(rate_hz))
    return np.array([int(k * period) for k in range(pulses)], dtype=np.int64)


def theta_burst_offsets(pattern: str) -> tuple[IntArray, IntArray]:
    """Return the onsets of a theta burst pattern, us, and the train of each pulse (from 1).

    Huang et al. 2005, Neuron 45:201-206.

    Examples
    --------
    >>> [int(theta_burst_offsets(f"{kind}_theta_burst")[0][-1]) for kind in ("intermittent", "continuous")]
    [191840000, 39840000]
    """
    from .limits import published

    values = published()["theta_burst"]
    within, every = int(values["within_burst_ms"]) * 1000, int(values["burst_every_ms"]) * 1000
    burst = np.arange(values["pulses_per_burst"]) * within
    if pattern == "continuous_theta_burst":
        bursts = np.arange(values["continuous"]["bursts"]) * every
        offsets = (bursts[:, None] + burst).ravel()
        return offsets, np.ones(len(offsets), dtype=np.int64)
    shape = values["intermittent"]
    one = (np.arange(shape["bursts"])[:, None] * every + burst).ravel()
    starts = np.arange(shape["trains"]) * int(shape["every_s"]) * US
    return (starts[:, None] + one).ravel(), np.repeat(np.arange(shape["trains"]) + 1, len(one))


def _starts(protocol: Protocol, count: int, offsets: IntArray) -> IntArray:
    """Onset of each visit, us."""
    gaps = _gaps(protocol, count - 1, offsets)
    rest = protocol.fired.rest
    if rest:
        done = (np.arange(count - 1) + 1) * len(offsets)
        gaps = gaps + _rests(done, rest.after_pulses, len(offsets)) * _microseconds(
            rest.minutes * 60, "pulses.rest.minutes"
        )
    return np.concatenate([np.zeros(1, dtype=np.int64), np.cumsum(gaps, dtype=np.int64)])


def _rests(done: IntArray, after: int, per_visit: int) -> IntArray:
    """Whether a rest follows each visit: where the count of pulses passes the next multiple of `after`."""
    return np.asarray((done // after > (done - per_visit) // after).astype(np.int64))


def _gaps(protocol: Protocol, count: int, offsets: IntArray) -> IntArray:
    """From the start of each visit to the start of the next, us, without rests."""
    pulses, draws = protocol.fired, Draws(protocol.order.seed, "interval")
    if pulses.interval_s:
        low, high = (_microseconds(value, "pulses.interval_s") for value in pulses.interval_s)
        return low + draws.below(high - low + 1, count)
    if pulses.interval_exponential:
        wanted, name = pulses.interval_exponential, "pulses.interval_exponential"
        floor, mean = _microseconds(wanted.floor_s, name), _microseconds(wanted.mean_s, name)
        most = None if wanted.longest_s is None else _microseconds(wanted.longest_s, name) - floor
        return floor + draws.exponential(mean - floor, count, most=most)
    if pulses.train:
        step = int(offsets[-1]) + _microseconds(pulses.train.pause_s, "pulses.train.pause_s")
    else:
        from .limits import published

        every = int(published()["theta_burst"]["intermittent"]["every_s"]) * US
        step = (int(offsets[-1]) // every + 1) * every
    return np.full(count, step, dtype=np.int64)


def _microseconds(seconds: float, name: str) -> int:
    scaled = Decimal(str(seconds)) * US
    if scaled != scaled.to_integral_value():
        raise InputError(f"{name}: at most six decimals (microseconds), got {seconds}")
    return int(scaled)


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
