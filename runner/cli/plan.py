"""Commands of the person who plans: demo, init, place, schedule, dry-run."""

from __future__ import annotations

from collections.abc import Mapping
from importlib import resources
from pathlib import Path
from typing import Any

import click
from coilwright.geometry.errors import InputError
from coilwright.geometry.files import Inputs, write_files

from . import show

Folder = click.Path(file_okay=False, path_type=Path)
AnyPath = click.Path(path_type=Path)


def _template(folder: str) -> dict[str, bytes]:
    """The files of a folder of ``coilwright.protocols``."""
    source = resources.files("coilwright.protocols") / folder
    return {item.name: item.read_bytes() for item in sorted(source.iterdir(), key=lambda i: i.name) if item.is_file()}


@click.command("init")
@click.argument("folder", type=Folder, default=Path())
@click.option("--force", is_flag=True, help="Replace files that are there.")
def init_command(folder: Path, *, force: bool) -> None:
    """Write a commented protocol, lab and coil file to start from.

    Example: coilwright init my-study
    """
    show.written(write_files(folder, _template("template"), force=force))
    click.echo(f"edit them, then: coilwright dry-run {folder / 'protocol.yaml'}")


def _planned(protocol: Path) -> tuple[Any, Inputs]:
    from coilwright.runner.planning import plan_poses
    from coilwright.runner.sources import read_source

    inputs = Inputs()
    source = read_source(protocol, inputs)
    return plan_poses(source, inputs), inputs


def _pose_summary(planned: Any) -> dict[str, Any]:
    from coilwright.runner.plans import unreachable

    return {
        "poses": len(planned.poses.names),
        "reachable": int(planned.reachable.sum()),
        "unreachable": unreachable(planned.poses),
        "coil": planned.source.coil.name,
        "half_turn_for_second_phase": planned.source.coil.turned,
        "findings": [str(finding) for finding in planned.findings],
    }


def _print_poses(summary: Mapping[str, Any]) -> None:
    click.echo(f"{summary['poses']} poses for {summary['coil']}, {summary['reachable']} can be reached")
    if summary["half_turn_for_second_phase"]:
        click.echo("the coil stands turned by 180 degrees: the second phase of its pulse stimulates")
    for name, reason in summary["unreachable"].items():
        click.echo(f"cannot be reached: {name}: {reason}")
    show.findings(summary["findings"])


@click.command("place")
@click.argument("protocol", type=AnyPath)
@click.option("-o", "--output", type=Folder, required=True, help="Folder for poses.tsv, matrices.json and tilt.tsv.")
@click.option("--force", is_flag=True, help="Replace files that would change.")
@click.option("--json", "json_", is_flag=True, help="Print the summary as JSON.")
def place_command(protocol: Path, output: Path, *, force: bool, json_: bool) -> None:
    """Turn targets and region into coil poses.

    Example: coilwright place protocol.yaml -o poses
    """
    from coilwright.runner.plans import pose_files

    planned, _ = _planned(protocol)
    with show.progress("tilt windows", int(planned.reachable.sum())) as tick:
        files = pose_files(planned, tick)
    paths = write_files(output, files, force=force)
    summary = _pose_summary(planned)
    if json_:
        show.as_json(summary | {"files": [str(path) for path in paths]})
        return
    _print_poses(summary)
    show.written(paths)


@click.command("schedule")
@click.argument("protocol", type=AnyPath)
@click.option("-o", "--output", type=Folder, required=True, help="Folder of the plan.")
@click.option("--force", is_flag=True, help="Replace files that would change.")
@click.option("--json", "json_", is_flag=True, help="Print the summary as JSON.")
def schedule_command(protocol: Path, output: Path, *, force: bool, json_: bool) -> None:
    """Draw the pulse order and freeze the plan: what is approved is what is run.

    Example: coilwright schedule protocol.yaml -o plan
    """
    from coilwright.runner.plans import plan_files, plan_schedule

    planned, inputs = _planned(protocol)
    schedule = plan_schedule(planned)
    with show.progress("tilt windows", int(planned.reachable.sum())) as tick:
        files = plan_files(planned, schedule, inputs, tick)
    paths = write_files(output, files, force=force)
    summary = _pose_summary(planned) | {"pulses": len(schedule), "duration_s": schedule.duration_us / 1e6}
    if json_:
        show.as_json(summary | {"files": [str(path) for path in paths]})
        return
    _print_poses(summary)
    click.echo(f"{len(schedule)} pulses in {schedule.duration_us / 60e6:.1f} min")
    show.written(paths)
    click.echo(f"next: coilwright dry-run {output}")


@click.command("dry-run")
@click.argument("protocol_or_plan", type=AnyPath)
@click.option("--json", "json_", is_flag=True, help="Print the checks as JSON.")
@click.option("--schedule", type=AnyPath, help="Check this schedule.tsv instead of the plan's own.")
@click.pass_context
def dry_run_command(ctx: click.Context, protocol_or_plan: Path, *, json_: bool, schedule: Path | None) -> None:
    """Hold a whole session against every limit; no device is touched.

    Exit code 0: within the checked limits. 10: a limit is exceeded. 11: a value that only the lab can give is missing.

    Example: coilwright dry-run plan
    """
    from coilwright.runner.dry_run import dry_run, load_plan

    rehearsal = dry_run(load_plan(protocol_or_plan, schedule))
    if json_:
        show.as_json(rehearsal.as_json())
    else:
        print_rehearsal(rehearsal)
    ctx.exit(show.EXIT_CODES[rehearsal.verdict])


def print_rehearsal(rehearsal: Any) -> None:
    """Print checks, notes, sources, what was not checked, the cautions, and the verdict last."""
    from coilwright.runner.limits import CAUTIONS, NOT_CHECKED

    rows = [
        (
            c.rule,
            c.verdict,
            show.number(c.worst),
            show.number(c.limit),
            show.number(c.margin),
            (c.unit or "-").replace("% of ", "% "),
            f"{c.pulse or '-'}",
        )
        for c in rehearsal.checks
    ]
    show.table(("rule", "verdict", "worst", "limit", "margin", "unit", "pulse"), rows, right=(2, 3, 4, 6))
    click.echo("")
    idle = [item.rule for item in rehearsal.checks if item.verdict == "within" and item.worst is None and item.note]
    if idle:
        show.wrapped(f"nothing to check in this schedule: {', '.join(idle)}")
    for item in rehearsal.checks:
        if item.note and item.rule not in idle:
            show.wrapped(f"{item.rule}: {item.note}")
        if item.approval:
            show.wrapped(f"{item.rule}: relies on the local approval {item.approval}")
    click.echo("\nsources (m: from memory, verify before you rely on it)")
    for item in rehearsal.checks:
        show.wrapped(f"{item.rule}{' (m)' if item.from_memory else ''}: {item.source}", "  ")
    click.echo("\nnot checked, no program can know it")
    for line in NOT_CHECKED:
        show.wrapped(f"- {line}", "  ")
    click.echo("")
    for line in CAUTIONS:
        show.wrapped(line)
    totals = rehearsal.totals
    click.echo(f"\n{totals['pulses']} pulses, {totals['poses']} poses, {totals['duration_s'] / 60:.1f} min")
    click.echo(f"verdict: {show.VERDICT_WORDS[rehearsal.verdict]}")


@click.command("demo")
@click.argument("folder", type=Folder, default=Path("coilwright-demo"))
@click.option("--force", is_flag=True, help="Replace files that would change.")
def demo_command(folder: Path, *, force: bool) -> None:
    """Copy the invented example to FOLDER and take it through place, schedule, dry-run and export.

    Lab, head, targets and values are made up.

    Example: coilwright demo my-first-session
    """
    from coilwright.runner.demo import run_demo
    from coilwright.runner.limits import CAUTIONS

    result = run_demo(folder, _template("demo"), force=force)
    _print_poses(_pose_summary(result.planned))
    totals = result.rehearsal.totals
    click.echo(f"{totals['pulses']} pulses in {totals['duration_s'] / 60:.1f} min")
    nearest = result.smallest_margin()
    words = f"; smallest margin: {nearest[0]}, {nearest[1]:.0%} of its limit left" if nearest else ""
    click.echo(f"verdict: {show.VERDICT_WORDS[result.rehearsal.verdict]}{words}")
    show.written(result.paths)
    for line in CAUTIONS:
        show.wrapped(line)
    click.echo(f"next: coilwright dry-run {folder / 'plan'}")
    if result.rehearsal.verdict != "within_checked_limits":
        raise InputError("the demo's own protocol is not within the checked limits; please report this")
