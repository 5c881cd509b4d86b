"""Pulses in order: onset, pose, output, kind, train. Integers inside: microseconds and thousandths of a percent.

The same protocol and seed give the same bytes on any machine.
"""

from __future__ import annotations

from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction
from typing import Final

import numpy as np
from coilwright.geometry.draws import Draws
from coilwright.geometry.errors import InputError
from coilwright.geometry.frames import FloatArray, IntArray

from .limits import published
from .orders import Constraints, order_entries, sham_entries
from .protocol import Protocol

US: Final = 1_000_000
MILLI: Final = 1000
ACTIVE, SHAM = 0, 1
KINDS: Final = ("active", "sham")
NO_TRAIN: Final = 0
MOST_PULSES: Final = 20_000_000


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
        every = int(published()["theta_burst"]["intermittent"]["every_s"]) * US
        step = (int(offsets[-1]) // every + 1) * every
    return np.full(count, step, dtype=np.int64)


def _microseconds(seconds: float, name: str) -> int:
    scaled = Decimal(str(seconds)) * US
    if scaled != scaled.to_integral_value():
        raise InputError(f"{name}: at most six decimals (microseconds), got {seconds}")
    return int(scaled)
