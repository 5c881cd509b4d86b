"""Which pulses of a schedule make trains: declared ones, and those that stand 2 s apart or closer."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from coilwright.geometry.frames import FloatArray, IntArray

from .limits import published
from .schedule import NO_TRAIN, US, Schedule


@dataclass(frozen=True)
class Trains:
    """Trains of a schedule, in order.

    Attributes
    ----------
    first, last : ndarray of int, shape (T,)
        Index of the first and last pulse.
    parts : ndarray of int, shape (T,)
        Declared trains that touch and count as one here; they still count one by one.
    pulses : ndarray of int, shape (T,)
    rate_hz : ndarray, shape (T,)
        The declared rate where the onsets agree within 0.1 %, else one over the shortest interval; NaN for one pulse.
    output_milli : ndarray of int, shape (T,)
        The highest output in it.
    duration_s : ndarray, shape (T,)
        The larger of pulses / rate and last minus first.
    theta_burst : ndarray of bool, shape (T,)
        The protocol names a pattern and every onset matches it.
    """

    first: IntArray
    last: IntArray
    parts: IntArray
    pulses: IntArray
    rate_hz: FloatArray
    output_milli: IntArray
    duration_s: FloatArray
    theta_burst: np.ndarray

    def __len__(self) -> int:
        return len(self.first)

    def chosen(self, keep: np.ndarray) -> Trains:
        """Return the trains that are marked."""
        return Trains(*(getattr(self, name)[keep] for name in self.__dataclass_fields__))


def train_gap_us() -> int:
    """Return the longest gap inside a train, us: 2 s with the tolerance of spacings."""
    found = published()["trains_found"]
    return round(float(found["gap_s"]) * US * (1 + float(found["relative_tolerance"])))


def find_trains(schedule: Schedule, pattern: str | None) -> Trains:
    """Find the trains of a schedule; trains that touch each other count as one.

    Parameters
    ----------
    schedule : Schedule
    pattern : str or None
        The theta burst pattern that the protocol names.
    """
    onset, train = schedule.onset_us, schedule.train
    joined = np.diff(onset) <= train_gap_us()
    renumbered = train[1:] != train[:-1]
    joined |= ~renumbered & (train[1:] != NO_TRAIN)
    starts = np.flatnonzero(np.concatenate([[True], ~joined]))
    ends = np.append(starts[1:], len(onset)) - 1
    keep = (ends > starts) | (train[starts] != NO_TRAIN)
    first, last = starts[keep], ends[keep]
    rate, duration = _rates(schedule, first, last)
    burst = np.array(
        [
            pattern is not None and is_theta_burst(schedule, int(a), int(b), pattern)
            for a, b in zip(first, last, strict=True)
        ]
    )
    highest = np.array(
        [schedule.output_milli[a : b + 1].max() for a, b in zip(first, last, strict=True)], dtype=np.int64
    )
    changes = np.concatenate([[0], np.cumsum(renumbered & joined)])
    parts = changes[last] - changes[first] + 1
    return Trains(first, last, parts, last - first + 1, rate, highest, duration, burst.astype(bool))


def _rates(schedule: Schedule, first: IntArray, last: IntArray) -> tuple[FloatArray, FloatArray]:
    tolerance = float(published()["trains_found"]["relative_tolerance"])
    onset = schedule.onset_us
    gaps = np.diff(onset)
    rate = np.full(len(first), np.nan)
    for i, (a, b) in enumerate(zip(first.tolist(), last.tolist(), strict=True)):
        if b == a:
            continue
        inside = gaps[a:b]
        rate[i] = US / inside.min()
        if schedule.rate_hz is not None:
            period = US / schedule.rate_hz
            if (np.abs(inside - period) <= tolerance * period).all():
                rate[i] = schedule.rate_hz
    with np.errstate(invalid="ignore"):
        by_count = np.where(np.isnan(rate), 0.0, (last - first + 1) / rate)
    return rate, np.maximum(by_count, (onset[last] - onset[first]) / US)


def is_theta_burst(schedule: Schedule, first: int, last: int, pattern: str) -> bool:
    """Say whether a train is the theta burst that the protocol names, pulse by pulse.

    One intensity, whole triplets at 20 ms, every 200 ms, at least ten of them; exactly ten in an intermittent train.
    """
    values = published()["theta_burst"]
    per_burst, tolerance = int(values["pulses_per_burst"]), float(published()["trains_found"]["relative_tolerance"])
    count = last - first + 1
    outputs = schedule.output_milli[first : last + 1]
    if pattern == "intermittent_theta_burst" and count != per_burst * values["intermittent"]["bursts"]:
        return False
    if count % per_burst or count // per_burst < values["least_bursts"] or outputs.min() != outputs.max():
        return False
    onset = schedule.onset_us[first : last + 1].reshape(-1, per_burst)
    within, every = int(values["within_burst_ms"]) * 1000, int(values["burst_every_ms"]) * 1000
    inside_fits = (np.abs(np.diff(onset, axis=1) - within) <= tolerance * within).all()
    between_fits = (np.abs(np.diff(onset[:, 0]) - every) <= tolerance * every).all()
    return bool(inside_fits and between_fits)
