"""The invented example, taken through every step."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from coilwright.geometry.files import Inputs, write_files

from .dry_run import dry_run, load_plan
from .exporting import export
from .planning import Planned, plan_poses
from .plans import POSE_FILES, plan_files, plan_schedule
from .rehearsal import Rehearsal
from .sources import read_source


@dataclass(frozen=True)
class DemoResult:
    """What the demo made."""

    planned: Planned
    rehearsal: Rehearsal
    paths: tuple[Path, ...]

    def smallest_margin(self) -> tuple[str, float] | None:
        """Return the rule with the smallest margin as a share of its limit."""
        shares = [(c.rule, c.margin / abs(c.limit)) for c in self.rehearsal.checks if c.limit and c.margin is not None]
        return min(shares, key=lambda item: item[1], default=None)


def run_demo(folder: Path, template: Mapping[str, bytes], *, force: bool) -> DemoResult:
    """Copy the example to a folder, then place, schedule, rehearse and export it.

    Parameters
    ----------
    folder : Path
    template : mapping from name to bytes
        The example's files.
    force : bool
        Whether files that would change may be replaced.
    """
    paths = write_files(folder, template, force=force)
    inputs = Inputs()
    source = read_source(folder / "protocol.yaml", inputs)
    planned = plan_poses(source, inputs)
    files = plan_files(planned, plan_schedule(planned), inputs)
    paths += write_files(folder / "poses", {name: files[name] for name in POSE_FILES}, force=force)
    plan = write_files(folder / "plan", files, force=force)
    paths += [path for path in plan if path.parent == folder / "plan"]
    for to_format, name in (("tsv", "poses.tsv"), ("matrices", "poses.json")):
        target = folder / "export" / to_format / name
        exported = export(folder / "poses" / "poses.tsv", to_format, target.name)
        paths += write_files(target.parent, exported.files, force=force)
    return DemoResult(planned, dry_run(load_plan(folder / "plan")), tuple(paths))
