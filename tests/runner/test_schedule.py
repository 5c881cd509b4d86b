"""Orders, onsets and the schedule's table: exact, uniform, reproducible, and refused where impossible."""

from __future__ import annotations

import hashlib
from decimal import Decimal
from typing import Any

import numpy as np
import pytest
from coilwright.geometry.documents import Document, validate
from coilwright.geometry.errors import InputError
from coilwright.runner.orders import Constraints, order_entries, sham_entries, williams_rows
from coilwright.runner.protocol import Protocol
from coilwright.runner.schedule import (
    SHAM,
    Schedule,
    build_schedule,
    milli,
    rounded_down,
    theta_burst_offsets,
    train_offsets,
)
from coilwright.runner.schedule_table import percent_text, read_schedule, write_schedule
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import kstest

from tests.conftest import PROTOCOL, changed


def protocol(**changes: Any) -> Protocol:
    value = changed(PROTOCOL, {key.replace("__", "."): v for key, v in changes.items()})
    return validate(Document("p.yaml", value, {(): (1, 1)}), Protocol)


def build(poses: int = 5, origins: np.ndarray | None = None, **changes: Any) -> Schedule:
    names = tuple(f"p{i}" for i in range(poses))
    return build_schedule(
        protocol(**changes), names, np.zeros((poses, 3)) if origins is None else origins, step_percent=1.0
    )


# Orders ------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["shuffled", "blocks", "as_listed"])
def test_every_pose_is_visited_as_often_as_asked(kind: str) -> None:
    schedule = build(7, order__kind=kind, pulses__threshold_percent=[100, 110], pulses__per_pose=3)
    counts = np.unique(np.stack([schedule.pose, schedule.output_milli]), axis=1, return_counts=True)[1]
    assert counts.tolist() == [3] * 14


def test_blocks_hold_every_pose_once_at_one_intensity_and_never_repeat_across_a_border() -> None:
    for seed in range(40):
        s = build(4, order__kind="blocks", order__seed=seed, pulses__threshold_percent=[100, 120], pulses__per_pose=6)
        blocks = s.pose.reshape(-1, 4)
        assert (np.sort(blocks, axis=1) == np.arange(4)).all()
        assert (np.ptp(s.output_milli.reshape(-1, 4), axis=1) == 0).all()
        assert (np.diff(s.pose) != 0).all()
    with pytest.raises(InputError, match="blocks need at least two poses"):
        build(1, order__kind="blocks")


@pytest.mark.parametrize("count", [2, 3, 4, 5, 8, 11, 20])
def test_williams_rows_let_each_follow_each_equally_often(count: int) -> None:
    rows = williams_rows(count)
    assert len(rows) == (2 * count if count % 2 else count)
    assert (np.sort(rows, axis=1) == np.arange(count)).all()
    follows = np.zeros((count, count), dtype=int)
    np.add.at(follows, (rows[:, :-1].ravel(), rows[:, 1:].ravel()), 1)
    expected = (2 if count % 2 else 1) * (1 - np.eye(count, dtype=int))
    assert (follows == expected).all()


def test_balanced_orders_say_how_many_pulses_they_would_need() -> None:
    with pytest.raises(InputError) as refused:
        build(120, order__kind="balanced", pulses__per_pose=1)
    assert str(refused.value) == (
        "order.kind: a balanced order of 120 poses needs 14400 pulses at each intensity (pulses.per_pose a multiple of"
        " 120); this session has 120; say blocks or shuffled"
    )
    s = build(6, order__kind="balanced", pulses__per_pose=12)
    rows = s.pose.reshape(-1, 6)
    follows = np.zeros((6, 6), dtype=int)
    np.add.at(follows, (rows[:, :-1].ravel(), rows[:, 1:].ravel()), 1)
    assert (follows == 2 * (1 - np.eye(6, dtype=int))).all()


@settings(deadline=None)
@given(st.integers(0, 1000), st.integers(3, 12), st.integers(1, 5))
def test_neighbours_keep_apart_or_the_order_is_refused(seed: int, poses: int, per_pose: int) -> None:
    line = np.stack([np.arange(poses) * 10.0, np.zeros(poses), np.zeros(poses)], axis=1)
    try:
        entries = order_entries("shuffled", poses, 1, per_pose, seed=seed, constraints=Constraints(line, apart_mm=15.0))
    except InputError as error:
        assert "impossible" in str(error) or "not proven" in str(error)  # noqa: PT017 - a refusal is an answer
        assert poses < 6
        return
    assert (np.abs(np.diff(line[entries.pose, 0])) >= 15.0).all()
    assert (np.bincount(entries.pose) == per_pose).all()


def test_what_is_impossible_is_refused_with_its_proof() -> None:
    near = np.zeros((3, 3))
    with pytest.raises(InputError, match="impossible: pose 1 has no other pose 5 mm away"):
        order_entries("shuffled", 3, 1, 2, seed=0, constraints=Constraints(near, apart_mm=5.0))
    with pytest.raises(InputError, match="impossible: one pose stands for 4 of 4 visits"):
        order_entries("shuffled", 1, 1, 4, seed=0, constraints=Constraints(near[:1], apart_mm=5.0))
    with pytest.raises(InputError, match="longest_run: impossible: 6 of 6 visits have one intensity"):
        order_entries("shuffled", 3, 1, 2, seed=0, constraints=Constraints(near, longest_run=2))
    with pytest.raises(InputError, match="this kind of order fixes every place"):
        order_entries("as_listed", 3, 1, 2, seed=0, constraints=Constraints(np.eye(3) * 50, apart_mm=5.0))


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 1000))
def test_no_run_of_one_intensity_is_longer_than_asked(seed: int) -> None:
    entries = order_entries("shuffled", 10, 3, 2, seed=seed, constraints=Constraints(np.zeros((10, 3)), longest_run=2))
    runs = np.diff(np.flatnonzero(np.diff(entries.level, prepend=-1, append=-1)))
    assert runs.max() <= 2


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 500), st.integers(2, 12), st.integers(2, 8), st.floats(0.05, 0.6))
def test_sham_is_balanced_over_poses_and_time(seed: int, poses: int, per_pose: int, share: float) -> None:
    pose = np.argsort(np.random.PCG64(seed).random_raw(poses * per_pose)) % poses
    sham = sham_entries(pose, share, seed)
    total = int(sham.sum())
    assert total == round(share * len(pose))
    counts = np.bincount(pose[sham], minlength=poses)
    assert np.ptp(counts) <= 1
    if total:
        # no stretch of time is without its share by more than two
        cumulative = np.cumsum(sham) - total / len(pose) * np.arange(1, len(pose) + 1)
        assert np.abs(cumulative).max() <= 2 + total / poses


def test_sham_asks_for_what_there_is() -> None:
    assert build(order__sham_share=0.2).kind.sum() == 3 * SHAM
    with pytest.raises(InputError, match="more sham visits at a pose than it has"):
        sham_entries(np.array([0, 1, 1, 1, 1, 1]), 0.9, 0)


# Onsets ------------------------------------------------------------------------------------------------------------


def test_jitter_is_uniform_and_exact() -> None:
    s = build(50, pulses__per_pose=100)
    gaps = np.diff(s.onset_us)
    assert gaps.min() >= 5_000_000
    assert gaps.max() <= 7_000_000
    assert kstest((gaps - 5e6) / 2e6, "uniform").pvalue > 1e-3
    assert np.diff(build(pulses__interval_s=5).onset_us).tolist() == [5_000_000] * 14


def test_exponential_intervals_have_a_floor_and_a_flat_hazard() -> None:
    flat = {"floor_s": 4, "mean_s": 6}
    s = build(50, pulses__interval_s=None, pulses__interval_exponential=flat, pulses__per_pose=200)
    waits = (np.diff(s.onset_us) - 4_000_000) / 2e6
    assert waits.min() >= 0
    assert kstest(waits, "expon").pvalue > 1e-3
    cut = build(50, pulses__interval_s=None, pulses__interval_exponential=flat | {"longest_s": 9}, pulses__per_pose=200)
    waits = (np.diff(cut.onset_us) - 4_000_000) / 2e6
    assert waits.max() <= 2.5
    assert kstest(waits, lambda x: -np.expm1(-x) / -np.expm1(-2.5)).pvalue > 1e-3


def test_exponential_integers_do_not_hang_on_the_last_bit_of_a_logarithm() -> None:
    from decimal import Decimal, localcontext

    from coilwright.geometry.draws import Draws, _exact_exponential

    words = Draws(5, "interval").words(300) >> np.uint64(11)
    exact = [_exact_exponential(int(w), 2_000_000, None) for w in words]
    assert Draws(5, "interval").exponential(2_000_000, 300).tolist() == exact
    with localcontext() as context:
        context.prec = 80
        assert exact[0] == int(-2_000_000 * (1 - Decimal(int(words[0])) / 2**53).ln())


@pytest.mark.parametrize(
    ("wrong", "message"),
    [
        ({"floor_s": 4, "mean_s": 4}, "mean_s 4 must be above floor_s 4"),
        ({"floor_s": 4, "mean_s": 6, "longest_s": 3}, "longest_s 3 must be above floor_s 4"),
    ],
)
def test_exponential_intervals_that_make_no_sense(wrong: dict[str, float], message: str) -> None:
    with pytest.raises(InputError, match=message):
        protocol(pulses__interval_s=None, pulses__interval_exponential=wrong)


def test_rests_follow_every_so_many_pulses_and_break_no_train() -> None:
    rest = {"after_pulses": 4, "minutes": 2}
    s = build(5, pulses__interval_s=5, pulses__rest=rest, pulses__per_pose=2)
    assert np.diff(s.onset_us).tolist() == [5_000_000] * 3 + [125_000_000] + [5_000_000] * 3 + [125_000_000, 5_000_000]
    train = {"rate_hz": 10, "pulses": 3, "pause_s": 10}
    s = build(3, pulses__interval_s=None, pulses__train=train, pulses__rest=rest, pulses__per_pose=1)
    assert np.diff(s.onset_us[::3]).tolist() == [10_200_000, 130_200_000]


def test_a_million_onsets_do_not_drift() -> None:
    offsets = train_offsets(3.0, 1_000_001)
    assert offsets[-1] == 333_333_333_333  # a third of a microsecond short, not a third of a second
    s = build(10, pulses__per_pose=10_000, pulses__interval_s=0.1)
    assert s.onset_us[-1] == 99_999 * 100_000


def test_theta_burst_by_arithmetic() -> None:
    # Huang et al. 2005: check values of LIMITS section 4
    offsets, trains = theta_burst_offsets("intermittent_theta_burst")
    assert (len(offsets), offsets[-1], trains[-1]) == (600, 191_840_000, 20)
    assert offsets[:5].tolist() == [0, 20_000, 40_000, 200_000, 220_000]
    offsets, trains = theta_burst_offsets("continuous_theta_burst")
    assert (len(offsets), offsets[-1], trains[-1]) == (600, 39_840_000, 1)


def test_trains_are_numbered_and_pause() -> None:
    s = build(2, pulses__interval_s=None, pulses__train={"rate_hz": 10, "pulses": 4, "pause_s": 30}, pulses__per_pose=2)
    assert s.train.tolist() == np.repeat([1, 2, 3, 4], 4).tolist()
    assert np.diff(s.onset_us).tolist() == ([100_000] * 3 + [30_000_000]) * 3 + [100_000] * 3
    assert (s.pose.reshape(4, 4) == s.pose.reshape(4, 4)[:, :1]).all()


@pytest.mark.parametrize(
    ("threshold", "percent", "step", "milli"),
    [
        (46, 110, 1, 50_000),
        (46, 110, 0.5, 50_500),
        (46, 110, 0.1, 50_600),
        (50, 110, 1, 55_000),
        (33.3, 120, 1, 39_000),
    ],
)
def test_outputs_are_rounded_down_in_decimal(threshold: float, percent: float, step: float, milli: int) -> None:
    assert rounded_down(Decimal(str(threshold)) * Decimal(str(percent)) / 100, Decimal(str(step))) == milli


def test_an_intensity_that_rounds_down_to_nothing_is_refused() -> None:
    with pytest.raises(InputError, match="rounds down to no output at steps of 1 %"):
        build(pulses__threshold_percent=[1])


# The table ---------------------------------------------------------------------------------------------------------

# Made once by this program (2026-12-01); raw PCG64 words and integers give the same bytes on any machine, so a change
# here is a change of what seeds mean, and needs a line in the changelog.
SHA256 = "416c5e7cbf72c0a4e67d665aa514ba90074122a483620175d3e32431bb424667"


def test_the_same_seed_gives_the_same_bytes_on_any_machine() -> None:
    s = build(9, order__sham_share=0.2, order__seed=11, pulses__threshold_percent=[100, 110, 120], pulses__per_pose=4)
    assert hashlib.sha256(write_schedule(s)).hexdigest() == SHA256
    other = build(
        9, order__sham_share=0.2, order__seed=12, pulses__threshold_percent=[100, 110, 120], pulses__per_pose=4
    )
    assert write_schedule(other) != write_schedule(s)


def read(text: str, **more: Any) -> Schedule:
    settings_ = {"reachable": {"a": True, "b": True, "far": False}, "threshold_milli": 46_000, "step_percent": 1.0}
    return read_schedule(text.encode(), "s.tsv", **(settings_ | more))


HEADER = "pulse\tonset_s\tpose\toutput_percent\tthreshold_percent\tkind\ttrain\n"
ROW_1, ROW_2 = "1\t0.000000\ta\t50\t108.696\tactive\tn/a\n", "2\t5.5\tb\t50.6\t108.7\tsham\t3\n"


def test_a_schedule_written_and_read_is_the_same() -> None:
    s = build(5, order__sham_share=0.2)
    back = read(write_schedule(s).decode(), reachable=dict.fromkeys(s.pose_names, True))
    for name in ("onset_us", "pose", "output_milli", "kind", "train"):
        np.testing.assert_array_equal(getattr(back, name), getattr(s, name))
    assert percent_text(50_000, 46_000) == "108.696"


def test_a_schedule_by_hand() -> None:
    s = read(HEADER + ROW_1 + ROW_2)
    assert s.onset_us.tolist() == [0, 5_500_000]
    assert s.output_milli.tolist() == [50_000, 50_000]  # rounded down to the coil's step before it is judged
    assert (s.kind.tolist(), s.train.tolist()) == ([0, 1], [0, 3])


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        ("2\t5.5", "3\t5.5", "3: pulse: expected 2, got '3'; pulses count from 1, one a row"),
        ("2\t5.5", "2\t0", "3: onset_s: 0 is not after 0.000000; onsets rise"),
        ("2\t5.5", "2\tnan", "3: onset_s: expected a number from 0 to 1e9, got 'nan'"),
        ("2\t5.5", "2\t-1", "3: onset_s: expected a number from 0 to 1e9, got '-1'"),
        ("2\t5.5", "2\t1e30", "3: onset_s: expected a number from 0 to 1e9, got '1e30'"),
        ("2\t5.5", "2\t5.5000001", "3: onset_s: finer than the 6 decimals kept here, got '5.5000001'"),
        ("2\t5.5", "2\tlater", "3: onset_s: expected a number, got 'later'"),
        ("1\t0.000000", "1\t1", "2: onset_s: the first onset is 1; onsets count from 0"),
        ("\tb\t", "\tc\t", "3: pose: expected a pose of this protocol, got 'c'"),
        ("\tb\t", "\tfar\t", "3: pose: 'far' cannot be reached (see poses.tsv); it has no place in a schedule"),
        ("\t50.6\t", "\tInfinity\t", "3: output_percent: expected a number from 0 to 1e9, got 'Infinity'"),
        ("\t50.6\t", "\t0.4\t", "3: output_percent: rounds down to no output at steps of 1 %, got '0.4'"),
        ("\tsham\t", "\tplacebo\t", "3: kind: expected one of active, sham, got 'placebo'"),
        ("\t3\n", "\t0\n", "3: train: expected a whole number from 1, or n/a, got '0'"),
        ("\t3\n", "\t1.5\n", "3: train: expected a whole number from 1, or n/a, got '1.5'"),
        (
            "108.7\t",
            "110\t",
            "3: threshold_percent: 110 disagrees with 108.696, computed from the output and the threshold of 46 %",
        ),
    ],
)
def test_what_is_wrong_in_a_schedule_is_one_line(old: str, new: str, line: str) -> None:
    text = HEADER + ROW_1 + ROW_2
    assert old in text
    with pytest.raises(InputError) as refused:
        read(text.replace(old, new))
    assert list(refused.value.lines) == [f"s.tsv:{line}"]


@pytest.mark.parametrize(
    ("percent", "good"), [("108.745", True), ("108.746", False), ("108.646", True), ("108.645", False)]
)
def test_stated_percentages_agree_within_a_twentieth(percent: str, good: bool) -> None:
    text = HEADER + ROW_1.replace("108.696", percent)
    if good:
        read(text)
    else:
        with pytest.raises(InputError, match="disagrees"):
            read(text)


def test_empty_and_headless_schedules_are_refused() -> None:
    with pytest.raises(InputError, match="the schedule holds no pulse"):
        read(HEADER)
    with pytest.raises(InputError, match="the column 'pulse' is missing"):
        read("onset_s\n1\n")
    with pytest.raises(InputError, match="but the protocol has no threshold"):
        read(HEADER + ROW_1, threshold_milli=None)
    assert percent_text(50_000, None) == "n/a"


# Less common ways ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("pattern", "step"), [("intermittent_theta_burst", 200), ("continuous_theta_burst", 40)])
def test_patterns_follow_each_other_at_the_next_full_ten_seconds(pattern: str, step: int) -> None:
    s = build(2, pulses__interval_s=None, pulses__pattern=pattern, pulses__per_pose=1)
    assert len(s) == 1200
    assert s.onset_us[600] == step * 1_000_000
    assert s.train[-1] == 2 * s.train[599]
    assert s.rate_hz is None


def test_outputs_given_as_such_need_no_threshold() -> None:
    s = build(pulses__threshold_percent=None, pulses__output_percent=[55.9, 60], threshold=None)
    assert sorted(set(s.output_milli.tolist())) == [55_000, 60_000]
    assert s.threshold_milli is None
    assert "\tn/a\t" in write_schedule(s).decode()


def test_what_cannot_be_a_schedule() -> None:
    with pytest.raises(InputError, match="no pose of this protocol can be reached"):
        build(0)
    with pytest.raises(InputError, match="at most 20000000 make a session"):
        build(100, pulses__per_pose=1_000_000)
    with pytest.raises(InputError, match=r"output_step_percent: expected a multiple of 0.001, got 0.0015"):
        rounded_down(Decimal(50), Decimal("0.0015"))
    with pytest.raises(InputError, match=r"at most three decimals, got 50.0005"):
        milli(50.0005, "output_percent")
    with pytest.raises(InputError, match=r"pulses.rest.minutes: at most six decimals"):
        build(pulses__rest={"after_pulses": 1, "minutes": 1.00000001})


def test_a_percentage_that_is_none() -> None:
    with pytest.raises(InputError, match="threshold_percent: expected a number or n/a, got 'much'"):
        read(HEADER + ROW_1.replace("108.696", "much"))
    assert read(HEADER + ROW_1 + "2\t5\ta\t50\tn/a\tactive\tn/a\n").duration_us == 5_000_000
    assert read(HEADER + ROW_1).duration_us == 0
