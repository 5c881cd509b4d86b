"""Rules about single pulses and the session: the lab's own numbers, heat, reach, threshold, sham.

Each is a function from a `Case` to a `Check`.
"""

from __future__ import annotations

import numpy as np

from .case import Case, pulse_number
from .heat import temperatures
from .ledger import pulses_since
from .limits import Check, Verdict, at_least, at_most, check, nothing_to_check, published
from .schedule import MILLI, NO_TRAIN, SHAM, US
from .trains import train_gap_us


def _not_set(item: Check, key: str) -> Check:
    """Say which value of the lab file is missing."""
    return item.but(note=f"{key} is not set in the lab file") if item.verdict == "incomplete" else item


def output(case: Case) -> Check:
    """Hold the highest output against the lab's highest."""
    output = case.schedule.output_milli
    at = int(output.argmax())
    device = float(published()["output"]["most"])
    lab = case.lab.highest_output_percent if case.lab else None
    if lab is None and output[at] > device * MILLI:
        lab = device
    item = at_most("output", output[at] / MILLI, lab, pulse=pulse_number(at))
    return _not_set(item, "highest_output_percent")


def interval(case: Case) -> Check:
    """Hold every interval next to a single pulse against the lab's shortest."""
    schedule = case.schedule
    gaps = np.diff(schedule.onset_us)
    single = schedule.train == NO_TRAIN
    # Inside a declared train a gap of more than 2 s is no train's gap: a shared number excuses no interval.
    same = (schedule.train[1:] == schedule.train[:-1]) & (gaps > train_gap_us())
    rows = np.flatnonzero(single[:-1] | single[1:] | same)
    if not rows.size:
        return nothing_to_check("interval", "no interval next to a single pulse in this schedule")
    at = int(rows[gaps[rows].argmin()])
    floor = case.lab.shortest_interval_s if case.lab else None
    limit, approval = floor, None
    without_approval = float(published()["interval"]["floor_without_approval"])
    if floor is not None and floor < without_approval:
        percent = case.percent_milli(int(schedule.output_milli.max()), "resting")
        approval = case.approvals.find("interval", percent=None if percent is None else percent / MILLI)
        limit = max(floor, approval.up_to if approval else without_approval)
    tolerance = float(published()["trains_found"]["relative_tolerance"])
    item = at_least("interval", gaps[at] / US, limit, tolerance=tolerance, pulse=pulse_number(at + 1))
    if floor is not None and limit != floor:
        item = item.but(
            note=f"the lab's floor of {floor:g} s is below {without_approval:g} s and needs an approval"
            + case.approvals.expired("interval")
        )
    return _not_set(item.but(approval=str(approval) if approval else None), "shortest_interval_s")


def session_pulses(case: Case) -> Check:
    """Count the pulses of the session."""
    limit = case.lab.pulses.session if case.lab else None
    return _not_set(at_most("session_pulses", float(len(case.schedule)), limit), "pulses.session")


def _window(case: Case, rule: str, key: str, limit: int | None) -> Check:
    if case.earlier is None and not (limit is not None and len(case.schedule) > limit):
        note = "the lab file names no ledger, so earlier pulses are not known"
        return check(rule, "incomplete", limit=limit, note=note)
    earlier = pulses_since(case.earlier or (), case.now, float(published()[rule]["hours"]))
    item = at_most(rule, float(earlier + len(case.schedule)), limit)
    if item.verdict == "exceeded" and limit is not None:
        item = item.but(note=f"{earlier} earlier pulses leave {max(0, limit - earlier)}")
    if item.verdict == "within" and case.ledger_note:
        item = item.but(note=case.ledger_note)
    return _not_set(item, key)


def day_pulses(case: Case) -> Check:
    """Count the pulses of the last 24 hours, this session included."""
    return _window(case, "day_pulses", "pulses.day", case.lab.pulses.day if case.lab else None)


def week_pulses(case: Case) -> Check:
    """Count the pulses of the last 7 days, this session included."""
    return _window(case, "week_pulses", "pulses.week", case.lab.pulses.week if case.lab else None)


def session_duration(case: Case) -> Check:
    """Hold the session's length against the lab's longest."""
    limit = case.lab.longest_session_min if case.lab else None
    return _not_set(at_most("session_duration", case.schedule.duration_us / US / 60, limit), "longest_session_min")


def contact_temperature(case: Case) -> Check:
    """Predict the contact face's temperature."""
    rule, heat = "contact_temperature", case.coil.file.heat
    if heat is None:
        return check(rule, "incomplete", note=f"the coil file of {case.coil.name} has no measured heat constants")
    values = published()[rule]
    reached = temperatures(case.schedule, heat, skin_c=float(values["skin_c"]), start_c=case.start_c)
    at = int(reached.argmax())
    lab = case.lab.contact_temperature_c if case.lab else None
    if lab is None:
        item = check(rule, "incomplete", worst=float(reached[at]), pulse=pulse_number(at))
        return _not_set(item, "contact_temperature_c")
    stop, approval = lab.stop, None
    if stop > float(values["highest_without_approval"]):
        approval = case.approvals.find(rule)
        stop = min(stop, approval.up_to) if approval else float(values["highest_without_approval"])
    # The stop itself is refused: a predicted temperature must stay below it.
    verdict: Verdict = (
        "exceeded" if not reached[at] < stop else "caution" if not reached[at] < lab.caution else "within"
    )
    note: str | None = None
    if case.coil.file.generic and verdict == "within":
        verdict, note = "caution", "the coil is generic: its heat constants are not measured; use your coil's file"
    if verdict == "exceeded":
        note = "space the pulses out, lower the output, or let the coil cool" + case.approvals.expired(rule)
    return check(
        rule,
        verdict,
        limit=stop,
        worst=float(reached[at]),
        margin=stop - float(reached[at]),
        pulse=pulse_number(at),
        approval=str(approval) if approval else None,
        note=note,
    )


def pose_reachable(case: Case) -> Check:
    """Ask whether every pose that is fired at can be reached; say which were left out."""
    names = [case.schedule.pose_names[i] for i in np.unique(case.schedule.pose)]
    fired = [name for name in names if name in case.unreachable]
    left_out = {name: reason for name, reason in case.unreachable.items() if name not in fired}
    item = check("pose_reachable", "within", limit=0.0, worst=float(len(fired)), margin=0.0 - len(fired))
    if fired:
        return item.but(verdict="exceeded", note=f"{fired[0]}: {case.unreachable[fired[0]]}")
    if not names:
        return item.but(verdict="exceeded", note="no pose of this protocol can be reached")
    if not left_out:
        return item
    first = next(iter(left_out))
    total = len(set(case.schedule.pose_names) | set(case.unreachable))
    note = f"left out: {len(left_out)} of {total} poses ({first}: {left_out[first]})"
    return item.but(verdict="caution", note=note)


def threshold_method(case: Case) -> Check:
    """Ask how the threshold was found."""
    thresholds = case.protocol.threshold
    if not thresholds:
        if len(case.trains):
            return check("threshold_method", "incomplete", note="trains are judged in % of threshold; give threshold")
        return nothing_to_check("threshold_method", "no limit of this schedule is in % of threshold")
    if any(item.method == "visible_twitch" for item in thresholds):
        factor = published()["threshold_method"]["visible_twitch_factor_per_mille"] / MILLI
        note = f"threshold by visible twitch: intensities count {factor:g} times as high in every table"
        return check("threshold_method", "caution", note=note)
    return check("threshold_method", "within")


def sham_method(case: Case) -> Check:
    """Ask how sham is made."""
    sham = np.flatnonzero(case.schedule.kind == SHAM)
    if not sham.size:
        return nothing_to_check("sham_method", "no sham in this schedule")
    if case.lab is None or case.lab.sham in (None, "none"):
        note = "the lab file does not say how sham is made (sham: tilted_coil or sham_coil)"
        return check("sham_method", "incomplete", pulse=pulse_number(sham[0]), note=note)
    return check("sham_method", "within", note=f"by {case.lab.sham.replace('_', ' ')}")
