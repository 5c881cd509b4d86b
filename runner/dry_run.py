"""From a protocol or a plan to a rehearsal: the same schedule object that delivery would take."""

from __future__ import annotations

import datetime as dt
from pathlib import Path

from coilwright.geometry.files import Inputs

from .case import Case
from .ledger import ledger_path, read_ledger
from .planning import plan_poses
from .plans import PLAN_FILE, Plan, is_plan, ledger_folder, plan_schedule, read_plan, schedule_for
from .rehearsal import Rehearsal, rehearse
from .sources import read_source


def load_plan(path: Path, schedule: Path | None = None) -> Plan:
    """Return the plan of a folder, or what the plan of a protocol would be.

    Parameters
    ----------
    path : Path
        A protocol file or the folder of a plan.
    schedule : Path, optional
        A schedule written by another program or by hand, instead of the plan's own.
    """
    path = path.parent if path.name == PLAN_FILE else path
    if is_plan(path):
        plan = read_plan(path)
        return plan if schedule is None else _with_schedule(plan, schedule)
    inputs = Inputs()
    source = read_source(path, inputs)
    planned = plan_poses(source, inputs)
    if schedule is not None:
        return Plan(source, planned.poses, schedule_for(source, planned.poses, schedule), ledger_folder(source))
    return Plan(source, planned.poses, plan_schedule(planned), ledger_folder(source))


def _with_schedule(plan: Plan, path: Path) -> Plan:
    return Plan(plan.source, plan.poses, schedule_for(plan.source, plan.poses, path), plan.ledger)


def dry_run(plan: Plan, now: dt.datetime | None = None) -> Rehearsal:
    """Hold a plan against every limit as if it began at `now` (the local time if left out)."""
    source = plan.source
    earlier = None if plan.ledger is None else read_ledger(plan.ledger, source.protocol.person)
    return rehearse(
        Case(
            plan.schedule,
            source.protocol,
            source.lab,
            source.coil,
            plan.unreachable,
            now or dt.datetime.now().astimezone(),
            earlier,
            ledger_note=None if plan.ledger is None or earlier else _why_empty(plan.ledger, source.protocol.person),
        )
    )


def _why_empty(folder: Path, person: str) -> str:
    """Say that no earlier pulses are counted, and where they were looked for: a lost ledger must not look like none."""
    path = ledger_path(folder, person)
    if not folder.is_dir():
        return f"no earlier pulses counted: the folder {folder} does not exist (the first run makes it)"
    if not path.exists():
        return f"no earlier pulses counted: there is no {path.name} in {folder} (the first run makes it)"
    return f"no earlier pulses counted: {path} holds none"
