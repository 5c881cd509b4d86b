"""The frozen plan: poses, schedule, copies of every input, tied by hashes. What is approved is what is run."""

from __future__ import annotations

import json
import platform
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any, Final

import numpy as np
from coilwright.geometry.errors import InputError
from coilwright.geometry.exchange import matrices, tsv
from coilwright.geometry.files import Inputs, read_bytes, sha256
from coilwright.geometry.pose_list import PoseList
from coilwright.geometry.reach import Windows
from coilwright.geometry.tables import Column, column_texts, json_bytes, sidecar_bytes, to_tsv

from .planning import Planned
from .schedule import Schedule, build_schedule, output_levels
from .schedule_table import COLUMNS, read_schedule, write_schedule
from .sources import Source, read_source

PLAN_FILE: Final = "plan.json"
SCHEMA: Final = 1
POSES, SCHEDULE = "poses.tsv", "schedule.tsv"
FROZEN: Final = (POSES, "poses.json", SCHEDULE)
POSE_FILES: Final = (POSES, "poses.json", "matrices.json", "tilt.tsv", "tilt.json")
TILT_COLUMNS: Final = {
    "pose": Column("Name of the pose in poses.tsv; poses that cannot be reached have no window"),
    "azimuth_deg": Column(
        "Axis of the tilt: cos(azimuth) x + sin(azimuth) y of the coil, through its origin", "degrees"
    ),
    "dips_towards_deg": Column("The side of the casing that dips towards the head: azimuth + 90", "degrees"),
    "tilt_deg": Column("Largest right-handed tilt about that axis that keeps the margin", "degrees"),
    "blocked_by": Column("What is met next: scalp, the name of a keep-out, or limit"),
}


@dataclass(frozen=True)
class Plan:
    """Everything that a dry run or a delivery needs.

    Attributes
    ----------
    source : Source
    poses : PoseList
        All poses, those that cannot be reached included.
    schedule : Schedule
    ledger : Path or None
        Folder of the ledger.
    """

    source: Source
    poses: PoseList
    schedule: Schedule
    ledger: Path | None

    @property
    def unreachable(self) -> dict[str, str]:
        """Poses that cannot be reached, and why."""
        return unreachable(self.poses)


def unreachable(poses: PoseList) -> dict[str, str]:
    """Return the poses of a table that cannot be reached, and why."""
    cells = zip(poses.names, poses.reachable(), poses.columns["reason"], strict=True)
    return {name: reason for name, reached, reason in cells if not reached}


def ledger_folder(source: Source) -> Path | None:
    """Return the folder of the ledger: relative to the lab file that names it."""
    if source.lab is None or source.lab.ledger is None or source.lab_path is None:
        return None
    return (source.lab_path.parent / source.lab.ledger).resolve()


def plan_schedule(planned: Planned) -> Schedule:
    """Draw the schedule of a protocol over the poses that can be reached; empty if there is none."""
    source, rows = planned.source, np.flatnonzero(planned.reachable)
    names = tuple(planned.poses.names[i] for i in rows)
    step = source.coil.file.output_step_percent
    try:
        if names:
            return build_schedule(source.protocol, names, planned.poses.pose.origin[rows], step_percent=step)
        nothing = np.empty(0, dtype=np.int64)
        return Schedule(nothing, nothing, nothing, nothing, nothing, (), output_levels(source.protocol, step)[1])
    except InputError as error:
        raise InputError(*map(source.document.located, error.lines)) from None


def pose_files(planned: Planned, progress: Callable[[int], None] | None = None) -> dict[str, bytes]:
    """Return ``poses.tsv``, ``tilt.tsv`` with their sidecars, and ``matrices.json``."""
    windows = planned.windows(progress)
    poses = planned.table(windows)
    return tsv.write(poses, POSES) | matrices.write(poses, "matrices.json") | _tilt_files(planned, windows)


def _tilt_files(planned: Planned, windows: Windows) -> dict[str, bytes]:
    names = np.array(planned.poses.names)[planned.reachable]
    count, steps = len(names), len(windows.azimuth_deg)
    columns = {
        "pose": np.repeat(names, steps).tolist(),
        "azimuth_deg": column_texts(np.tile(windows.azimuth_deg, count)),
        "dips_towards_deg": column_texts(np.tile((windows.azimuth_deg + 90.0) % 360.0, count)),
        "tilt_deg": column_texts(windows.tilt_deg.ravel()),
        "blocked_by": [planned.blocker(index) for index in windows.blocked_by.ravel().tolist()],
    }
    reach = planned.source.protocol.reach
    extra = {"TiltLimitDeg": reach.tilt_limit_deg, "MarginMm": reach.margin_mm}
    return {"tilt.tsv": to_tsv(columns), "tilt.json": sidecar_bytes(TILT_COLUMNS, extra)}


def plan_files(
    planned: Planned, schedule: Schedule, inputs: Inputs, progress: Callable[[int], None] | None = None
) -> dict[str, bytes]:
    """Return every file of a frozen plan.

    Raises
    ------
    InputError
        A schedule without a pulse.
    """
    if not len(schedule):
        raise InputError(
            "no pose of this protocol can be reached; there is nothing to schedule (see `coilwright place`)"
        )
    source = planned.source
    files = pose_files(planned, progress)
    files[SCHEDULE] = write_schedule(schedule)
    files["schedule.json"] = sidecar_bytes(COLUMNS, {"Plan": PLAN_FILE})
    copies = _copy_names(inputs)
    recorded = {name: sha256(data) for name, data in files.items()}
    files |= {f"inputs/{copies[path]}": data for path, data in inputs.read.items()}
    ledger = ledger_folder(source)
    region = source.protocol.region
    files[PLAN_FILE] = json_bytes(
        {
            "coilwright_plan": SCHEMA,
            "title": source.protocol.title,
            "person": source.protocol.person,
            "coil": source.coil.name,
            "half_turn_for_second_phase": source.coil.turned,
            "protocol": copies[source.path],
            "seeds": {"order": source.protocol.order.seed, "region": region.seed if region else None},
            "versions": _versions(),
            "ledger": str(ledger) if ledger else None,
            "files": recorded,
            "inputs": {copies[path]: sha256(data) for path, data in sorted(inputs.read.items())},
            "links": [
                {"in": copies[naming], "written": written, "copy": copies[path]}
                for (naming, written), path in sorted(inputs.links.items())
            ],
            "findings": [str(finding) for finding in planned.findings],
            "unreachable": unreachable(planned.poses),
        }
    )
    return files


def _versions() -> dict[str, str]:
    packages = ("coilwright", "numpy", "scipy")
    return {"python": platform.python_version(), **{name: version(name) for name in packages}}


def _copy_names(inputs: Inputs) -> dict[Path, str]:
    """A flat name for the copy of each input, its own where nobody else has it."""
    names: dict[Path, str] = {}
    for path in inputs.read:
        name, k = path.name, 2
        while name in names.values():
            name, k = f"{k}-{path.name}", k + 1
        names[path] = name
    return names


def is_plan(path: Path) -> bool:
    """Say whether a path is the folder of a plan."""
    return path.is_dir()


def read_plan(folder: Path) -> Plan:
    """Read a frozen plan; every file is held against its hash.

    Raises
    ------
    InputError
        A file that is missing or changed by so much as one byte.
    """
    content = _plan_content(folder)
    problems = [*_changed(folder, content["files"]), *_changed(folder / "inputs", content["inputs"])]
    if problems:
        raise InputError(*problems)
    copies = folder / "inputs"
    frozen = {(link["in"], link["written"]): copies / link["copy"] for link in content["links"]}
    source = read_source(copies / content["protocol"], Inputs(frozen=frozen))
    poses = tsv.read(read_bytes(folder / POSES), str(folder / POSES), read_bytes(folder / "poses.json"))
    schedule = schedule_for(source, poses, folder / SCHEDULE)
    ledger = content.get("ledger")
    return Plan(source, poses, schedule, Path(ledger) if ledger else None)


def schedule_for(source: Source, poses: PoseList, path: Path) -> Schedule:
    """Read a schedule file against a protocol and its poses; see `schedule.read_schedule`."""
    step = source.coil.file.output_step_percent
    try:
        train, threshold = source.protocol.fired.train, output_levels(source.protocol, step)[1]
    except InputError as error:
        raise InputError(*map(source.document.located, error.lines)) from None
    return read_schedule(
        read_bytes(path),
        str(path),
        reachable=dict(zip(poses.names, poses.reachable(), strict=True)),
        threshold_milli=threshold,
        step_percent=step,
        rate_hz=train.rate_hz if train else None,
    )


def _plan_content(folder: Path) -> dict[str, Any]:
    path = folder / PLAN_FILE
    if not folder.is_dir() or not path.exists():
        raise InputError(f"{folder}: not a plan (no {PLAN_FILE} in it); make one with `coilwright schedule`")
    try:
        content = json.loads(read_bytes(path))
        if content["coilwright_plan"] != SCHEMA:
            raise InputError(
                f"{path}: a plan of version {content['coilwright_plan']}; this program reads version {SCHEMA}"
            )
        expected: Mapping[str, type] = {"files": dict, "inputs": dict, "links": list, "protocol": str}
        wrong = [key for key, kind in expected.items() if not isinstance(content.get(key), kind)]
    except (ValueError, KeyError, TypeError) as error:
        raise InputError(f"{path}: not the record of a plan ({error!r}); make the plan anew") from None
    if wrong:
        raise InputError(f"{path}: {', '.join(wrong)}: missing or damaged; make the plan anew")
    names = [*content["files"], *content["inputs"], content["protocol"]]
    if any(Path(name).name != name for name in names):
        raise InputError(f"{path}: names a file outside the plan; make the plan anew")
    lost = [n for n in FROZEN if n not in content["files"]]
    lost += [content["protocol"]] if content["protocol"] not in content["inputs"] else []
    if lost:
        raise InputError(f"{path}: records no hash of {', '.join(lost)}; make the plan anew")
    return dict(content)


def _changed(folder: Path, hashes: Mapping[str, str]) -> list[str]:
    problems = []
    for name, expected in hashes.items():
        try:
            found = sha256((folder / name).read_bytes())
        except OSError as error:
            problems.append(f"{folder / name}: cannot be read ({error.strerror}); the plan is not whole")
            continue
        if found != expected:
            problems.append(
                f"{folder / name}: changed since the plan was made (sha256 {found[:12]}... instead of"
                f" {expected[:12]}...); make the plan anew"
            )
    return problems
