"""How far two lists of poses are apart, pose by pose: position, angle, and the angle split into axis and turn."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .errors import InputError
from .frames import FloatArray, angle_between_deg, invert_rigid, quaternion_from_matrix
from .pose_list import PoseList


@dataclass(frozen=True)
class Deviations:
    """Deviations of poses that both lists hold.

    Attributes
    ----------
    names : tuple of str
    position_mm : ndarray, shape (N,)
        Between the centres of the contact face.
    angle_deg : ndarray, shape (N,)
        Of the rotation that takes one to the other.
    axis_deg : ndarray, shape (N,)
        Between the approach axes (+z).
    turn_deg : ndarray, shape (N,)
        About the approach axis, signed, right-handed about +z of the first.
    only_first, only_second : tuple of str
        Poses that only one list holds.
    """

    names: tuple[str, ...]
    position_mm: FloatArray
    angle_deg: FloatArray
    axis_deg: FloatArray
    turn_deg: FloatArray
    only_first: tuple[str, ...]
    only_second: tuple[str, ...]

    def beyond(self, position_mm: float, angle_deg: float) -> list[str]:
        """Return the poses that are farther apart than the limits."""
        good = (self.position_mm <= position_mm) & (self.angle_deg <= angle_deg)
        return [name for name, ok in zip(self.names, good, strict=True) if not ok]


def compare(first: PoseList, second: PoseList) -> Deviations:
    """Compare two lists by the names of their poses.

    Raises
    ------
    InputError
        Head frames of different origins: a transform between them is missing.

    Examples
    --------
    >>> a = PoseList.of(["p"], np.eye(4)[None], "scanner")
    >>> compare(a, a).angle_deg.tolist()
    [0.0]
    """
    if first.origin != second.origin:
        raise InputError(
            f"the lists are in head frames of different origins ({first.origin}, {second.origin}); they are never"
            " compared without a transform"
        )
    rows = {name: i for i, name in enumerate(second.names)}
    names = tuple(name for name in first.names if name in rows)
    a = first.chosen([name in rows for name in first.names]).pose.matrix if names else np.empty((0, 4, 4))
    b = second.pose.matrix[[rows[name] for name in names]]
    between = invert_rigid(a) @ b
    q = quaternion_from_matrix(between) if names else np.empty((0, 4))
    angle = 2 * np.degrees(np.arctan2(np.linalg.norm(q[:, 1:], axis=1), q[:, 0]))
    return Deviations(
        names,
        np.linalg.norm(a[:, :3, 3] - b[:, :3, 3], axis=1),
        angle,
        angle_between_deg(a[:, :3, 2], b[:, :3, 2]),
        2 * np.degrees(np.arctan2(q[:, 3], q[:, 0])),
        tuple(name for name in first.names if name not in rows),
        tuple(name for name in second.names if name not in set(first.names)),
    )
