# ruff: noqa: B905, TRY004, PLW2901, RUF007 - kept as it was written, without sight of the rules
"""Independent re-check of a pulse schedule against published and local limits.

Written from LIMITS.md and INTERFACE.md alone, without sight of the program it is
meant to check, so that a mistake in one of the two shows up as a disagreement.
Simple rather than fast: pulse by pulse, exact rational arithmetic everywhere except
in the heat model (an exponential).  Standard library only.

It certifies nothing.  'within' means that the rule found nothing over its limit.

Readings of our own, where neither the design texts nor the brief decide; each takes
the side that widens less or reports more:

* Sham pulses count like active ones in every rule: a tilted coil heats and fires.
* An approval counts only with all its parts: `reference`, `approved_by`, `until` and
  (except for theta_burst, which has two values) `up_to`.
* An approval whose `threshold_percent` cannot be compared, the threshold being
  unknown, does not cover.
* Rules of the whole session (train_pause, train_count, train_rate, train_intensity,
  contact_temperature) and theta_burst need ONE approval that covers all concerned;
  two approvals never add up.  So a pause approval covers no mix of patterns.
* The intensity of a theta-burst train is in % of active threshold, of everything
  else in % of resting threshold.
* A ledger entry dated after `now` counts: the pulses were given, the clock is wrong.
* Output above 100 % is exceeded whatever the lab file says.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import date, datetime, timedelta, timezone
from decimal import Decimal
from fractions import Fraction
from numbers import Rational

WITHIN, CAUTION, EXCEEDED, INCOMPLETE = "within", "caution", "exceeded", "incomplete"

US = 1_000_000  # microseconds in a second
SPACING = Fraction(1, 1000)  # relative tolerance of spacing and rate
DURATION = Fraction(1, 10**9)  # relative tolerance of durations, counts
TRAIN_GAP_US = 2 * US  # pulses this close are one train
PAUSE_S = Fraction(5)
SINGLE_PULSE_FLOOR_S = Fraction(3)
HIGHEST_RATE_HZ = Fraction(25)
HIGHEST_PERCENT = Fraction(130)  # of resting threshold
HIGHEST_PERCENT_REPEATED = Fraction(110)  # tested with repeated trains
MOST_TRAINS = 10
VISIBLE_TWITCH = Fraction("1.113")
THETA_PATTERNS = ("intermittent_theta_burst", "continuous_theta_burst")
THETA_WITHIN_US, THETA_BETWEEN_US = 20_000, 200_000
THETA_FEWEST_BURSTS = 10
THETA_PERCENT = Fraction(80)  # of active threshold
THETA_PULSES = 600
SKIN_C = 33.0
STOP_C = Fraction(41)
TEMPERATURE_SLACK_C = 1e-9  # float noise counts against the session


def _row(text: str) -> tuple[Fraction, ...]:
    return tuple(Fraction(word) for word in text.split())


# LIMITS.md section 1: longest single train, seconds; a '>' cell is its number.
SINGLE_COLUMNS = _row("90 100 110 120 130")
SINGLE_SECONDS = (
    (1, _row("1800 1800 1800 360 50")),
    (5, _row("10 10 10 10 10")),
    (10, _row("5 5 5 4.2 2.9")),
    (20, _row("2.05 2.05 1.6 1.0 0.55")),
    (25, _row("1.28 1.28 0.84 0.4 0.24")),
)
# LIMITS.md section 2: longest train when trains repeat, seconds and pulses.
REPEAT_COLUMNS = _row("100 110 120 130")
REPEAT_SECONDS = (
    (1, _row("270 270 180 50")),
    (5, _row("10 10 10 10")),
    (10, _row("5 5 3.2 2.2")),
    (20, _row("1.5 1.2 0.8 0.4")),
    (25, _row("1.0 0.7 0.3 0.2")),
)
REPEAT_PULSES = (
    (1, _row("270 270 180 50")),
    (5, _row("50 50 50 50")),
    (10, _row("50 50 32 22")),
    (20, _row("30 24 16 8")),
    (25, _row("25 17 7 5")),
)


@dataclass(frozen=True)
class Pulse:
    onset_us: int
    pose: str
    output: Fraction  # percent of stimulator output, rounded down to the coil's step
    sham: bool
    train: int | None


@dataclass(frozen=True)
class _Scope:
    """What an approval has to cover."""

    pattern: str | None
    rate_hz: Fraction | None  # None: a single pulse, which has no rate
    percent: Fraction | None  # None: the threshold is unknown


@dataclass(frozen=True)
class _Group:
    """A train, or a single pulse: a longest run of pulses that belong together."""

    pulses: tuple[Pulse, ...]
    is_train: bool
    pattern: str | None  # the protocol's pattern where the train matches it
    rate_hz: Fraction | None  # None: a single pulse
    percent: Fraction | None  # its highest, of resting threshold (theta burst: of active)

    @property
    def scope(self) -> _Scope:
        return _Scope(self.pattern, self.rate_hz, self.percent)

    @property
    def duration_s(self) -> Fraction:
        span = Fraction(self.pulses[-1].onset_us - self.pulses[0].onset_us, US)
        return max(len(self.pulses) / self.rate_hz, span)


@dataclass(frozen=True)
class _Approval:
    """A complete and unexpired approval of the lab file."""

    rules: frozenset[str]
    pattern: str | None
    rate_hz: Fraction | None
    threshold_percent: Fraction | None
    up_to: Fraction | None

    def covers_train(self, scope: _Scope) -> bool:
        """Pattern and rate lie in the approval's scope."""
        return self.pattern == scope.pattern and (
            self.rate_hz is None or scope.rate_hz is None or _no_faster(scope.rate_hz, self.rate_hz)
        )

    def covers(self, scope: _Scope) -> bool:
        """Pattern, rate and intensity lie in the approval's scope."""
        return self.covers_train(scope) and (
            self.threshold_percent is None or (scope.percent is not None and scope.percent <= self.threshold_percent)
        )


# --- numbers -----------------------------------------------------------------------


def _number(value, name: str) -> Fraction | None:
    """The number as it was written (a float by its shortest decimal); None stays None."""
    if value is None:
        return None
    if isinstance(value, float) and math.isfinite(value):
        return Fraction(repr(value))
    if isinstance(value, Rational) and not isinstance(value, bool):
        return Fraction(value)
    if isinstance(value, Decimal) and value.is_finite():
        return Fraction(value)
    raise ValueError(f"{name}: {value!r} is not a finite number")


def _at_most(value: Fraction, limit: Fraction, tolerance: Fraction) -> bool:
    return value <= limit * (1 + tolerance)


def _no_faster(rate_hz: Fraction, limit_hz: Fraction) -> bool:
    """Rates compare by their periods: 49.95 ms is 20 Hz within 0.1 %."""
    return rate_hz * (1 - SPACING) <= limit_hz


def _at_least(value: Fraction, limit: Fraction, tolerance: Fraction) -> bool:
    return value >= limit * (1 - tolerance)


def _near(value: int, wanted: Fraction | int) -> bool:
    return abs(value - wanted) <= wanted * SPACING


def _percent(output: Fraction, threshold: tuple[Fraction, str] | None) -> Fraction | None:
    if threshold is None:
        return None
    value, method = threshold
    factor = VISIBLE_TWITCH if method == "visible_twitch" else 1
    return 100 * output / value * factor


def _cell(table, columns, rate_hz: Fraction, percent: Fraction) -> Fraction | None:
    """The cell for rate and intensity, both rounded up; None beyond the table."""
    for row_hz, cells in table:
        if _no_faster(rate_hz, Fraction(row_hz)):
            for column, cell in zip(columns, cells, strict=True):
                if percent <= column:
                    return cell
            return None
    return None


# --- reading the input ----------------------------------------------------------------


def _check_pulses(pulses: list[Pulse]) -> None:
    for number, pulse in enumerate(pulses, 1):
        if not isinstance(pulse.onset_us, int) or isinstance(pulse.onset_us, bool):
            raise ValueError(f"pulse {number}: onset_us {pulse.onset_us!r} is not an integer")
        if not isinstance(pulse.output, Rational) or pulse.output < 0:
            raise ValueError(f"pulse {number}: output {pulse.output!r} is not an exact number of 0 or more")
        if number > 1 and pulse.onset_us <= pulses[number - 2].onset_us:
            raise ValueError(f"pulse {number}: onsets must rise")


def _read_thresholds(thresholds) -> dict[str, tuple[Fraction, str]]:
    read = {}
    for kind, (value, method) in thresholds.items():
        value = _number(value, f"{kind} threshold")
        if kind not in ("resting", "active") or method not in ("emg", "visible_twitch"):
            raise ValueError(f"threshold: unknown kind or method: {kind!r}, {method!r}")
        if value is None or value <= 0:
            raise ValueError(f"{kind} threshold: must be above 0")
        read[kind] = (value, method)
    return read


APPROVAL_KEYS = {"rule", "rate_hz", "threshold_percent", "pattern", "up_to", "reference", "approved_by", "until"}


def _read_approvals(lab: dict, today: date) -> list[_Approval]:
    """The approvals that count today; `until` is inclusive."""
    read = []
    for entry in lab.get("approvals") or []:
        unknown = set(entry) - APPROVAL_KEYS
        if unknown:  # it may narrow the scope, so it cannot be passed over
            raise ValueError(f"approval: unknown keys {sorted(unknown)}")
        until = entry.get("until")
        if isinstance(until, datetime):
            until = until.date()
        if not (entry.get("reference") and entry.get("approved_by") and isinstance(until, date) and today <= until):
            continue
        rule = entry.get("rule") or []
        read.append(
            _Approval(
                rules=frozenset([rule] if isinstance(rule, str) else rule),
                pattern=entry.get("pattern"),
                rate_hz=_number(entry.get("rate_hz"), "approval: rate_hz"),
                threshold_percent=_number(entry.get("threshold_percent"), "approval: threshold_percent"),
                up_to=_number(entry.get("up_to"), "approval: up_to"),
            )
        )
    return read


# --- trains -----------------------------------------------------------------------------


def _belong_together(left: Pulse, right: Pulse) -> bool:
    if left.train is not None and left.train == right.train:
        return True
    return _at_most(Fraction(right.onset_us - left.onset_us), Fraction(TRAIN_GAP_US), SPACING)


def _runs(pulses: list[Pulse]) -> list[list[Pulse]]:
    runs: list[list[Pulse]] = []
    for pulse in pulses:
        if runs and _belong_together(runs[-1][-1], pulse):
            runs[-1].append(pulse)
        else:
            runs.append([pulse])
    return runs


def _gaps_us(run: list[Pulse]) -> list[int]:
    return [right.onset_us - left.onset_us for left, right in zip(run, run[1:])]


def _is_theta_burst(run: list[Pulse]) -> bool:
    if len(run) % 3 or len(run) < 3 * THETA_FEWEST_BURSTS:
        return False
    if len({pulse.output for pulse in run}) != 1:
        return False
    bursts = [run[start : start + 3] for start in range(0, len(run), 3)]
    return all(_near(gap, THETA_WITHIN_US) for burst in bursts for gap in _gaps_us(burst)) and all(
        _near(gap, THETA_BETWEEN_US) for gap in _gaps_us([burst[0] for burst in bursts])
    )


def _train_rate_hz(run: list[Pulse], declared_rate_hz: Fraction | None) -> Fraction:
    gaps = _gaps_us(run)
    if not gaps:
        return Fraction(1)  # a declared train of one pulse: the 1 Hz row
    if declared_rate_hz is not None and all(_near(gap, US / declared_rate_hz) for gap in gaps):
        return declared_rate_hz
    return Fraction(US, min(gaps))


def _group(run: list[Pulse], thresholds, pattern, declared_rate_hz) -> _Group:
    is_train = len(run) > 1 or run[0].train is not None
    theta = pattern is not None and is_train and _is_theta_burst(run)
    highest = max(pulse.output for pulse in run)
    return _Group(
        pulses=tuple(run),
        is_train=is_train,
        pattern=pattern if theta else None,
        rate_hz=_train_rate_hz(run, declared_rate_hz) if is_train else None,
        percent=_percent(highest, thresholds.get("active" if theta else "resting")),
    )


@dataclass(frozen=True)
class _Session:
    pulses: list[Pulse]
    groups: list[_Group]
    thresholds: dict[str, tuple[Fraction, str]]
    lab: dict
    approvals: list[_Approval]

    @property
    def trains(self) -> list[_Group]:
        return [group for group in self.groups if group.is_train]

    @property
    def ordinary(self) -> list[_Group]:
        return [train for train in self.trains if train.pattern is None]

    @property
    def theta(self) -> list[_Group]:
        return [train for train in self.trains if train.pattern is not None]

    @property
    def trains_repeat(self) -> bool:
        return len(self.trains) > 1

    def lab_number(self, *keys: str) -> Fraction | None:
        """A number of the lab file; None where it, or the block around it, is missing."""
        value = self.lab
        for key in keys:
            value = (value or {}).get(key)
        return _number(value, ".".join(keys))

    def approved(self, rule: str, scopes: list[_Scope]) -> list[Fraction]:
        """`up_to` of every approval of the rule that covers all the scopes alone."""
        return [
            approval.up_to
            for approval in self.approvals
            if rule in approval.rules and approval.up_to is not None and all(approval.covers(scope) for scope in scopes)
        ]


# --- rules of trains ----------------------------------------------------------------------


def _train_duration(session: _Session) -> str:
    if not session.ordinary:
        return WITHIN
    if "resting" not in session.thresholds:
        return INCOMPLETE
    trains_repeat = session.trains_repeat
    for train in session.ordinary:
        cells = [_cell(SINGLE_SECONDS, SINGLE_COLUMNS, train.rate_hz, train.percent)]
        if trains_repeat:
            cells.append(_cell(REPEAT_SECONDS, REPEAT_COLUMNS, train.rate_hz, train.percent))
        limits = session.approved("train_duration", [train.scope])
        if None not in cells:
            limits.append(min(cells))
        if not any(_at_most(train.duration_s, limit, DURATION) for limit in limits):
            return EXCEEDED
    return WITHIN


def _train_pulses(session: _Session) -> str:
    if not session.ordinary or not session.trains_repeat:
        return WITHIN
    if "resting" not in session.thresholds:
        return INCOMPLETE
    for train in session.ordinary:
        limits = session.approved("train_pulses", [train.scope])
        cell = _cell(REPEAT_PULSES, REPEAT_COLUMNS, train.rate_hz, train.percent)
        if cell is not None:
            limits.append(cell)
        count = Fraction(len(train.pulses))
        if not any(_at_most(count, limit, DURATION) for limit in limits):
            return EXCEEDED
    return WITHIN


def _train_pause(session: _Session) -> str:
    scopes = [train.scope for train in session.trains]
    limit = min([PAUSE_S] + session.approved("train_pause", scopes))
    for left, right in zip(session.groups, session.groups[1:]):
        if left.is_train or right.is_train:
            pause = Fraction(right.pulses[0].onset_us - left.pulses[-1].onset_us, US)
            if not _at_least(pause, limit, SPACING):
                return EXCEEDED
    return WITHIN


def _train_count(session: _Session) -> str:
    scopes = [train.scope for train in session.ordinary]
    most = max([Fraction(MOST_TRAINS)] + session.approved("train_count", scopes))
    return WITHIN if len(session.ordinary) <= most else INCOMPLETE


def _train_rate(session: _Session) -> str:
    if not session.ordinary:
        return WITHIN
    scopes = [train.scope for train in session.ordinary]
    highest = max(train.rate_hz for train in session.ordinary)
    limit = max([HIGHEST_RATE_HZ] + session.approved("train_rate", scopes))
    return WITHIN if _no_faster(highest, limit) else EXCEEDED


def _train_intensity(session: _Session) -> str:
    if not session.ordinary:
        return WITHIN
    if "resting" not in session.thresholds:
        return INCOMPLETE
    scopes = [train.scope for train in session.ordinary]
    highest = max(train.percent for train in session.ordinary)
    if any(highest <= up_to for up_to in session.approved("train_intensity", scopes)):
        return WITHIN
    if highest > HIGHEST_PERCENT:
        return EXCEEDED
    if session.trains_repeat and highest > HIGHEST_PERCENT_REPEATED:
        return INCOMPLETE
    return WITHIN


def _theta_burst(session: _Session) -> str:
    if not session.theta:
        return WITHIN
    if "active" not in session.thresholds:
        return INCOMPLETE
    highest = max(train.percent for train in session.theta)
    count = sum(len(train.pulses) for train in session.theta)
    if highest <= THETA_PERCENT and count <= THETA_PULSES:
        return WITHIN
    for approval in session.approvals:
        if "theta_burst" not in approval.rules:
            continue
        if not all(approval.covers_train(train.scope) for train in session.theta):
            continue
        percent = max(THETA_PERCENT, approval.threshold_percent or 0)
        most = max(THETA_PULSES, approval.up_to or 0)
        if highest <= percent and count <= most:
            return WITHIN
    return EXCEEDED


# --- rules of pulses and of the session ------------------------------------------------------


def _output(session: _Session) -> str:
    highest = max((pulse.output for pulse in session.pulses), default=Fraction(0))
    limit = session.lab_number("highest_output_percent")
    if highest > 100 or (limit is not None and highest > limit):
        return EXCEEDED
    return INCOMPLETE if limit is None else WITHIN


def _interval(session: _Session) -> str:
    owned = [(pulse, group) for group in session.groups for pulse in group.pulses]
    gaps = [(left, right) for left, right in zip(owned, owned[1:]) if left[0].train is None or right[0].train is None]
    if not gaps:
        return WITHIN
    floor = session.lab_number("shortest_interval_s")
    if floor is None:
        return INCOMPLETE
    for (left, left_group), (right, right_group) in gaps:
        gap = Fraction(right.onset_us - left.onset_us, US)
        # An approval for singles must cover the rate that the gap itself amounts to,
        # and the trains at its ends.
        scopes = [
            _Scope(group.pattern, max(1 / gap, group.rate_hz or 0), group.percent)
            for group in (left_group, right_group)
        ]
        published = min([SINGLE_PULSE_FLOOR_S] + session.approved("interval", scopes))
        if not _at_least(gap, max(floor, published), SPACING):
            return EXCEEDED
    return WITHIN


def _pulse_total(session: _Session, key: str, total: int | None) -> str:
    limit = session.lab_number("pulses", key)
    if total is None or limit is None:
        return INCOMPLETE
    return WITHIN if total <= limit else EXCEEDED


def _instant(moment: datetime) -> datetime:
    """Aware times in UTC: Python subtracts two of the same zone by the wall clock."""
    return moment if moment.utcoffset() is None else moment.astimezone(timezone.utc)


def _with_earlier(session: _Session, earlier, now: datetime, hours: int) -> int | None:
    """Pulses of the last `hours` and of this session; None without a ledger."""
    if earlier is None:
        return None
    total = len(session.pulses)
    for moment, count in earlier:
        if count < 0:
            raise ValueError(f"ledger: {count} pulses at {moment}")
        if (moment.utcoffset() is None) != (now.utcoffset() is None):
            raise ValueError("ledger: times with and without a time zone are mixed")
        if _instant(now) - _instant(moment) <= timedelta(hours=hours):
            total += count
    return total


def _session_duration(session: _Session) -> str:
    limit = session.lab_number("longest_session_min")
    if limit is None:
        return INCOMPLETE
    if not session.pulses:
        return WITHIN
    span_us = session.pulses[-1].onset_us - session.pulses[0].onset_us
    return WITHIN if _at_most(Fraction(span_us, 60 * US), limit, DURATION) else EXCEEDED


def _highest_temperature_c(pulses: list[Pulse], start_c: float, rise_c: float, cooling_s: float) -> float:
    """Highest temperature right after a pulse (the start, without pulses)."""
    surroundings = max(SKIN_C, start_c)
    temperature = highest = start_c
    previous_us = None
    for pulse in pulses:
        if previous_us is not None:
            wait_s = (pulse.onset_us - previous_us) / US
            kept = math.exp(-wait_s / cooling_s)
            temperature = surroundings + (temperature - surroundings) * kept
        temperature += rise_c * float(pulse.output / 100) ** 2
        highest = max(highest, temperature)
        previous_us = pulse.onset_us
    return highest


def _contact_temperature(session: _Session, heat: dict | None, generic_coil: bool) -> str:
    if heat is None:
        return INCOMPLETE
    start, rise, cooling = (
        _number(heat.get(key), f"heat.{key}") for key in ("start_c", "rise_per_full_pulse_c", "cooling_s")
    )
    stop = session.lab_number("contact_temperature_c", "stop")
    caution = session.lab_number("contact_temperature_c", "caution")
    if None in (start, rise, cooling, stop):
        return INCOMPLETE
    if rise < 0 or cooling <= 0:
        raise ValueError("heat: rise_per_full_pulse_c below 0, or cooling_s not above 0")
    scopes = [group.scope for group in session.groups]
    stop = min(stop, max([STOP_C] + session.approved("contact_temperature", scopes)))
    highest = _highest_temperature_c(session.pulses, float(start), float(rise), float(cooling))
    highest += TEMPERATURE_SLACK_C
    if highest >= stop:
        return EXCEEDED
    if caution is None:
        return INCOMPLETE
    return CAUTION if highest >= caution or generic_coil else WITHIN


def _threshold_method(session: _Session) -> str:
    if not session.thresholds:
        return INCOMPLETE if session.trains else WITHIN
    methods = [method for _, method in session.thresholds.values()]
    return CAUTION if "visible_twitch" in methods else WITHIN


def _sham_method(session: _Session) -> str:
    made_here = session.lab.get("sham") in ("tilted_coil", "sham_coil")
    needed = any(pulse.sham for pulse in session.pulses)
    return INCOMPLETE if needed and not made_here else WITHIN


def recheck(
    pulses: list[Pulse],
    *,
    thresholds: dict[str, tuple[Fraction, str]],
    pattern: str | None,
    declared_rate_hz: Fraction | None,
    lab: dict,
    heat: dict | None,
    generic_coil: bool,
    earlier: list[tuple[datetime, int]] | None,
    now: datetime,
) -> dict[str, str]:
    """Rule -> 'within', 'caution', 'exceeded' or 'incomplete'.

    `now` is local time: its own date decides whether an approval has run out.
    Input that cannot be judged at all (onsets that do not rise, an unknown kind of
    threshold, an approval with a key that is not understood) raises ValueError.
    """
    _check_pulses(pulses)
    if pattern is not None and pattern not in THETA_PATTERNS:
        raise ValueError(f"pattern: unknown: {pattern!r}")
    declared_rate_hz = _number(declared_rate_hz, "declared_rate_hz")
    if declared_rate_hz is not None and declared_rate_hz <= 0:
        raise ValueError("declared_rate_hz: must be above 0")
    thresholds = _read_thresholds(thresholds)
    session = _Session(
        pulses=pulses,
        groups=[_group(run, thresholds, pattern, declared_rate_hz) for run in _runs(pulses)],
        thresholds=thresholds,
        lab=lab,
        approvals=_read_approvals(lab, now.date()),
    )
    return {
        "output": _output(session),
        "interval": _interval(session),
        "train_duration": _train_duration(session),
        "train_pulses": _train_pulses(session),
        "train_pause": _train_pause(session),
        "train_count": _train_count(session),
        "train_rate": _train_rate(session),
        "train_intensity": _train_intensity(session),
        "theta_burst": _theta_burst(session),
        "session_pulses": _pulse_total(session, "session", len(pulses)),
        "day_pulses": _pulse_total(session, "day", _with_earlier(session, earlier, now, 24)),
        "week_pulses": _pulse_total(session, "week", _with_earlier(session, earlier, now, 168)),
        "session_duration": _session_duration(session),
        "contact_temperature": _contact_temperature(session, heat, generic_coil),
        "threshold_method": _threshold_method(session),
        "sham_method": _sham_method(session),
    }
