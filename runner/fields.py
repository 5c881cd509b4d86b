"""The field of many poses at many points, streamed to disk."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any, Final

import numpy as np
from coilwright.geometry.errors import InputError, ItemError
from coilwright.geometry.field import check_inside, field_at_points
from coilwright.geometry.files import Inputs, read_bytes, stream_file, write_files
from coilwright.geometry.frames import FloatArray
from coilwright.geometry.pose_list import PoseList
from coilwright.geometry.sphere import RESIDUAL_FINDING_MM, Spheres, fit_spheres
from coilwright.geometry.tables import Column, floats, read_tsv, sidecar_bytes
from coilwright.geometry.windings import Elements, coil_elements

from .exporting import read_poses
from .sources import Source, read_head, read_source, read_targets

COLUMNS: Final = {
    "pose": Column("Name of the pose"),
    "point": Column("Name of the point"),
    "ex": Column("Field while the coil current first rises, to the subject's right", "V/m per A/us"),
    "ey": Column("Field while the coil current first rises, anterior", "V/m per A/us"),
    "ez": Column("Field while the coil current first rises, superior", "V/m per A/us"),
}
# Points whose rows are made into text at once.
_ROWS: Final = 50_000


def write_field(poses_path: Path, protocol: Path, points_path: Path, output: Path, *, force: bool) -> dict[str, Any]:
    """Write ``FIELD.tsv`` and its sidecar; memory does not grow with the number of rows.

    Parameters
    ----------
    poses_path, protocol, points_path, output : Path
    force : bool

    Returns
    -------
    dict
        Summary: poses, points, sphere, findings, files.

    Raises
    ------
    InputError
        Frames of different origins, points outside the sphere, a coil without windings.
    """
    inputs = Inputs()
    source = read_source(protocol, inputs)
    head = read_head(source, inputs)
    poses = read_poses(poses_path)
    if poses.origin != head.origin:
        raise InputError(
            f"{poses_path}: its head frame has origin {poses.origin}, the protocol's {head.origin}; they are never"
            " combined without a transform"
        )
    if poses.coil and poses.coil != source.coil.name:
        raise InputError(f"{poses_path}: made for the coil {poses.coil}, the protocol names {source.coil.name}")
    names, points = _points(points_path)
    elements = coil_elements(source.coil)
    spheres, findings = _spheres(source, head.scalp, poses, inputs)
    for i in range(len(poses.names)):
        _check(points_path, names, points, spheres, i)
    rows = _rows(poses, elements, names, points, spheres)
    stream_file(output, rows, force=force)
    sidecar = output.with_suffix(".json")
    frame = {"Frame": {"name": "head", "axes": "RAS", "unit": "mm", "origin": head.origin}}
    write_files(output.parent, {sidecar.name: sidecar_bytes(COLUMNS, frame)}, force=force)
    return {
        "poses": len(poses.names),
        "points": len(names),
        "sphere": {"centre_mm": [round(float(v), 2) for v in spheres.centres[0]]},
        "findings": findings,
        "files": [str(output), str(sidecar)],
    }


def _points(path: Path) -> tuple[list[str], FloatArray]:
    columns = ("point", "x_mm", "y_mm", "z_mm")
    table = read_tsv(read_bytes(path), str(path), columns, exact=True)
    points = np.stack([floats(table[c], str(path), c) for c in columns[1:]], axis=1)
    if not len(points):
        raise InputError(f"{path}:2:1: holds no point")
    return table["point"], points


def _spheres(source: Source, scalp: Any, poses: PoseList, inputs: Inputs) -> tuple[Spheres, list[str]]:
    """The given sphere, or one a pose fitted where its target (or the pose itself) meets the scalp."""
    given = source.protocol.head.sphere
    if given:
        return Spheres.given(given.centre_mm, given.radius_mm, len(poses.names)), []
    at = {target.name: np.array(target.at_mm) for target in read_targets(source, inputs)[0]}
    own = poses.columns.get("target", poses.names)
    near = np.array([at.get(name, poses.pose.origin[i]) for i, name in enumerate(own)])
    spheres = fit_spheres(scalp, scalp.nearest(near).points)
    worst = int(spheres.residual_mm.argmax())
    if spheres.residual_mm[worst] <= RESIDUAL_FINDING_MM:
        return spheres, []
    return spheres, [
        f"{poses.names[worst]}: the fitted sphere leaves {spheres.residual_mm[worst]:.1f} mm; read its field with care"
    ]


def _check(path: Path, names: list[str], points: FloatArray, spheres: Spheres, pose: int) -> None:
    count = len(points)
    one = Spheres(
        np.broadcast_to(spheres.centres[pose], (count, 3)),
        np.broadcast_to(spheres.radii[pose], (count,)),
        np.zeros(count),
    )
    try:
        check_inside(one, points)
    except ItemError as error:
        raise InputError(*(f"{path}:{i + 2}: {names[i]}: {reason}" for i, reason in error.problems[:20])) from None


def _rows(
    poses: PoseList, elements: Elements, names: list[str], points: FloatArray, spheres: Spheres
) -> Iterator[bytes]:
    yield ("\t".join(COLUMNS) + "\n").encode()
    for i, pose in enumerate(poses.names):
        for start in range(0, len(points), _ROWS):
            part = slice(start, start + _ROWS)
            e = field_at_points(poses.pose.matrix[i], elements, points[part], spheres.centres[i])
            lines = (
                f"{pose}\t{point}\t{x!r}\t{y!r}\t{z!r}\n"
                for point, (x, y, z) in zip(names[part], (e + 0.0).tolist(), strict=True)
            )
            yield "".join(lines).encode()
