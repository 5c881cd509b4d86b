"""Rules about trains and theta burst: LIMITS sections 1 to 4, each a function from a `Case` to a `Check`."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Final

import numpy as np

from .case import Case, pulse_number, with_approval
from .lab import Approval
from .limits import Check, at_least, at_most, check, faster, nothing_to_check, published, table_cell
from .schedule import MILLI, US
from .trains import Trains

NO_TRAINS: Final = "no train in this schedule"
OWN_RULE: Final = "theta burst answers to its own rule"


@dataclass(frozen=True)
class _Kind:
    """Trains that a table cannot tell apart, and the first of them."""

    train: int
    rate_hz: float
    percent_milli: int
    duration_s: float
    pulses: int


def _kinds(case: Case) -> Iterator[_Kind]:
    """Distinct ordinary trains, by rate, intensity, duration and count."""
    trains = case.ordinary
    keys = np.stack([np.nan_to_num(trains.rate_hz), trains.output_milli, trains.duration_s, trains.pulses], axis=1)
    for i in np.unique(keys, axis=0, return_index=True)[1].tolist():
        percent = case.percent_milli(int(trains.output_milli[i]), "resting")
        assert percent is not None  # the callers have asked for the threshold
        yield _Kind(i, float(keys[i, 0]), percent, float(trains.duration_s[i]), int(trains.pulses[i]))


def _by_table(case: Case, rule: str, tables: list[tuple[str, str]], value: Callable[[_Kind], float]) -> Check:
    """Hold each train against its cells (the smallest counts), widened by an approval; keep the worst."""
    tolerance = float(published()["trains_found"]["duration_tolerance"])
    worst: tuple[float, Check] | None = None
    for kind in _kinds(case):
        cells = [table_cell(table, values, kind.rate_hz, kind.percent_milli) for table, values in tables]
        cell = None if None in cells else min(c for c in cells if c is not None)
        approval = None
        if cell is None or not value(kind) <= cell * (1 + tolerance):
            approval = case.approvals.find(rule, rate_hz=kind.rate_hz, percent=kind.percent_milli / MILLI)
        widened = [x for x in (cell, approval.up_to if approval else None) if x is not None]
        limit = max(widened, default=None)
        item = (
            _beyond_table(case, rule, kind, value(kind))
            if limit is None
            else at_most(rule, value(kind), limit, tolerance=tolerance)
        )
        item = with_approval(case, item.but(pulse=pulse_number(case.ordinary.first[kind.train])), approval)
        badness = np.inf if limit is None else value(kind) / limit
        if worst is None or badness > worst[0]:
            worst = badness, item
    assert worst is not None
    return worst[1].but(unit=published()[rule].get("unit", "pulses") if rule in published() else "pulses")


def _beyond_table(case: Case, rule: str, kind: _Kind, value: float) -> Check:
    words = f"{kind.rate_hz:g} Hz at {kind.percent_milli / MILLI:.1f} % of resting threshold"
    note = f"{words} is beyond the published table: no consensus value{case.approvals.expired(rule)}"
    return check(rule, "exceeded", worst=value, note=note)


def _needs_resting(case: Case, rule: str) -> Check | None:
    """What to say of a table in % of resting threshold when there is no train, or no resting threshold."""
    if not len(case.ordinary):
        return nothing_to_check(rule, NO_TRAINS if not len(case.trains) else OWN_RULE)
    if case.protocol.threshold_of("resting") is None:
        return check(
            rule,
            "incomplete",
            pulse=pulse_number(case.ordinary.first[0]),
            note="the table is in % of resting threshold, and the protocol gives none",
        )
    return None


def train_duration(case: Case) -> Check:
    """Hold each train's duration against section 1, and section 2 when trains repeat."""
    tables = [("train_duration", "seconds")] + [("repeated_trains", "seconds")] * case.repeated
    return _needs_resting(case, "train_duration") or _by_table(
        case, "train_duration", tables, lambda kind: kind.duration_s
    )


def train_pulses(case: Case) -> Check:
    """Hold each train's pulses against section 2 when trains repeat."""
    if len(case.ordinary) and not case.repeated:
        return nothing_to_check("train_pulses", "a single train answers to its duration alone")
    return _needs_resting(case, "train_pulses") or _by_table(
        case, "train_pulses", [("repeated_trains", "pulses")], lambda kind: kind.pulses
    )


def _approval(case: Case, rule: str, trains: Trains) -> Approval | None:
    """An approval that covers the highest rate and the highest intensity of these trains."""
    percent = case.percent_milli(int(trains.output_milli.max()), "resting")
    rates = trains.rate_hz[np.isfinite(trains.rate_hz)]
    return case.approvals.find(
        rule, rate_hz=float(rates.max(initial=0.0)), percent=None if percent is None else percent / MILLI
    )


def train_pause(case: Case) -> Check:
    """Hold the pauses on both sides of every train against the shortest that is known.

    Where the declared number changes there is a pause to keep, however close the pulses stand: trains that touch count
    as one for their duration, and that excuses nothing here.
    """
    trains, onset, train = case.trains, case.schedule.onset_us, case.schedule.train
    after = trains.last[trains.last + 1 < len(onset)]
    before = trains.first[trains.first > 0] - 1
    renumbered = np.flatnonzero(train[1:] != train[:-1])
    rows = np.union1d(np.union1d(after, before), renumbered)
    if not rows.size:
        return nothing_to_check("train_pause", "no pulse before or after a train" if len(trains) else NO_TRAINS)
    gaps = (onset[rows + 1] - onset[rows]) / US
    at = int(gaps.argmin())
    limit, tolerance = float(published()["train_pause"]["shortest"]), published()["trains_found"]["relative_tolerance"]
    short = gaps[at] < limit * (1 - tolerance)
    approval = _approval(case, "train_pause", trains) if short else None
    limit = min(limit, approval.up_to) if approval else limit
    item = at_least("train_pause", float(gaps[at]), limit, tolerance=tolerance, pulse=pulse_number(rows[at] + 1))
    if item.verdict == "exceeded":
        return item.but(note=f"wait {limit:g} s or more{case.approvals.expired('train_pause')}")
    return item.but(approval=str(approval) if approval else None)


def train_count(case: Case) -> Check:
    """Count the trains of the session."""
    trains = case.ordinary
    if not len(trains):
        return nothing_to_check("train_count", NO_TRAINS if not len(case.trains) else OWN_RULE)
    most, count = float(published()["train_count"]["most"]), int(trains.parts.sum())
    item = at_most("train_count", float(count), most)
    if item.verdict == "within":
        return item
    item = item.but(pulse=pulse_number(trains.first[np.searchsorted(np.cumsum(trains.parts), most, side="right")]))
    approval = _approval(case, "train_count", trains)
    if approval and count <= approval.up_to:
        return at_most("train_count", float(count), approval.up_to, pulse=item.pulse, approval=str(approval))
    note = f"more than {most:g} trains were not tested; an approval is needed{case.approvals.expired('train_count')}"
    return item.but(verdict="incomplete", note=note)


def train_rate(case: Case) -> Check:
    """Hold the highest rate against the fastest that was tested."""
    trains = case.ordinary
    rates = np.nan_to_num(trains.rate_hz)
    if not len(trains) or not rates.max() > 0:
        return nothing_to_check("train_rate", NO_TRAINS if not len(case.trains) else OWN_RULE)
    at = int(rates.argmax())
    limit, approval = float(published()["train_rate"]["most"]), None
    if faster(rates[at], limit):
        approval = _approval(case, "train_rate", trains)
        limit = max(limit, approval.up_to) if approval else limit
    item = check(
        "train_rate",
        "exceeded" if faster(rates[at], limit) else "within",
        limit=limit,
        worst=float(rates[at]),
        margin=limit - float(rates[at]),
        pulse=pulse_number(trains.first[at]),
    )
    return with_approval(case, item, approval)


def train_intensity(case: Case) -> Check:
    """Hold the highest intensity in a train against the highest that was tested."""
    early = _needs_resting(case, "train_intensity")
    if early:
        return early
    trains, values = case.ordinary, published()["train_intensity"]
    at = int(trains.output_milli.argmax())
    percent = case.percent_milli(int(trains.output_milli[at]), "resting")
    assert percent is not None  # _needs_resting has asked for the threshold
    limit = float(values["most_repeated"] if case.repeated else values["most"])
    item = at_most("train_intensity", percent / MILLI, limit, pulse=pulse_number(trains.first[at]))
    if item.verdict == "within":
        return item
    approval = _approval(case, "train_intensity", trains)
    if approval and percent <= approval.up_to * MILLI:
        return with_approval(
            case, at_most("train_intensity", percent / MILLI, max(limit, approval.up_to), pulse=item.pulse), approval
        )
    if percent <= values["most"] * MILLI:
        note = f"over {limit:g} % was not tested with more than one train; an approval is needed"
        return item.but(verdict="incomplete", note=note + case.approvals.expired("train_intensity"))
    return with_approval(case, item, None)


def theta_burst(case: Case) -> Check:
    """Hold theta burst against its original description."""
    bursts = case.trains.chosen(case.trains.theta_burst)
    pattern, values = case.protocol.fired.pattern, published()["theta_burst"]
    if not len(bursts):
        return nothing_to_check("theta_burst", "no theta burst in this schedule")
    at = int(bursts.output_milli.argmax())
    pulses, pulse = int(bursts.pulses.sum()), pulse_number(bursts.first[at])
    percent = case.percent_milli(int(bursts.output_milli[at]), "active")
    if percent is None and not pulses > values["most_pulses"]:
        note = "the pattern is described in % of active threshold, and the protocol gives none"
        return check("theta_burst", "incomplete", pulse=pulse, note=note)
    most_percent, most_pulses, approval = float(values["most_percent"]), float(values["most_pulses"]), None
    if percent is None:  # too many pulses at any intensity: no missing threshold hides that
        return with_approval(case, at_most("theta_burst", float(pulses), most_pulses, pulse=pulse, unit="pulses"), None)
    close = _close_bursts(case, bursts)
    if close is not None:  # an approval speaks of intensity and count, not of the rhythm: none covers this
        return close
    if percent > most_percent * MILLI or pulses > most_pulses:
        approval = case.approvals.find("theta_burst", percent=percent / MILLI, pattern=pattern)
    if approval and approval.threshold_percent is not None:
        most_percent, most_pulses = max(most_percent, approval.threshold_percent), max(most_pulses, approval.up_to)
    by_percent = at_most("theta_burst", percent / MILLI, most_percent, pulse=pulse)
    by_pulses = at_most("theta_burst", float(pulses), most_pulses, pulse=pulse, unit="pulses")
    item = by_pulses if pulses / most_pulses > percent / MILLI / most_percent else by_percent
    return with_approval(case, item, approval)


def _close_bursts(case: Case, bursts: Trains) -> Check | None:
    """Theta burst trains that begin sooner after each other than described, or None."""
    every = float(published()["theta_burst"]["intermittent"]["every_s"])
    gaps = np.diff(case.schedule.onset_us[bursts.first]) / US
    if not gaps.size or gaps.min() >= every * (1 - published()["trains_found"]["relative_tolerance"]):
        return None
    at = int(gaps.argmin())
    return at_least(
        "theta_burst",
        float(gaps[at]),
        every,
        unit="s",
        pulse=pulse_number(bursts.first[at + 1]),
        note=f"a new train every {every:g} s was described",
    )
