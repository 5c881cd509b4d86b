"""Every cell of the published tables at, just below and just above; approvals; the lab's numbers; heat; the ledger.

The tables here are typed a second time from the design notes (LIMITS.md), so that a slip of the hand in limits.yaml
shows. Values are from memory of the papers, as the notes say.
"""

from __future__ import annotations

import datetime as dt
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from coilwright.geometry.coil import Heat, load_coil
from coilwright.geometry.documents import Document, validate
from coilwright.geometry.errors import InputError
from coilwright.geometry.files import Inputs
from coilwright.runner import ledger
from coilwright.runner.case import Case
from coilwright.runner.heat import temperatures
from coilwright.runner.lab import LabFile
from coilwright.runner.limits import RULES, Check, published, table_cell
from coilwright.runner.protocol import Protocol
from coilwright.runner.rehearsal import rehearse
from coilwright.runner.schedule import Schedule, theta_burst_offsets

from tests.conftest import LAB, PROTOCOL, changed

NOW = dt.datetime(2026, 5, 4, 12, 0, tzinfo=dt.timezone(dt.timedelta(hours=2)))
RATES = (1, 5, 10, 20, 25)
SINGLE = {
    1: (1800, 1800, 1800, 360, 50),
    5: (10, 10, 10, 10, 10),
    10: (5, 5, 5, 4.2, 2.9),
    20: (2.05, 2.05, 1.6, 1.0, 0.55),
    25: (1.28, 1.28, 0.84, 0.4, 0.24),
}
REPEATED = {
    1: ((270, 270), (270, 270), (180, 180), (50, 50)),
    5: ((10, 50), (10, 50), (10, 50), (10, 50)),
    10: ((5, 50), (5, 50), (3.2, 32), (2.2, 22)),
    20: ((1.5, 30), (1.2, 24), (0.8, 16), (0.4, 8)),
    25: ((1.0, 25), (0.7, 17), (0.3, 7), (0.2, 5)),
}
CELLS = [(hz, p, SINGLE[hz][c]) for hz in RATES for c, p in enumerate((90, 100, 110, 120, 130))]
REPEATED_CELLS = [(hz, p, *REPEATED[hz][c]) for hz in RATES for c, p in enumerate((100, 110, 120, 130))]


def judge(
    onset_us: Any,
    output: float = 50,
    *,
    train: Any = 0,
    lab: dict[str, Any] | None = None,
    protocol: dict[str, Any] | None = None,
    kind: int = 0,
    rate: float | None = None,
    earlier: tuple[ledger.Entry, ...] | None = (),
    threshold: float = 50,
    unreachable: dict[str, str] | None = None,
) -> dict[str, Check]:
    """Checks by rule for pulses at a threshold of 50 %."""
    onset = np.atleast_1d(np.asarray(onset_us))
    count = len(onset)
    changes = {"threshold": {"output_percent": threshold, "kind": "resting", "method": "emg"}, "pulses.per_pose": 1}
    case = Case(
        Schedule(
            onset,
            np.zeros(count),
            np.full(count, round(output * 1000)),
            np.full(count, kind),
            np.broadcast_to(train, count),
            ("a",),
            round(threshold * 1000),
            rate,
        ),
        model(Protocol, changed(PROTOCOL, changes | (protocol or {}))),
        None if lab == {} else model(LabFile, changed(LAB, lab or {})),
        load_coil("figure8-generic", Inputs()),
        unreachable or {},
        NOW,
        earlier,
    )
    rehearsal = rehearse(case)
    assert [check.rule for check in rehearsal.checks] == list(RULES)
    return {check.rule: check for check in rehearsal.checks}


def model(kind: Any, value: Any) -> Any:
    return validate(Document("f.yaml", value, {(): (1, 1)}), kind)


def burst(hz: float, pulses: int) -> np.ndarray:
    return np.arange(pulses) * round(1e6 / hz)


@pytest.mark.parametrize(("hz", "percent", "seconds"), CELLS)
def test_longest_single_train_at_below_and_above(hz: int, percent: int, seconds: float) -> None:
    output = percent / 2
    most = int(seconds * hz + 1e-9)  # 0.55 s x 20 Hz is 11 pulses, not 12, whatever floating point says
    for pulses, verdict in ((most - 1, "within"), (most, "within"), (most + 1, "exceeded")):
        check = judge(burst(hz, pulses), output, train=1)["train_duration"]
        assert check.verdict == verdict, (pulses, check)
        assert check.limit == pytest.approx(seconds)
        assert check.from_memory
    assert table_cell("train_duration", "seconds", hz, percent * 1000) == seconds
    above = table_cell("train_duration", "seconds", hz, percent * 1000 + 1)
    assert above == (None if percent == 130 else {(h, p): s for h, p, s in CELLS}[hz, percent + 10])


@pytest.mark.parametrize(("hz", "percent", "seconds", "count"), REPEATED_CELLS)
def test_longest_repeated_trains_at_below_and_above(hz: int, percent: int, seconds: float, count: int) -> None:
    for pulses, verdict in ((count - 1, "within"), (count, "within"), (count + 1, "exceeded")):
        one = burst(hz, pulses)
        two = np.concatenate([one, one + one[-1] + 30_000_000])
        checks = judge(two, percent / 2, train=np.repeat([1, 2], pulses))
        assert checks["train_pulses"].verdict == verdict
        # The smaller of sections 1 and 2 counts.
        both = min(seconds, {(h, p): s for h, p, s in CELLS}[hz, percent])
        assert checks["train_duration"].limit == pytest.approx(both)
        assert checks["train_duration"].verdict == ("within" if pulses / hz <= both * (1 + 1e-9) else "exceeded")
        assert checks["train_intensity"].verdict == ("within" if percent <= 110 else "incomplete")


def test_intensities_and_rates_round_up_to_the_next_cell() -> None:
    assert judge(burst(10, 43), 55.5, train=1)["train_duration"].limit == 4.2  # 111 % answers to 120 %
    assert judge(burst(11, 22), 50, train=1)["train_duration"].limit == 2.05  # 11 Hz answers to 20 Hz
    assert judge(burst(0.5, 3), 50, train=1)["train_duration"].limit == 1800  # below 1 Hz: the 1 Hz row
    assert judge(burst(10, 20), 20, train=1)["train_duration"].limit == 5  # 40 % answers to 90 %
    # an onset one microsecond early makes no faster train; one per cent does
    early = burst(20, 10)
    early[5] -= 1
    assert judge(early, 50, train=1)["train_duration"].limit == 2.05
    early[5] -= 500
    assert judge(early, 50, train=1)["train_duration"].limit == 1.28


def test_beyond_the_table_there_is_no_value() -> None:
    checks = judge(burst(10, 3), 66, train=1)
    assert (checks["train_duration"].verdict, checks["train_intensity"].verdict) == ("exceeded", "exceeded")
    assert "beyond the published table" in str(checks["train_duration"].note)
    checks = judge(burst(26, 3), 50, train=1)
    assert (checks["train_rate"].verdict, checks["train_rate"].limit) == ("exceeded", 25)
    assert judge(burst(25, 3), 50, train=1)["train_rate"].verdict == "within"
    assert judge(burst(10, 3), 65, train=1)["train_intensity"].verdict == "within"


@pytest.mark.parametrize(("gap", "verdict"), [(4.994, "exceeded"), (4.995, "within"), (5.0, "within")])
def test_pauses_on_both_sides_of_a_train(gap: float, verdict: str) -> None:
    train = burst(10, 5)
    after = np.append(train, train[-1] + round(gap * 1e6))
    before = np.concatenate([[0], train + round(gap * 1e6)])
    assert judge(after, train=[1] * 5 + [0])["train_pause"].verdict == verdict
    assert judge(before, train=[0] + [1] * 5)["train_pause"].verdict == verdict


def test_ten_trains_were_tested_and_eleven_were_not() -> None:
    for trains, verdict in ((9, "within"), (10, "within"), (11, "incomplete")):
        onset = (np.arange(trains)[:, None] * 40_000_000 + burst(20, 32)).ravel()
        check = judge(onset, 50, train=np.repeat(np.arange(trains) + 1, 32))["train_count"]
        assert check.verdict == verdict
    assert check.pulse == 10 * 32 + 1


def approval(**more: Any) -> dict[str, Any]:
    base = {"reference": "EC 2026-14", "approved_by": "responsible physician", "until": "2026-05-04"}
    return {"approvals": [base | more]}


def test_an_approval_widens_its_rule_for_its_scope_until_its_date() -> None:
    wide = approval(rule="train_duration", rate_hz=10, threshold_percent=120, up_to=4.5)
    for pulses, verdict in ((44, "within"), (45, "within"), (46, "exceeded")):
        check = judge(burst(10, pulses), 60, train=1, lab=wide)["train_duration"]
        assert check.verdict == verdict
        assert (check.approval is not None) == (verdict == "within")
    assert "EC 2026-14" in str(judge(burst(10, 45), 60, train=1, lab=wide)["train_duration"].approval)
    # nothing above either scope, no other rule
    assert judge(burst(10, 45), 60.5, train=1, lab=wide)["train_duration"].verdict == "exceeded"
    assert judge(burst(25, 100), 65, train=1, lab=wide)["train_duration"].verdict == "exceeded"
    assert judge(burst(26, 3), 50, train=1, lab=wide)["train_rate"].verdict == "exceeded"
    late = approval(rule="train_duration", rate_hz=10, threshold_percent=120, up_to=4.5, until="2026-05-03")
    check = judge(burst(10, 45), 60, train=1, lab=late)["train_duration"]
    assert check.verdict == "exceeded"
    assert "expired and not used: EC 2026-14" in str(check.note)


@pytest.mark.parametrize(
    ("rule", "onset", "output", "train", "limit"),
    [
        ("train_rate", burst(30, 3), 50, 1, 30),
        ("train_intensity", burst(10, 3), 70, 1, 140),
        ("train_pulses", np.append(burst(10, 55), 60_000_000), 50, [1] * 55 + [2], 60),
        ("train_pause", np.append(burst(10, 5), 3_400_000), 50, [1] * 5 + [2], 3),
        ("train_count", np.arange(11) * 10_000_000, 50, np.arange(11) + 1, 20),
    ],
)
def test_each_train_rule_has_its_own_approval(rule: str, onset: Any, output: float, train: Any, limit: float) -> None:
    plain = judge(onset, output, train=train)[rule]
    assert plain.verdict in ("exceeded", "incomplete")
    scope = {"rate_hz": 30, "threshold_percent": 150, "up_to": limit}
    assert judge(onset, output, train=train, lab=approval(rule=rule, **scope))[rule].verdict == "within"
    for key, less in (("rate_hz", 0.5 if rule != "train_count" else None), ("threshold_percent", 99)):
        if less is not None:
            narrow = approval(rule=rule, **(scope | {key: less}))
            assert judge(onset, output, train=train, lab=narrow)[rule].verdict == plain.verdict


@pytest.mark.parametrize(
    ("bad", "message"),
    [
        ({"rule": "train_durations"}, "unknown rule 'train_durations'; did you mean 'train_duration'?"),
        ({"rule": []}, "expected a rule or a list of rules"),
        ({"rate_hz": None}, "an approval for trains says its scope: rate_hz and threshold_percent are missing"),
        ({"rule": "theta_burst"}, "an approval for theta burst says its scope"),
        ({"until": "2026-02-30"}, "expected a date such as 2027-06-30"),
        ({"up_to": -1}, "expected more than 0"),
    ],
)
def test_approvals_that_say_too_little_are_refused(bad: dict[str, Any], message: str) -> None:
    value = approval(rule="train_duration", rate_hz=10, threshold_percent=120, up_to=4.5)["approvals"][0] | bad
    with pytest.raises(InputError, match=message.replace("?", r"\?")):
        model(LabFile, changed(LAB, {"approvals": [{k: v for k, v in value.items() if v is not None}]}))


# Theta burst -------------------------------------------------------------------------------------------------------

THETA = {"threshold": {"output_percent": 50, "kind": "active", "method": "emg"}}


@pytest.mark.parametrize("pattern", ["intermittent_theta_burst", "continuous_theta_burst"])
def test_theta_burst_as_described_is_within_and_leaves_the_train_tables(pattern: str) -> None:
    onset, train = theta_burst_offsets(pattern)
    changes = THETA | {"pulses": {"threshold_percent": [80], "pattern": pattern}}
    checks = judge(onset, 40, train=train, protocol=changes)
    assert checks["theta_burst"].verdict == "within"
    assert {checks[r].verdict for r in RULES if r.startswith("train")} == {"within"}
    assert judge(onset, 40.001, train=train, protocol=changes)["theta_burst"].verdict == "exceeded"
    more = np.append(onset, onset[-1] + 6_000_000 + theta_burst_offsets("continuous_theta_burst")[0])
    numbers = np.append(train, np.full(600, train[-1] + 1))
    again = judge(
        more,
        40,
        train=numbers,
        protocol=changes | {"pulses": {"threshold_percent": [80], "pattern": "continuous_theta_burst"}},
    )
    if pattern == "continuous_theta_burst":
        assert again["theta_burst"].verdict == "exceeded"
        assert again["theta_burst"].unit == "pulses"
    resting = judge(onset, 40, train=train, protocol={"pulses": {"threshold_percent": [80], "pattern": pattern}})
    assert resting["theta_burst"].verdict == "incomplete"
    wide = approval(rule="theta_burst", pattern=pattern, threshold_percent=90, up_to=600)
    assert judge(onset, 45, train=train, protocol=changes, lab=wide)["theta_burst"].verdict == "within"
    assert judge(onset, 45.5, train=train, protocol=changes, lab=wide)["theta_burst"].verdict == "exceeded"


@pytest.mark.parametrize("spoil", ["gap", "missing", "nine", "unnamed"])
def test_what_does_not_match_pulse_by_pulse_is_a_train_above_25_hz(spoil: str) -> None:
    onset, train = theta_burst_offsets("continuous_theta_burst")
    changes: dict[str, Any] = THETA | {"pulses": {"threshold_percent": [80], "pattern": "continuous_theta_burst"}}
    if spoil == "gap":
        onset = onset.copy()
        onset[31] += 21  # 0.105 % of 20 ms
    if spoil == "missing":
        onset, train = np.delete(onset, 30), np.delete(train, 30)
    if spoil == "nine":
        onset, train = onset[:27], train[:27]
    if spoil == "unnamed":
        changes = dict(THETA)
    assert judge(onset, 40, train=train, protocol=changes)["train_rate"].verdict == "exceeded"


# The lab's numbers -------------------------------------------------------------------------------------------------

SINGLES = np.arange(10) * 5_000_000


@pytest.mark.parametrize(
    ("rule", "key", "at", "below"),
    [
        ("output", "highest_output_percent", 50, 49.999),
        ("interval", "shortest_interval_s", 5.0, 5.006),
        ("session_pulses", "pulses.session", 10, 9),
        ("day_pulses", "pulses.day", 10, 9),
        ("week_pulses", "pulses.week", 10, 9),
        ("session_duration", "longest_session_min", 0.75, 0.7499),
    ],
)
def test_the_labs_numbers_at_and_beyond_and_missing(rule: str, key: str, at: float, below: float) -> None:
    assert judge(SINGLES, lab={key: at})[rule].verdict == "within"
    over = judge(SINGLES, lab={key: below})[rule]
    assert over.verdict == "exceeded"
    assert over.margin is not None
    assert over.margin < 0
    missing = judge(SINGLES, lab={key: None})[rule]
    assert missing.verdict == "incomplete"
    assert missing.note == f"{key} is not set in the lab file"


def test_without_a_lab_file_nothing_of_the_labs_is_within() -> None:
    checks = judge(SINGLES, lab={}, earlier=None)
    mine = (
        "output",
        "interval",
        "session_pulses",
        "day_pulses",
        "week_pulses",
        "session_duration",
        "contact_temperature",
    )
    assert {checks[rule].verdict for rule in mine} == {"incomplete"}
    assert judge(SINGLES, 101, lab={}, earlier=None)["output"].verdict == "exceeded"


def test_a_floor_below_three_seconds_needs_an_approval() -> None:
    close = np.arange(10) * 2_500_000
    assert judge(close, lab={"shortest_interval_s": 2.5})["interval"].verdict == "exceeded"
    allowed = {"shortest_interval_s": 2.5} | approval(rule="interval", up_to=2.5)
    check = judge(close, lab=allowed)["interval"]
    assert (check.verdict, check.approval is not None) == ("within", True)
    assert judge(np.arange(10) * 3_000_000, lab={"shortest_interval_s": 2.5})["interval"].verdict == "within"


def test_a_shared_number_excuses_no_interval() -> None:
    assert judge(np.arange(10) * 3_000_000, train=1)["interval"].verdict == "exceeded"


def test_sham_reach_and_threshold() -> None:
    assert judge(SINGLES, kind=1)["sham_method"].verdict == "incomplete"
    assert judge(SINGLES, kind=1, lab={"sham": "sham_coil"})["sham_method"].verdict == "within"
    assert judge(SINGLES, unreachable={"a": "left ear"})["pose_reachable"].verdict == "exceeded"
    left_out = judge(SINGLES, unreachable={"b": "left ear"})["pose_reachable"]
    assert (left_out.verdict, left_out.note) == ("caution", "left out: 1 of 2 poses (b: left ear)")
    twitch = {"threshold": {"output_percent": 50, "kind": "resting", "method": "visible_twitch"}}
    checks = judge(burst(10, 45), 54, train=1, protocol=twitch)
    assert checks["threshold_method"].verdict == "caution"
    assert checks["train_duration"].limit == 2.9  # 108 % by twitch counts as 120.2 % and answers to 130 %
    none = {"threshold": None, "pulses.threshold_percent": None, "pulses.output_percent": [50]}
    assert judge(burst(10, 5), train=1, protocol=none)["threshold_method"].verdict == "incomplete"
    assert judge(burst(10, 5), train=1, protocol=none)["train_duration"].verdict == "incomplete"
    assert judge(SINGLES, protocol=none)["threshold_method"].verdict == "within"


def test_an_empty_schedule_has_nothing_to_reach() -> None:
    checks = judge(np.empty(0, dtype=int))
    assert checks["pose_reachable"].verdict == "exceeded"
    assert {c.verdict for r, c in checks.items() if r != "pose_reachable"} == {"within"}


# Heat --------------------------------------------------------------------------------------------------------------


def naive_heat(onset_s: np.ndarray, output: np.ndarray, heat: Heat, skin: float) -> list[float]:
    """Pulse by pulse, as the design notes say it."""
    temperature, last, reached = heat.start_c, 0.0, []
    for t, percent in zip(onset_s, output, strict=True):
        towards = max(skin, heat.start_c)
        temperature = towards + (temperature - towards) * np.exp(-(t - last) / heat.cooling_s)
        temperature += heat.rise_per_full_pulse_c * (percent / 100) ** 2
        last = t
        reached.append(float(temperature))
    return reached


def test_temperatures_against_pulse_by_pulse() -> None:
    rng = np.random.default_rng(3)
    onset = np.cumsum(rng.integers(20_000, 90_000_000, 3000))
    onset -= onset[0]
    output = rng.integers(20, 100, 3000)
    heat = Heat(start_c=22.0, rise_per_full_pulse_c=0.3, cooling_s=300.0)
    s = Schedule(onset, np.zeros(3000), output * 1000, np.zeros(3000), np.zeros(3000), ("a",), None)
    expected = naive_heat(onset / 1e6, output, heat, 33.0)
    np.testing.assert_allclose(temperatures(s, heat, skin_c=33.0), expected, rtol=0, atol=1e-9)


def test_a_predicted_stop_is_refused_and_a_stop_above_41_needs_an_approval() -> None:
    hot = {"contact_temperature_c": {"caution": 23, "stop": 24}}
    # 22 C at the start, towards skin at 33 C with a time constant of 900 s: 45 s warm the face by 0.55 C
    assert judge(SINGLES, lab=hot)["contact_temperature"].verdict == "caution"
    assert (
        judge(SINGLES, lab={"contact_temperature_c": {"caution": 22, "stop": 22.3}})["contact_temperature"].verdict
        == "exceeded"
    )
    loose = judge(SINGLES, lab={"contact_temperature_c": {"caution": 40, "stop": 44}})["contact_temperature"]
    assert loose.limit == 41
    allowed = {"contact_temperature_c": {"caution": 40, "stop": 44}} | approval(rule="contact_temperature", up_to=43)
    assert judge(SINGLES, lab=allowed)["contact_temperature"].limit == 43
    with pytest.raises(InputError, match="the stop 39 is below the caution 40"):
        model(LabFile, changed(LAB, {"contact_temperature_c": {"caution": 40, "stop": 39}}))


# The ledger --------------------------------------------------------------------------------------------------------


def test_the_ledger_only_grows_and_counts_rolling_windows(tmp_path: Path) -> None:
    folder = tmp_path / "ledger"
    assert ledger.read_ledger(folder, "p01") == ()
    summer = dt.timezone(dt.timedelta(hours=2))
    winter = dt.timezone(dt.timedelta(hours=1))
    # the clocks went back on 2026-10-25 at 03:00 summer time
    ledger.append(folder, "p01", ledger.Entry(dt.datetime(2026, 10, 24, 12, 0, tzinfo=summer), 100, "session"))
    ledger.append(folder, "p01", ledger.Entry(dt.datetime(2026, 10, 25, 9, 0, tzinfo=winter), 30, "threshold"))
    entries = ledger.read_ledger(folder, "p01")
    assert [e.pulses for e in entries] == [100, 30]
    # noon in summer time is 11:00 in winter time: 24 hours later by the clock on the wall are 25 hours
    assert ledger.pulses_since(entries, dt.datetime(2026, 10, 25, 11, 0, tzinfo=winter), 24) == 130
    assert ledger.pulses_since(entries, dt.datetime(2026, 10, 25, 11, 0, 1, tzinfo=winter), 24) == 30
    assert ledger.pulses_since(entries, dt.datetime(2026, 10, 25, 12, 0, tzinfo=winter), 168) == 130
    assert (folder / "p01.tsv").read_text().count("person") == 1


@pytest.mark.parametrize(
    ("line", "message"),
    [
        ("p02\t2026-05-04T10:00:00+02:00\t5\tsession\tn/a", "this line is of 'p02', the protocol is of 'p01'"),
        ("p01\t2026-05-04T10:00:00\t5\tsession\tn/a", "expected a time with its offset"),
        ("p01\tyesterday\t5\tsession\tn/a", "expected a time with its offset"),
        ("p01\t2026-05-04T10:00:00+02:00\t-5\tsession\tn/a", "expected a whole number from 0, got '-5'"),
        ("p01\t2026-05-04T10:00:00+02:00\tnan\tsession\tn/a", "expected a whole number from 0, got 'nan'"),
        ("p01\t2026-05-04T10:00:00+02:00", "expected 5 cells"),
    ],
)
def test_a_ledger_that_cannot_be_trusted_is_refused(tmp_path: Path, line: str, message: str) -> None:
    (tmp_path / "p01.tsv").write_text("\t".join(ledger.COLUMNS) + "\n" + line + "\n")
    with pytest.raises(InputError, match=message):
        ledger.read_ledger(tmp_path, "p01")
    with pytest.raises(InputError, match=message):
        ledger.append(tmp_path, "p01", ledger.Entry(NOW, 1, "trial"))


def test_earlier_pulses_count_against_the_day() -> None:
    earlier = (ledger.Entry(NOW - dt.timedelta(hours=2), 2995, "session"),)
    check = judge(SINGLES, earlier=earlier)["day_pulses"]
    assert (check.verdict, check.worst, check.note) == ("exceeded", 3005, "2995 earlier pulses leave 5")
    assert judge(SINGLES, earlier=None)["day_pulses"].verdict == "incomplete"
    assert judge(SINGLES, earlier=None, lab={"pulses.day": 5})["day_pulses"].verdict == "exceeded"


def test_every_number_of_the_limits_has_a_source() -> None:
    for rule, values in published().items():
        assert values["source"], rule
        assert values["from_memory"] in (True, False), rule
