"""What the rules look at: one schedule with everything around it, and the words that rules share."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

from coilwright.geometry.coil import Coil

from .lab import Approval, LabFile
from .ledger import Entry
from .limits import Approvals, Check, published
from .protocol import Protocol
from .schedule import MILLI, Schedule
from .trains import Trains, find_trains


@dataclass(frozen=True)
class Case:
    """Everything that the rules look at.

    Attributes
    ----------
    schedule : Schedule
    protocol : Protocol
    lab : LabFile or None
    coil : Coil
    unreachable : mapping from pose to reason
        Poses of the protocol that cannot be reached.
    now : datetime
        With its offset from UTC; approvals and the ledger are read at this time.
    earlier : tuple of Entry, or None
        The person's ledger; None where the lab names none.
    start_c : float, optional
        Temperature of the contact face at the first pulse; the coil file's if left out.
    ledger_note : str, optional
        Why the ledger is empty, where it is.
    """

    schedule: Schedule
    protocol: Protocol
    lab: LabFile | None
    coil: Coil
    unreachable: Mapping[str, str]
    now: dt.datetime
    earlier: tuple[Entry, ...] | None
    start_c: float | None = None
    ledger_note: str | None = None

    @cached_property
    def trains(self) -> Trains:
        """All trains, declared or found."""
        return find_trains(self.schedule, self.protocol.fired.pattern)

    @cached_property
    def ordinary(self) -> Trains:
        """Trains that are not theta burst."""
        return self.trains.chosen(~self.trains.theta_burst)

    @cached_property
    def approvals(self) -> Approvals:
        """The lab's approvals on this day."""
        return Approvals(self.lab, self.now.date())

    @property
    def repeated(self) -> bool:
        """Whether the session holds more than one train."""
        return int(self.trains.parts.sum()) > 1

    def percent_milli(self, output_milli: int, kind: str) -> int | None:
        """Return an output in thousandths of a percent of a threshold, rounded up; None without that threshold.

        A threshold judged by visible twitch is about 11 % higher than one by EMG, so the intensity counts as higher.
        """
        threshold = self.protocol.threshold_of(kind)
        if threshold is None:
            return None
        factor = (
            int(published()["threshold_method"]["visible_twitch_factor_per_mille"])
            if threshold.method == "visible_twitch"
            else MILLI
        )
        scaled = round(threshold.output_percent * MILLI) * MILLI
        return -(-output_milli * 100 * MILLI * factor // scaled)


def pulse_number(index: int) -> int:
    """Return the number of a pulse; pulses count from 1."""
    return int(index) + 1


def with_approval(case: Case, item: Check, approval: Approval | None) -> Check:
    """Say which approval a check relies on; of a check that is exceeded, say what would pass."""
    if approval is not None and item.verdict == "within":
        return item.but(approval=str(approval))
    if item.verdict == "exceeded" and item.note is None:
        return item.but(note=f"lower it to {item.limit:g} or less{case.approvals.expired(item.rule)}")
    return item
