"""Commands about pose lists: export, import, compare."""

from __future__ import annotations

from pathlib import Path

import click
from coilwright.geometry.files import write_files

from . import show

AnyPath = click.Path(path_type=Path)
FORMATS = click.Choice(["tsv", "matrices"])


@click.command("export")
@click.argument("poses", type=AnyPath)
@click.option("--to", "to_format", type=FORMATS, required=True, help="Format of the receiving side.")
@click.option("-o", "--output", type=AnyPath, required=True, help="File to write; its receipt stands beside it.")
@click.option("--unchecked", is_flag=True, help="Also write poses of which it is not known whether they are reachable.")
@click.option("--force", is_flag=True, help="Replace files that would change.")
@click.option("--json", "json_", is_flag=True, help="Print the summary as JSON.")
def export_command(poses: Path, to_format: str, output: Path, *, unchecked: bool, force: bool, json_: bool) -> None:
    """Write a pose list for a positioning system, with a receipt beside it.

    Poses that cannot be reached are left out and counted.

    Example: coilwright export plan/poses.tsv --to matrices -o rig.json
    """
    from coilwright.runner.exporting import export

    made = export(poses, to_format, output.name, unchecked=unchecked)
    paths = write_files(output.parent, made.files, force=force)
    if json_:
        show.as_json({"poses": made.poses, "left_out": len(made.left_out), "files": [str(path) for path in paths]})
        return
    click.echo(f"{made.poses} poses written, {len(made.left_out)} left out because they cannot be reached")
    show.written(paths)


@click.command("import")
@click.argument("file", type=AnyPath)
@click.option("--from", "from_format", type=FORMATS, required=True, help="Format of the file.")
@click.option("-o", "--output", type=AnyPath, required=True, help="Pose table to write.")
@click.option("--force", is_flag=True, help="Replace files that would change.")
def import_command(file: Path, from_format: str, output: Path, *, force: bool) -> None:
    """Read poses back into a table; whether they can be reached is not known and says n/a.

    Example: coilwright import rig.json --from matrices -o back.tsv
    """
    from coilwright.geometry.exchange import tsv
    from coilwright.geometry.pose_list import PoseList
    from coilwright.runner.exporting import read_poses

    poses = read_poses(file, from_format)
    unknown = ["n/a"] * len(poses.names)
    table = PoseList(
        poses.names,
        poses.pose,
        poses.origin,
        poses.coil,
        poses.turned,
        {column: unknown for column in tsv.COLUMNS if column not in ("pose", *tsv.POSE_COLUMNS)},
    )
    paths = write_files(output.parent, tsv.write(table, output.name), force=force)
    click.echo(f"{len(poses.names)} poses read; whether they can be reached is not known (n/a)")
    show.written(paths)


@click.command("compare")
@click.argument("first", type=AnyPath)
@click.argument("second", type=AnyPath)
@click.option("--position-mm", type=click.FloatRange(min=0), default=0.001, show_default=True, help="Largest distance.")
@click.option("--angle-deg", type=click.FloatRange(min=0), default=0.001, show_default=True, help="Largest angle.")
@click.option("--json", "json_", is_flag=True, help="Print the deviations as JSON.")
@click.pass_context
def compare_command(
    ctx: click.Context, first: Path, second: Path, *, position_mm: float, angle_deg: float, json_: bool
) -> None:
    """Say how far two pose lists are apart; exit code 10 beyond the limits, or where a pose is in one list only.

    Example: coilwright compare plan/poses.tsv back.tsv
    """
    import math

    from coilwright.geometry.deviation import compare
    from coilwright.geometry.errors import InputError
    from coilwright.runner.exporting import read_poses

    if not (math.isfinite(position_mm) and math.isfinite(angle_deg)):
        raise InputError("--position-mm, --angle-deg: expected finite numbers")
    d = compare(read_poses(first), read_poses(second))
    beyond = d.beyond(position_mm, angle_deg)
    failed = bool(beyond or d.only_first or d.only_second)
    columns = (d.position_mm, d.angle_deg, d.axis_deg, d.turn_deg)
    if json_:
        keys = ("position_mm", "angle_deg", "axis_deg", "turn_deg")
        show.as_json(
            {
                "within": not failed,
                "limits": {"position_mm": position_mm, "angle_deg": angle_deg},
                "poses": {
                    name: dict(zip(keys, values, strict=True))
                    for name, *values in zip(d.names, *(c.tolist() for c in columns), strict=True)
                },
                "beyond": beyond,
                "only_first": d.only_first,
                "only_second": d.only_second,
            }
        )
        ctx.exit(10 if failed else 0)
    rows = [
        (name, *(f"{v:.4f}" for v in values), "beyond" if name in set(beyond) else "")
        for name, *values in zip(d.names, *columns, strict=True)
    ]
    show.table(("pose", "position_mm", "angle_deg", "axis_deg", "turn_deg", ""), rows, right=(1, 2, 3, 4))
    for which, names in (("first", d.only_first), ("second", d.only_second)):
        for name in names:
            click.echo(f"only in the {which} list: {name}")
    click.echo(f"{len(d.names)} poses compared, {len(beyond)} beyond {position_mm:g} mm or {angle_deg:g} degrees")
    ctx.exit(10 if failed else 0)
