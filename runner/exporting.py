"""A pose table on disk to files in an open format, with a receipt; and back."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path, PurePath
from typing import Final

from coilwright.geometry.errors import InputError
from coilwright.geometry.exchange import matrices, receipt, tsv
from coilwright.geometry.files import read_bytes, sha256
from coilwright.geometry.pose_list import PoseList

FORMATS: Final = ("tsv", "matrices")
CONVENTIONS: Final = {
    "tsv": "RAS, mm; quaternion w x y z, w zero or more; numbers with all their digits; missing value n/a",
    "matrices": "RAS, mm; head_from_coil as 4x4, row-major, column vectors: p_head = M p_coil",
}


def read_poses(path: Path, from_format: str = "tsv") -> PoseList:
    """Read a pose list from disk.

    Raises
    ------
    InputError
        A file that is missing, damaged, or of another kind.
    """
    return _parsed(path, read_bytes(path), from_format)


def _parsed(path: Path, data: bytes, from_format: str) -> PoseList:
    if from_format == "matrices":
        return matrices.read(data, str(path))
    beside = path.with_suffix(".json")
    return tsv.read(data, str(path), read_bytes(beside) if beside.exists() and beside != path else None)


@dataclass(frozen=True)
class Export:
    """An export before it is written: its files by name, how many poses are in it, which were left out and why."""

    files: dict[str, bytes]
    poses: int
    left_out: dict[str, str]


def export(path: Path, to_format: str, name: str, *, unchecked: bool = False) -> Export:
    """Make an export: the poses that can be reached, and the receipt. What is hashed is what was parsed.

    Parameters
    ----------
    path : Path
        Of a pose table.
    to_format : {"tsv", "matrices"}
    name : str
        File name of the export.
    unchecked : bool
        Whether poses of which nobody knows whether they can be reached are written as well.

    Raises
    ------
    InputError
        A pose whose reach is not known, no pose left to write, a name whose sidecar would replace the export itself.
    """
    data = read_bytes(path)
    poses = _parsed(path, data, "tsv")
    cells = poses.columns.get("reachable", ["n/a"] * len(poses.names))
    keep = [cell != "no" for cell in cells] if unchecked else poses.reachable()
    reasons = poses.columns.get("reason", ["n/a"] * len(poses.names))
    left_out = {n: r for n, r, kept in zip(poses.names, reasons, keep, strict=True) if not kept}
    if not any(keep):
        raise InputError(f"{path}: no pose of this list can be reached; there is nothing to export")
    chosen = poses.chosen(keep)
    if to_format == "tsv" and PurePath(name).suffix == ".json":
        raise InputError(f"{name}: a table cannot end in .json, its sidecar does; end it in .tsv")
    written = tsv.write(chosen, name) if to_format == "tsv" else matrices.write(chosen, name)
    note = receipt.write(
        chosen,
        name,
        to_format=to_format,
        conventions=CONVENTIONS[to_format],
        pose_list_sha256=sha256(data),
        left_out=left_out,
    )
    return Export(written | note, len(chosen.names), left_out)
