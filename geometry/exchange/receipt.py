"""What was written, in words and numbers that a person can hold against the receiving system's screen."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from ..pose_list import PoseList
from ..tables import json_bytes

CAUTION = (
    "Hold the worked example against the receiving system's screen before anyone sits in the chair. The tool plans"
    " poses; the positioning system's own safety functions stay in charge. Not assessed or marked as a medical device;"
    " the user's institution decides."
)
TIP_MM = 50.0


def write(
    poses: PoseList, name: str, *, to_format: str, conventions: str, pose_list_sha256: str, left_out: Mapping[str, str]
) -> dict[str, bytes]:
    """Return the receipt as text and as JSON.

    Parameters
    ----------
    poses : PoseList
        What was written.
    name : str
        Of the exported file; the receipt's names begin with it.
    to_format, conventions : str
        The format, and its conventions in words.
    pose_list_sha256 : str
        Of the pose list that was exported.
    left_out : mapping from pose to reason
        Poses that cannot be reached.
    """
    content: dict[str, Any] = {
        "file": name,
        "format": to_format,
        "conventions": conventions,
        "poses": len(poses.names),
        "frame": {"name": "head", "axes": "RAS", "unit": "mm", "origin": poses.origin},
        "coil": poses.coil or None,
        "half_turn_for_second_phase": poses.turned,
        "worked_example": _example(poses),
        "pose_list_sha256": pose_list_sha256,
        "left_out": dict(left_out),
        "caution": CAUTION,
    }
    return {f"{name}.receipt.txt": _text(content).encode(), f"{name}.receipt.json": json_bytes(content)}


def _example(poses: PoseList) -> dict[str, Any]:
    matrix = poses.pose.matrix[0]
    points = {
        "origin": [0.0, 0, 0],
        f"tip of +x ({TIP_MM:g} mm)": [TIP_MM, 0, 0],
        f"tip of +z ({TIP_MM:g} mm)": [0, 0, TIP_MM],
    }
    where = {name: (matrix @ np.array([*point, 1.0]))[:3] for name, point in points.items()}
    return {"pose": poses.names[0], "head_ras_mm": {name: (at + 0.0).tolist() for name, at in where.items()}}


def _text(content: Mapping[str, Any]) -> str:
    frame, example = content["frame"], content["worked_example"]
    lines = [
        f"{content['file']}: {content['poses']} poses, format {content['format']}",
        f"conventions: {content['conventions']}",
        f"frame: {frame['name']}, {frame['axes']}, {frame['unit']}, origin {frame['origin']}",
        f"coil: {content['coil'] or 'not known'}",
        "current: the coil stands turned by 180 degrees, because the second phase of its pulse stimulates"
        if content["half_turn_for_second_phase"]
        else "current: the coil stands by its first phase",
        f"worked example, pose {example['pose']}, where points of the coil land (head, RAS, mm):",
        *(f"  {name}: {', '.join(f'{v:.4f}' for v in at)}" for name, at in example["head_ras_mm"].items()),
        f"pose list sha256: {content['pose_list_sha256']}",
        f"left out, cannot be reached: {len(content['left_out'])}",
        *(f"  {name}: {reason}" for name, reason in content["left_out"].items()),
        content["caution"],
    ]
    return "\n".join(lines) + "\n"
