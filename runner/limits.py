"""The published numbers and how a value is held against one: tables, approvals, verdicts. The numbers: limits.yaml."""

from __future__ import annotations

import datetime as dt
from dataclasses import dataclass, replace
from functools import cache
from importlib.resources import files
from typing import Any, Final, Literal, TypeAlias

import yaml

from .lab import Approval, LabFile

Verdict: TypeAlias = Literal["within", "caution", "exceeded", "incomplete"]

RULES: Final = (
    "output",
    "interval",
    "train_duration",
    "train_pulses",
    "train_pause",
    "train_count",
    "train_rate",
    "train_intensity",
    "theta_burst",
    "session_pulses",
    "day_pulses",
    "week_pulses",
    "session_duration",
    "contact_temperature",
    "pose_reachable",
    "threshold_method",
    "sham_method",
)
# A tolerance of 0.1 % is not decided by the last bit of a double.
ROUNDING: Final = 1e-9
NOT_CHECKED: Final = (
    "screening for contraindications (metal, implants, seizure history, pregnancy)",
    "medication, sleep, alcohol and other things that lower the seizure threshold",
    "implants and electronics near the coil",
    "hearing protection, seizure plan and a first-aider in the room",
    "the state of the stimulator, the coil and its cable",
    "whether the head and the coil are where the files say",
    "whether the threshold was measured as the file says",
    "the person's consent and comfort during the session",
)
CAUTIONS: Final = (
    "This tool does not replace local rules, ethics approval, a trained operator, or the device's own safety.",
    "A verdict speaks of the checked limits only; values marked `from memory` must be verified against their source.",
    "Not assessed or marked as a medical device; the user's institution decides.",
)


@cache
def published() -> dict[str, Any]:
    """Return the numbers of limits.yaml."""
    content: dict[str, Any] = yaml.safe_load((files("coilwright.runner") / "limits.yaml").read_bytes())
    return content


@dataclass(frozen=True)
class Check:
    """One rule held against one schedule.

    Attributes
    ----------
    rule : str
    verdict : {"within", "caution", "exceeded", "incomplete"}
    limit, worst, margin : float or None
        In `unit`; the margin is positive on the allowed side.
    unit : str or None
    pulse : int or None
        Number of the pulse that comes nearest to the limit, or goes beyond it first.
    source : str
    from_memory : bool
    approval : str or None
        The local approval that the verdict relies on.
    note : str or None
        What to change, or why there is nothing to check.
    """

    rule: str
    verdict: Verdict
    limit: float | None = None
    worst: float | None = None
    margin: float | None = None
    unit: str | None = None
    pulse: int | None = None
    source: str = ""
    from_memory: bool = False
    approval: str | None = None
    note: str | None = None

    def but(self, **changes: Any) -> Check:
        """Return the check with some attributes changed."""
        return replace(self, **changes)


def check(rule: str, verdict: Verdict, **more: Any) -> Check:
    """Return a check with its rule's source and unit."""
    values = published()[rule]
    base = {"unit": values.get("unit"), "source": values["source"], "from_memory": bool(values["from_memory"])}
    return Check(rule, verdict, **(base | more))


def nothing_to_check(rule: str, why: str) -> Check:
    """Return a check that passes because the schedule holds nothing that the rule speaks of."""
    return check(rule, "within", note=why)


def at_most(rule: str, worst: float, limit: float | None, *, tolerance: float = 0.0, **more: Any) -> Check:
    """Hold a value against a largest one; a limit that is not set makes the rule incomplete."""
    if limit is None:
        return check(rule, "incomplete", worst=worst, **more)
    verdict: Verdict = "within" if worst <= limit * (1 + tolerance) + ROUNDING * tolerance else "exceeded"
    return check(rule, verdict, limit=limit, worst=worst, margin=limit - worst, **more)


def at_least(rule: str, worst: float, limit: float | None, *, tolerance: float = 0.0, **more: Any) -> Check:
    """Hold a value against a smallest one; a limit that is not set makes the rule incomplete."""
    if limit is None:
        return check(rule, "incomplete", worst=worst, **more)
    verdict: Verdict = "within" if worst >= limit * (1 - tolerance) - ROUNDING * tolerance else "exceeded"
    return check(rule, verdict, limit=limit, worst=worst, margin=worst - limit, **more)


def faster(rate_hz: float, limit_hz: float) -> bool:
    """Say whether a rate is above a limit: its period is more than 0.1 % shorter (an onset 1 us early is not).

    Examples
    --------
    >>> faster(1e6 / 49_950, 20.0), faster(1e6 / 49_949, 20.0)
    (False, True)
    """
    tolerance = float(published()["trains_found"]["relative_tolerance"])
    return not rate_hz * (1 - tolerance) <= limit_hz * (1 + 1e-12)


def table_cell(rule: str, values: str, rate_hz: float, percent_milli: int) -> float | None:
    """Look a table up, rounding rate and intensity up to the next row and column; None beyond the table.

    Parameters
    ----------
    rule : str
        ``train_duration`` or ``repeated_trains``.
    values : str
        ``seconds`` or ``pulses``.
    rate_hz : float
        Compared by its period, with a relative tolerance of 0.1 %.
    percent_milli : int
        Thousandths of a percent of resting threshold, compared exactly.

    Examples
    --------
    >>> table_cell("train_duration", "seconds", 10.0, 108_696), table_cell("train_duration", "seconds", 20.0, 130_000)
    (5.0, 0.55)
    """
    table = published()[rule]
    row = next((i for i, hz in enumerate(table["rows_hz"]) if not faster(rate_hz, hz)), None)
    column = next((i for i, p in enumerate(table["columns_percent"]) if percent_milli <= p * 1000), None)
    return None if row is None or column is None else float(table[values][row][column])


@dataclass(frozen=True)
class Approvals:
    """A lab's approvals on one day.

    Parameters
    ----------
    lab : LabFile or None
    today : date
        Local; an approval holds until the end of its last day.
    """

    lab: LabFile | None
    today: dt.date

    def find(
        self, rule: str, *, rate_hz: float | None = None, percent: float | None = None, pattern: str | None = None
    ) -> Approval | None:
        """Return the widest approval that covers a rule at this rate, intensity and pattern."""
        fitting = [a for a in self._of(rule) if self.today <= a.until and _covers(a, rate_hz, percent, pattern)]
        smallest_first = rule in ("interval", "train_pause")
        return min(fitting, key=lambda a: a.up_to if smallest_first else -a.up_to, default=None)

    def expired(self, rule: str) -> str:
        """Return a note about approvals of a rule whose date has passed, or nothing."""
        late = [str(a) for a in self._of(rule) if not self.today <= a.until]
        return f"; expired and not used: {', '.join(late)}" if late else ""

    def _of(self, rule: str) -> list[Approval]:
        return [a for a in (self.lab.approvals if self.lab else ()) if rule in a.rule]


def _covers(approval: Approval, rate_hz: float | None, percent: float | None, pattern: str | None) -> bool:
    if approval.pattern != pattern:
        return False
    rate_fits = approval.rate_hz is None or (rate_hz is not None and not faster(rate_hz, approval.rate_hz))
    percent_fits = approval.threshold_percent is None or (percent is not None and percent <= approval.threshold_percent)
    return rate_fits and percent_fits
