"""TSV with a JSON sidecar: the table that ``place`` writes. RAS, mm; quaternions w x y z; ``n/a`` for missing.

The stimulation extension of BIDS (BEP 037) is a proposal whose names still change: the sidecar carries a schema version
of its own and claims no conformance.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import PurePath
from typing import Any, Final

import numpy as np

from ..errors import InputError
from ..frames import matrix_from_quaternion
from ..pose_list import ORIGINS, PoseList
from ..tables import Column, column_texts, floats, read_tsv, sidecar_bytes, to_tsv

SCHEMA: Final = "coilwright poses 1"
POSE_COLUMNS: Final = ("x_mm", "y_mm", "z_mm", "qw", "qx", "qy", "qz")

COLUMNS: Final[dict[str, Column]] = {
    "pose": Column("Name of the pose, unique in the table"),
    "target": Column("Name of the target that the pose is for; n/a for region poses"),
    "x_mm": Column("Centre of the contact face, head frame, to the subject's right", "mm"),
    "y_mm": Column("Centre of the contact face, head frame, anterior", "mm"),
    "z_mm": Column("Centre of the contact face, head frame, superior", "mm"),
    "qw": Column("Rotation of head_from_coil as unit quaternion, real part, zero or more"),
    "qx": Column("Rotation of head_from_coil as unit quaternion, x"),
    "qy": Column("Rotation of head_from_coil as unit quaternion, y"),
    "qz": Column("Rotation of head_from_coil as unit quaternion, z"),
    "scalp_mm": Column("Least distance of the contact face's centre to the scalp", "mm"),
    "clearance_mm": Column("Least distance of the whole casing, handle included, to scalp and keep-outs", "mm"),
    "target_depth_mm": Column("Distance from the contact face's centre to the target", "mm"),
    "projection_deg": Column("How far the given direction stood out of the plane that touches the scalp", "degrees"),
    "direction_error_deg": Column(
        "Angle between the wanted direction and the field of the stimulating phase at the target", "degrees"
    ),
    "field_per_slope": Column(
        "Field of the stimulating phase at the target along the wanted direction, for 1 A/us of coil current change",
        "V/m per A/us",
    ),
    "tilt_clear_deg": Column("Smallest tilt in tilt.tsv, the tilt limit if nothing blocks", "degrees"),
    "reachable": Column(
        "Whether the clearance holds", levels={"yes": "the casing gets there", "no": "it does not; see reason"}
    ),
    "reason": Column("Why a pose cannot be reached: the distance and what is in the way"),
}


def frame_note(poses: PoseList) -> dict[str, Any]:
    """Return what holds for every row: frame, unit, order, which way the coil stands."""
    half_turn = "stands turned by 180 degrees, because the second phase of its pulse stimulates"
    return {
        "Schema": SCHEMA,
        "Frame": {
            "name": "head",
            "axes": "RAS",
            "unit": "mm",
            "origin": poses.origin,
            "transform": "head_from_coil: p_head = M p_coil",
            "quaternion": "w x y z, w zero or more",
            "coil_axes": "+z leaves the contact face towards the head; +x is the direction of the field induced below"
            " the origin while the coil current first rises; +y = z cross x",
        },
        "Coil": {
            "name": poses.coil or "n/a",
            "half_turn_for_second_phase": poses.turned,
            "half_turn_in_words": f"the coil {half_turn}" if poses.turned else "the coil stands by its first phase",
        },
    }


def write(poses: PoseList, name: str) -> dict[str, bytes]:
    """Return the table and its sidecar as files.

    Parameters
    ----------
    poses : PoseList
    name : str
        File name of the table; the sidecar's ends in ``.json`` instead.

    Examples
    --------
    >>> sorted(write(PoseList.of(["a"], np.eye(4)[None], "scanner"), "poses.tsv"))
    ['poses.json', 'poses.tsv']
    """
    numbers = np.concatenate([poses.pose.origin, poses.pose.quaternion_wxyz], axis=1)
    cells: dict[str, Sequence[str]] = {"pose": poses.names}
    if "target" in poses.columns:
        cells["target"] = poses.columns["target"]
    cells |= {column: column_texts(numbers[:, i]) for i, column in enumerate(POSE_COLUMNS)}
    cells |= {column: poses.columns[column] for column in poses.columns if column != "target"}
    described = {column: COLUMNS.get(column, Column("As imported")) for column in cells}
    sidecar = PurePath(name).with_suffix(".json").name
    return {name: to_tsv(cells), sidecar: sidecar_bytes(described, frame_note(poses))}


def read(data: bytes, name: str, sidecar: bytes | None) -> PoseList:
    """Read a pose table with its sidecar.

    Raises
    ------
    InputError
        A missing column, numbers that are none, quaternions off unit length, or no sidecar: without it the frame is not
        known, and poses of unknown frames are refused.
    """
    table = read_tsv(data, name, ["pose", *POSE_COLUMNS])
    note, coil = _sidecar(sidecar, name)
    numbers = np.stack([floats(table[c], name, c) for c in POSE_COLUMNS], axis=1)
    try:
        matrices = matrix_from_quaternion(numbers[:, 3:], numbers[:, :3])
        return PoseList.of(
            table["pose"],
            matrices,
            note["origin"],
            coil="" if coil.get("name") in (None, "n/a") else str(coil["name"]),
            turned=coil.get("half_turn_for_second_phase") is True,
            columns={c: cells for c, cells in table.items() if c not in ("pose", *POSE_COLUMNS)},
        )
    except InputError as error:
        raise InputError(*(f"{name}: {line}" for line in error.lines)) from None


def _sidecar(data: bytes | None, name: str) -> tuple[dict[str, Any], dict[str, Any]]:
    beside = PurePath(name).with_suffix(".json").name
    if data is None:
        raise InputError(f"{name}: its sidecar {beside} is missing; without it the poses' frame is not known")
    try:
        content = json.loads(data)
        frame, coil = content["Frame"], content.get("Coil", {})
        found = (frame["axes"], frame["unit"], frame["name"], frame["origin"] in ORIGINS, isinstance(coil, dict))
    except (ValueError, KeyError, TypeError) as error:
        raise InputError(
            f"{beside}: not a sidecar of poses ({error!r}); expected Frame with axes, unit, origin"
        ) from None
    if found != ("RAS", "mm", "head", True, True):
        raise InputError(f"{beside}: expected a head frame in RAS and mm with a named origin, got {frame}")
    return frame, coil
