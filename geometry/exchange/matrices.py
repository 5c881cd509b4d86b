"""JSON with 4x4 matrices: ``head_from_coil``, row-major, column vectors, mm, the frame named in the file."""

from __future__ import annotations

import json
from typing import Any

import numpy as np

from ..errors import InputError
from ..pose_list import PoseList
from ..tables import json_bytes


def write(poses: PoseList, name: str) -> dict[str, bytes]:
    """Return the file.

    Examples
    --------
    >>> b'"unit": "mm"' in write(PoseList.of(["a"], np.eye(4)[None], "scanner"), "m.json")["m.json"]
    True
    """
    content = {
        "frame": "head",
        "axes": "RAS",
        "origin": poses.origin,
        "unit": "mm",
        "order": "row-major; p_head = M p_coil with column vectors",
        "coil": poses.coil or None,
        "half_turn_for_second_phase": poses.turned,
        "head_from_coil": {
            pose: (matrix + 0.0).tolist() for pose, matrix in zip(poses.names, poses.pose.matrix, strict=True)
        },
    }
    return {name: json_bytes(content)}


def read(data: bytes, name: str) -> PoseList:
    """Read the file back.

    Raises
    ------
    InputError
        Not such a file, a name that is there twice, a matrix that is not rigid.
    """

    def unique(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
        keys = [key for key, _ in pairs]
        twice = sorted({key for key in keys if keys.count(key) > 1}) if len(set(keys)) < len(keys) else []
        if twice:
            raise InputError(f"{name}: {twice[0]!r} is there twice; names must be unique")
        return dict(pairs)

    try:
        content = json.loads(data, object_pairs_hook=unique)
        frame = (content["frame"], content["axes"], content["unit"])
        matrices, origin = content["head_from_coil"], content["origin"]
        names, values = list(matrices), np.array([_numbers(rows) for rows in matrices.values()], dtype=np.float64)
    except InputError:
        raise
    except (ValueError, KeyError, TypeError, AttributeError, RecursionError, OverflowError) as error:
        raise InputError(f"{name}: not a file of matrices ({error!r})") from None
    if frame != ("head", "RAS", "mm"):
        raise InputError(f"{name}: expected frame head, axes RAS, unit mm; got {', '.join(map(str, frame))}")
    try:
        return PoseList.of(
            names,
            values,
            origin,
            coil=str(content.get("coil") or ""),
            turned=content.get("half_turn_for_second_phase") is True,
        )
    except InputError as error:
        raise InputError(*(f"{name}: {line}" for line in error.lines)) from None


def _numbers(rows: Any) -> Any:
    """Rows of plain numbers; text and true or false are refused, not turned into numbers."""
    for row in rows:
        if any(type(value) not in (int, float) for value in row):
            raise TypeError(f"expected rows of four numbers, got {row!r:.80}")
    return rows
