"""A schedule against every rule: what the dry run shows, and what delivery asks before it opens a port."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from . import session_rules, train_rules
from .case import Case
from .limits import NOT_CHECKED, RULES, Check, nothing_to_check
from .schedule import US

_RULES: Final[dict[str, Callable[[Case], Check]]] = {
    "output": session_rules.output,
    "interval": session_rules.interval,
    "train_duration": train_rules.train_duration,
    "train_pulses": train_rules.train_pulses,
    "train_pause": train_rules.train_pause,
    "train_count": train_rules.train_count,
    "train_rate": train_rules.train_rate,
    "train_intensity": train_rules.train_intensity,
    "theta_burst": train_rules.theta_burst,
    "session_pulses": session_rules.session_pulses,
    "day_pulses": session_rules.day_pulses,
    "week_pulses": session_rules.week_pulses,
    "session_duration": session_rules.session_duration,
    "contact_temperature": session_rules.contact_temperature,
    "pose_reachable": session_rules.pose_reachable,
    "threshold_method": session_rules.threshold_method,
    "sham_method": session_rules.sham_method,
}


@dataclass(frozen=True)
class Rehearsal:
    """The answer: a verdict, a check a rule, totals."""

    checks: tuple[Check, ...]
    totals: Mapping[str, float]

    @property
    def verdict(self) -> str:
        """The worst of the checks: exceeded, else incomplete, else within the checked limits."""
        verdicts = {item.verdict for item in self.checks}
        return next((v for v in ("exceeded", "incomplete") if v in verdicts), "within_checked_limits")

    def as_json(self) -> dict[str, Any]:
        """Return what ``dry-run --json`` prints."""
        return {
            "verdict": self.verdict,
            "checks": [vars(item) for item in self.checks],
            "not_checked": list(NOT_CHECKED),
            "totals": dict(self.totals),
        }


def rehearse(case: Case) -> Rehearsal:
    """Hold a schedule against every rule.

    Parameters
    ----------
    case : Case

    Returns
    -------
    Rehearsal
        One check for each of `limits.RULES`, in their order.
    """
    checks = tuple(_RULES[rule](case) if len(case.schedule) else _empty(rule, case) for rule in RULES)
    totals = {
        "pulses": len(case.schedule),
        "duration_s": case.schedule.duration_us / US,
        "poses": len(np.unique(case.schedule.pose)),
    }
    return Rehearsal(checks, totals)


def _empty(rule: str, case: Case) -> Check:
    return (
        session_rules.pose_reachable(case)
        if rule == "pose_reachable"
        else nothing_to_check(rule, "no pulse in this schedule")
    )
