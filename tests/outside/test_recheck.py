"""The rules against a re-checker that was written from the limits alone, without sight of the rules.

Clean schedules (train numbers change only where a train ends) must get the same verdict, rule by rule. On any other
schedule the rules may be stricter, never milder: they also hold short pauses between numbered trains that touch, and
gaps inside one number, which the re-checker's reading lets pass.
"""

from __future__ import annotations

import datetime as dt
from fractions import Fraction
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from coilwright.geometry.coil import Coil, CoilFile, Heat
from coilwright.geometry.documents import Document, validate
from coilwright.runner.case import Case
from coilwright.runner.lab import LabFile
from coilwright.runner.ledger import Entry
from coilwright.runner.protocol import Protocol
from coilwright.runner.rehearsal import rehearse
from coilwright.runner.schedule import Schedule
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from tests.conftest import LAB, PROTOCOL, changed

from . import rechecker

NOW = dt.datetime(2026, 5, 4, 12, 0, tzinfo=dt.timezone(dt.timedelta(hours=2)))
SEVERITY = {"within": 0, "caution": 1, "incomplete": 2, "exceeded": 3}
THRESHOLD = 50


def model(kind: Any, value: Any) -> Any:
    return validate(Document("f.yaml", value, {(): (1, 1)}), kind)


def coil(heat: dict[str, float] | None, *, generic: bool) -> Coil:
    value = {
        "coilwright_coil": 1,
        "name": "c",
        "casing": [{"box": {"size_mm": [10, 10, 10], "centre_mm": [0, 0, -5]}}],
        "slope_a_per_us_at_full_output": 100,
        "waveform": {"kind": "monophasic"},
        "generic": generic,
    }
    file: CoilFile = model(CoilFile, value)
    return Coil(file.model_copy(update={"heat": Heat(**heat) if heat else None}), ())


# Gaps in us that stand at, just beside and far from every spacing the rules know.
GAPS = st.one_of(
    st.sampled_from(
        [4_996_000, 4_995_000, 4_995_001, 5_000_000, 3_996_000, 3_995_999, 4_000_000, 2_997_000, 2_996_999]
    ),
    st.sampled_from([2_002_001, 2_002_000, 2_500_000, 30_000_000, 600_000_000]),
    st.integers(2_002_001, 40_000_000),
)
INNER = st.one_of(
    st.sampled_from([1_000_000, 200_000, 100_000, 50_000, 49_950, 49_949, 40_000, 39_960, 39_959, 20_000, 2_000_000]),
    st.integers(15_000, 2_002_000),
)
OUTPUTS = st.sampled_from([40, 45, 50, 51, 55, 56, 60, 61, 65, 66, 80, 90, 91])


@st.composite
def segments(draw: st.DrawFn, *, clean: bool) -> list[tuple[int, int, int]]:
    """Pulses as (gap before, output, train)."""
    pulses: list[tuple[int, int, int]] = []
    number = 0
    for _ in range(draw(st.integers(1, 5))):
        gap = draw(GAPS) if clean or draw(st.booleans()) else draw(INNER)
        kind = draw(st.sampled_from(["single", "declared", "found", "theta"]))
        output = draw(OUTPUTS)
        if kind == "single":
            pulses.append((gap, output, 0))
            continue
        if kind == "theta":
            inner = ([20_000, 20_000, 160_000] * draw(st.sampled_from([9, 10, 11, 100])))[:-1]
        else:
            inner = [draw(INNER)] * draw(st.sampled_from([0, 1, 6, 7, 19, 20, 27, 29, 31, 40]))
        declared = 0 if kind == "found" else (number := number + 1)
        if not clean and draw(st.booleans()):
            declared = draw(st.integers(0, 2))
        pulses.append((gap, output, declared))
        pulses += [(g, output, declared) for g in inner]
    if clean:  # where the number changes, the train before has ended
        changes = [i > 0 and pulses[i][2] != pulses[i - 1][2] for i in range(len(pulses))]
        pulses = [(max(g, 2_002_001) if c else g, o, n) for c, (g, o, n) in zip(changes, pulses, strict=True)]
    return pulses


@st.composite
def labs(draw: st.DrawFn) -> dict[str, Any]:
    changes: dict[str, Any] = {}
    for key, values in {
        "highest_output_percent": [None, 55, 90, 100],
        "shortest_interval_s": [None, 2, 3, 4, 5],
        "longest_session_min": [None, 1, 120],
        "pulses.session": [None, 20, 1500],
        "pulses.day": [None, 60, 3000],
        "contact_temperature_c": [None, {"caution": 39, "stop": 41}, {"caution": 30, "stop": 45}],
        "sham": [None, "none", "tilted_coil"],
    }.items():
        changes[key] = draw(st.sampled_from(values))
    approvals = []
    for _ in range(draw(st.integers(0, 2))):
        rules = ["train_duration", "train_pulses", "train_pause", "train_count", "train_rate", "train_intensity"]
        approvals.append(
            {
                "rule": draw(st.lists(st.sampled_from(rules), min_size=1, max_size=3, unique=True)),
                "rate_hz": draw(st.sampled_from([10, 20, 25, 60])),
                "threshold_percent": draw(st.sampled_from([100, 110, 130, 200])),
                "up_to": draw(st.sampled_from([0.5, 3, 4, 12, 30, 60, 140])),
                "reference": "EC 1",
                "approved_by": "physician",
                "until": draw(st.sampled_from(["2026-05-03", "2026-05-04", "2027-01-01"])),
            }
        )
    if draw(st.booleans()):
        approvals.append(
            {
                "rule": "theta_burst",
                "pattern": draw(st.sampled_from(["intermittent_theta_burst", "continuous_theta_burst"])),
                "threshold_percent": draw(st.sampled_from([90, 110, 130])),
                "up_to": draw(st.sampled_from([300, 600, 1200])),
                "reference": "EC 2",
                "approved_by": "physician",
                "until": "2026-12-31",
            }
        )
    if draw(st.booleans()):
        approvals.append(
            {"rule": "interval", "up_to": 2.5, "reference": "EC 3", "approved_by": "physician", "until": "2026-12-31"}
        )
    return changed(LAB, changes) | {"approvals": approvals}


def both(
    pulses: list[tuple[int, int, int]],
    lab: dict[str, Any],
    kinds: dict[str, str],
    pattern: str | None,
    rate: int | None,
    heat: dict[str, float] | None,
    earlier: list[tuple[dt.datetime, int]] | None,
    *,
    generic: bool,
    sham: bool,
) -> tuple[dict[str, str], dict[str, str]]:
    onset = np.cumsum([0, *(gap for gap, _, _ in pulses[1:])])
    protocol = changed(
        PROTOCOL,
        {
            "threshold": [{"output_percent": THRESHOLD, "kind": k, "method": m} for k, m in kinds.items()],
            "pulses": {"output_percent": [50]}
            | (
                {"pattern": pattern}
                if pattern
                else {"train": {"rate_hz": rate, "pulses": 2, "pause_s": 5}}
                if rate
                else {"interval_s": 5}
            ),
        },
    )
    schedule = Schedule(
        onset,
        np.zeros(len(onset)),
        np.array([1000 * output for _, output, _ in pulses]),
        np.full(len(onset), int(sham)),
        np.array([train for _, _, train in pulses]),
        ("a",),
        THRESHOLD * 1000,
        rate if not pattern else None,
    )
    entries = None if earlier is None else tuple(Entry(when, count, "session") for when, count in earlier)
    case = Case(schedule, model(Protocol, protocol), model(LabFile, lab), coil(heat, generic=generic), {}, NOW, entries)
    ours = {check.rule: check.verdict for check in rehearse(case).checks}
    parsed = lab | {"approvals": [a | {"until": dt.date.fromisoformat(a["until"])} for a in lab["approvals"]]}
    theirs = rechecker.recheck(
        [
            rechecker.Pulse(int(t), "a", Fraction(o), sham, n or None)
            for t, (_, o, n) in zip(onset, pulses, strict=True)
        ],
        thresholds={k: (Fraction(THRESHOLD), m) for k, m in kinds.items()},
        pattern=pattern,
        declared_rate_hz=None if rate is None or pattern else Fraction(rate),
        lab=parsed,
        heat=heat,
        generic_coil=generic,
        earlier=earlier,
        now=NOW,
    )
    return ours, theirs


cases = {
    "lab": labs(),
    "kinds": st.dictionaries(st.sampled_from(["resting", "active"]), st.sampled_from(["emg", "visible_twitch"])),
    "pattern": st.sampled_from([None, None, "intermittent_theta_burst", "continuous_theta_burst"]),
    "rate": st.sampled_from([None, None, 1, 5, 10, 20, 25]),
    "heat": st.sampled_from(
        [
            None,
            {"start_c": 22.0, "rise_per_full_pulse_c": 0.02, "cooling_s": 600.0},
            {"start_c": 36.0, "rise_per_full_pulse_c": 0.3, "cooling_s": 60.0},
        ]
    ),
    "earlier": st.sampled_from(
        [None, [], [(NOW - dt.timedelta(hours=24), 50)], [(NOW - dt.timedelta(hours=24, seconds=1), 50)]]
    ),
    "generic": st.booleans(),
    "sham": st.booleans(),
}
# Readings in which the rules are stricter on purpose, even on clean schedules.
STRICTER = {"theta_burst", "day_pulses", "week_pulses"}
FAST = settings(
    max_examples=400, deadline=None, suppress_health_check=[HealthCheck.too_slow, HealthCheck.filter_too_much]
)


@FAST
@given(pulses=segments(clean=True), **cases)
def test_clean_schedules_get_the_same_verdicts(pulses: list[tuple[int, int, int]], **case: Any) -> None:
    if case["pattern"] == "intermittent_theta_burst" and len(pulses) > 30:
        case["pattern"] = "continuous_theta_burst"  # longer trains under that name are stricter here, see below
    ours, theirs = both(pulses, **case)
    different = {r: (ours[r], theirs[r]) for r in theirs if ours[r] != theirs[r] and r not in STRICTER}
    assert not different
    assert all(SEVERITY[ours[rule]] >= SEVERITY[theirs[rule]] for rule in theirs)


@FAST
@given(pulses=segments(clean=False), **cases)
def test_no_schedule_gets_a_milder_verdict_than_from_the_rechecker(
    pulses: list[tuple[int, int, int]], **case: Any
) -> None:
    ours, theirs = both(pulses, **case)
    if case["pattern"] == "intermittent_theta_burst":
        # A train of more than ten bursts is ordinary here and theta burst there: other rules then speak of it.
        assert max(SEVERITY[v] for v in ours.values()) >= max(SEVERITY[v] for v in theirs.values())
        return
    milder = {r: (ours[r], theirs[r]) for r in theirs if SEVERITY[ours[r]] < SEVERITY[theirs[r]]}
    assert not milder


def test_the_two_share_no_code() -> None:
    assert "coilwright" not in Path(rechecker.__file__).read_text()


@pytest.mark.parametrize("gap", [1_000_000, 250_000, 4_000_000])
def test_short_pauses_between_numbered_trains_are_held(gap: int) -> None:
    train = [(50_000, 55, 1)] * 5
    other = [(gap, 55, 2)] + [(50_000, 55, 2)] * 4
    ours, _ = both(
        [(0, 55, 1), *train[1:], *other],
        LAB | {"approvals": []},
        {"resting": "emg"},
        None,
        None,
        None,
        [],
        generic=False,
        sham=False,
    )
    assert ours["train_pause"] == "exceeded"
