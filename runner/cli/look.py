"""Commands that only look: targets, coils, limits, schema, field."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click
from coilwright.geometry.files import Inputs

from . import show

AnyPath = click.Path(path_type=Path)


@click.command("targets")
@click.argument("protocol", type=AnyPath)
@click.option("--json", "json_", is_flag=True, help="Print as JSON.")
def targets_command(protocol: Path, *, json_: bool) -> None:
    """List the targets of a protocol: place, nearest scalp point, depth, direction.

    Example: coilwright targets protocol.yaml
    """
    import numpy as np
    from coilwright.runner.sources import read_head, read_source, read_targets

    inputs = Inputs()
    source = read_source(protocol, inputs)
    head = read_head(source, inputs)
    targets, _ = read_targets(source, inputs)
    found = head.scalp.nearest(np.array([t.at_mm for t in targets]).reshape(-1, 3))
    listed: list[dict[str, Any]] = [
        {
            "name": target.name,
            "at_mm": list(target.at_mm),
            "side": "right" if target.at_mm[0] > 0 else "left" if target.at_mm[0] < 0 else "midline",
            "scalp_mm": [round(float(v), 3) for v in found.points[i]],
            "depth_mm": round(float(found.distance[i]), 3),
            "direction": target.direction.model_dump(exclude_none=True),
            "origin": head.origin,
        }
        for i, target in enumerate(targets)
    ]
    if json_:
        show.as_json(listed)
        return
    rows = [
        (
            t["name"],
            " ".join(f"{v:.1f}" for v in t["at_mm"]),
            t["side"],
            " ".join(f"{v:.1f}" for v in t["scalp_mm"]),
            f"{t['depth_mm']:.1f}",
            ", ".join(f"{k} {v}" for k, v in t["direction"].items()),
        )
        for t in listed
    ]
    click.echo(f"head frame: RAS, mm, origin {head.origin}")
    show.table(("target", "at_mm", "side", "scalp_mm", "depth_mm", "direction"), rows, right=(4,))


@click.command("coils")
@click.option("--json", "json_", is_flag=True, help="Print as JSON.")
def coils_command(*, json_: bool) -> None:
    """List the built-in coils; they are generic and meant to be replaced by your coil's own file.

    Example: coilwright coils
    """
    from coilwright.geometry.coil import BUILT_IN, load_coil

    listed = []
    for name in BUILT_IN:
        coil = load_coil(name, Inputs())
        lowest = min(solid.outline.vertices.min(axis=0).tolist() for solid in coil.solids)
        listed.append(
            {
                "name": coil.name,
                "windings": len(coil.file.windings),
                "slope_a_per_us_at_full_output": coil.file.slope_a_per_us_at_full_output,
                "waveform": coil.file.waveform.kind,
                "stimulating_phase": coil.file.waveform.effective_phase,
                "reaches_back_mm": round(-lowest[0], 1),
                "source": "generic, dimensioned from common practice, no source",
            }
        )
    if json_:
        show.as_json(listed)
        return
    keys = ("name", "windings", "slope_a_per_us_at_full_output", "waveform", "stimulating_phase")
    show.table(
        ("coil", "windings", "A/us at 100 %", "waveform", "phase"),
        [[f"{c[k]:g}" if isinstance(c[k], float) else str(c[k]) for k in keys] for c in listed],
    )
    click.echo(
        "generic, dimensioned from common practice, no source: give your own coil's file before you rely on them"
    )


@click.command("limits")
@click.option("--json", "json_", is_flag=True, help="Print as JSON.")
def limits_command(*, json_: bool) -> None:
    """Print every published limit with its source; `from memory` marks values to verify against the paper.

    Example: coilwright limits
    """
    from coilwright.runner.limits import CAUTIONS, published

    content = published()
    if json_:
        show.as_json(content)
        return
    for rule, values in content.items():
        mark = "; from memory: verify it against the source" if values["from_memory"] else ""
        click.echo(rule)
        show.wrapped(f"source: {values['source']}{mark}", "  ")
        _print_values(values)
        click.echo("")
    for line in CAUTIONS:
        show.wrapped(line)


def _print_values(values: dict[str, Any]) -> None:
    for key, value in values.items():
        if key in ("source", "from_memory", "columns_percent", "rows_hz", "rows_s", "longest_tested"):
            continue
        if not (isinstance(value, list) and value and isinstance(value[0], list)):
            click.echo(f"  {key}: {value}")
            continue
        rows = values.get("rows_hz") or values["rows_s"]
        unit = "Hz" if "rows_hz" in values else "s"
        open_ended = values.get("longest_tested")
        cells = [
            [
                f"{name:g} {unit}",
                *(f"{'>' if open_ended and open_ended[r][c] else ''}{v}" for c, v in enumerate(value[r])),
            ]
            for r, name in enumerate(rows)
        ]
        click.echo(
            f"  {key} by intensity (> the longest that was tested, treated as the limit)"
            if open_ended
            else f"  {key} by intensity"
        )
        show.table(
            ("", *(f"{p} %" for p in values["columns_percent"])),
            [[f"    {row[0]}", *row[1:]] for row in cells],
            right=range(1, 9),
        )


@click.command("schema")
@click.argument("kind", type=click.Choice(["protocol", "lab", "coil"]))
def schema_command(kind: str) -> None:
    """Print the JSON Schema of a file, so that an editor completes and checks its keys.

    Example: coilwright schema protocol
    """
    from coilwright.runner.schemas import schema

    show.as_json(schema(kind))


@click.command("field")
@click.argument("poses", type=AnyPath)
@click.option("--protocol", type=AnyPath, required=True, help="Names coil and head; the sphere comes from it.")
@click.option("--at", "points", type=AnyPath, required=True, help="TSV: point x_mm y_mm z_mm, head frame.")
@click.option("-o", "--output", type=AnyPath, required=True, help="FIELD.tsv: pose point ex ey ez.")
@click.option("--force", is_flag=True, help="Replace a file that would change.")
@click.option("--json", "json_", is_flag=True, help="Print the summary as JSON.")
def field_command(poses: Path, *, protocol: Path, points: Path, output: Path, force: bool, json_: bool) -> None:
    """Compute the field of each pose at each point, V/m for 1 A/us of coil current change, head frame.

    The field is that of the phase in which the current first rises. Example:
    coilwright field plan/poses.tsv --protocol protocol.yaml --at points.tsv -o field.tsv
    """
    from coilwright.runner.fields import write_field

    summary = write_field(poses, protocol, points, output, force=force)
    if json_:
        show.as_json(summary)
        return
    click.echo(
        f"{summary['poses']} poses at {summary['points']} points; sphere centre {summary['sphere']['centre_mm']} mm"
    )
    show.findings(summary["findings"])
    show.written([Path(path) for path in summary["files"]])
