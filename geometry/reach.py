"""How far a coil may be tilted in every direction before its casing comes too near to scalp or keep-outs.

A tilt is a right-handed rotation about an axis in the contact plane, cos(azimuth) x + sin(azimuth) y, through the coil
frame's origin; the side at azimuth + 90 degrees dips towards the head. Coil frame, millimetres; angles in degrees
outside, radians inside.

The first contact is found from below, never by stepping over it: a point whose distance to the axis is rho comes
nearer by at most rho times the angle, so turning by gap / rho is always allowed. Triangles whose lower bound is loose
are split.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np

from .chunks import in_chunks
from .clearance import Obstacle, distance_bounds, near_triangles
from .errors import InputError
from .frames import FloatArray, IntArray
from .solids import Solid
from .triangles import dot, split_in_four

# Windows are found to this and reported short of it, so that a reported tilt is never too wide. 0.011 degrees.
ANGLE_TOLERANCE_RAD: Final = 2e-4
# A gap below this is contact, mm.
CONTACT_MM: Final = 1e-3
STEEPEST_LIMIT_DEG: Final = 90.0
LIMIT: Final = -1
_MOST_ROUNDS: Final = 2000


@dataclass(frozen=True)
class Windows:
    """Tilt windows of N poses in A directions.

    Attributes
    ----------
    azimuth_deg : ndarray, shape (A,)
        Of the axes, from the coil's +x towards its +y.
    tilt_deg : ndarray, shape (N, A)
        Largest tilt that keeps all distances.
    blocked_by : ndarray of int, shape (N, A)
        Index of the obstacle that blocks, `LIMIT` where the tilt limit does.
    """

    azimuth_deg: FloatArray
    tilt_deg: FloatArray
    blocked_by: IntArray


def tilt_windows(
    head_from_coil: FloatArray,
    solids: tuple[Solid, ...],
    obstacles: tuple[Obstacle, ...],
    *,
    limit_deg: float,
    azimuth_step_deg: float,
    progress: Callable[[int], None] | None = None,
) -> Windows:
    """Return the tilt windows of many poses.

    Parameters
    ----------
    head_from_coil : ndarray, shape (N, 4, 4)
    solids : tuple of Solid
        Casing and handle.
    obstacles : tuple of Obstacle
        Each with the distance to keep from it.
    limit_deg : float
        Tilts beyond it are not looked at; at most 90.
    azimuth_step_deg : float
        Between axes; both senses of each axis are covered, as azimuths go round.
    progress : callable, optional
        Told the number of poses that are done.

    Raises
    ------
    InputError
        A limit that is not above 0 and at most 90 degrees.

    Examples
    --------
    A small flat box 6 mm over a ball of 90 mm, 1 mm kept: arccos(91 / 96).

    >>> from coilwright.geometry.solids import Box
    >>> from coilwright.geometry.surface import sphere_surface
    >>> ball = Obstacle("scalp", sphere_surface(90.0, subdivisions=4).triangles, 0.0, 1.0)
    >>> pose = np.diag([1.0, -1, -1, 1])[None]; pose[0, 2, 3] = 96.0
    >>> box = (Box(np.array([160.0, 160, 10]), np.array([0.0, 0, -5])),)
    >>> found = tilt_windows(pose, box, (ball,), limit_deg=30.0, azimuth_step_deg=90.0)
    >>> bool(abs(found.tilt_deg - np.degrees(np.arccos(91 / 96))).max() < 0.2)
    True
    """
    if not 0 < limit_deg <= STEEPEST_LIMIT_DEG:
        raise InputError(
            f"tilt limit: expected more than 0 and at most {STEEPEST_LIMIT_DEG:g} degrees, got {limit_deg:g}"
        )
    azimuth = np.arange(0.0, 360.0, azimuth_step_deg)
    for obstacle in obstacles:
        _ = obstacle.tree  # made once, before threads ask for it
    parts = in_chunks(
        lambda part: _one_pose(head_from_coil[part], solids, obstacles, np.radians(limit_deg), np.radians(azimuth)),
        len(head_from_coil),
        1,
        progress,
    )
    shape = (len(head_from_coil), len(azimuth))
    tilt = np.degrees(np.array([part[0] for part in parts]).reshape(shape))
    blocked = np.array([part[1] for part in parts], dtype=np.int64).reshape(shape)
    return Windows(azimuth, np.where(blocked == LIMIT, limit_deg, tilt), blocked)


def _one_pose(
    pose: FloatArray, solids: tuple[Solid, ...], obstacles: tuple[Obstacle, ...], limit: float, azimuth: FloatArray
) -> tuple[FloatArray, IntArray]:
    """Windows of one pose (1, 4, 4), radians, and what blocks them."""
    bound = np.full(len(azimuth), limit + ANGLE_TOLERANCE_RAD)
    blocked = np.full(len(azimuth), LIMIT, dtype=np.int64)
    for index, obstacle in enumerate(obstacles):
        keep = obstacle.keep_mm + obstacle.radius_mm
        before = bound.copy()
        for solid in solids:
            centre, radius = solid.bounds
            swing = 2 * (float(np.linalg.norm(centre)) + radius) * np.sin(min(limit, np.pi) / 2)
            triangles, _ = near_triangles(pose, (solid,), obstacle, obstacle.keep_mm + swing)
            if len(triangles):
                _tighten(_Turns(solid, keep, azimuth, bound), triangles)
        blocked[bound < before] = index
    free = bound >= limit
    blocked[free] = LIMIT
    return np.where(free, limit, np.maximum(bound - ANGLE_TOLERANCE_RAD, 0.0)), blocked


@dataclass(frozen=True)
class _Turns:
    """What all steps of one search share; `bound` is lowered in place."""

    solid: Solid
    keep: float
    azimuth: FloatArray
    bound: FloatArray

    def turned(self, points: FloatArray, which: IntArray, angle: FloatArray) -> FloatArray:
        """Points (M, K, 3) of the head, seen from a coil that is tilted by `angle` (M,) about the axis `which` (M,)."""
        cosine, sine = np.cos(self.azimuth[which])[:, None], np.sin(self.azimuth[which])[:, None]
        along = points[..., 0] * cosine + points[..., 1] * sine
        across = points[..., 1] * cosine - points[..., 0] * sine
        c, s = np.cos(angle)[:, None], np.sin(angle)[:, None]
        dipped = across * c + points[..., 2] * s
        out = np.empty_like(points)
        out[..., 0] = along * cosine - dipped * sine
        out[..., 1] = along * sine + dipped * cosine
        out[..., 2] = points[..., 2] * c - across * s
        return out

    def lever(self, points: FloatArray, which: IntArray) -> FloatArray:
        """Largest distance (M,) of points (M, K, 3) to their axis."""
        cosine, sine = np.cos(self.azimuth[which])[:, None], np.sin(self.azimuth[which])[:, None]
        across = points[..., 1] * cosine - points[..., 0] * sine
        return np.asarray(np.sqrt((across**2 + points[..., 2] ** 2).max(axis=1)))

    def contact(self, which: IntArray, angle: FloatArray) -> None:
        """Lower the bounds to angles at which something touches."""
        np.minimum.at(self.bound, which, angle)


def _could_meet(turns: _Turns, lowest: FloatArray, lever: FloatArray) -> tuple[IntArray, IntArray]:
    """Pairs of azimuth and triangle that could meet before the present bounds; `lever` is (A, K)."""
    swing = 2 * lever * np.sin(np.minimum(turns.bound, np.pi) / 2)[:, None]
    which, k = np.nonzero(lowest - turns.keep < swing)
    return which.astype(np.int64), k.astype(np.int64)


def _tighten(turns: _Turns, triangles: FloatArray) -> None:
    """Lower the bounds to the first contact of the triangles: by their corners first, which is quick, then exactly."""
    lowest = distance_bounds(turns.solid, triangles)[1]
    farthest = np.sqrt(dot(triangles, triangles).max(axis=1))
    near = lowest - turns.keep < 2 * farthest * np.sin(min(float(turns.bound.max()), np.pi) / 2)
    triangles, lowest = triangles[near], lowest[near]
    if not len(triangles):
        return
    azimuths = np.arange(len(turns.azimuth))
    lever = np.stack([turns.lever(triangles, np.full(len(triangles), a)) for a in azimuths])
    which, k = _could_meet(turns, lowest, lever)
    _advance_points(turns, triangles[k, 0], which)
    which, k = _could_meet(turns, lowest, lever)
    _advance_triangles(turns, triangles[k], which)


def _advance_points(turns: _Turns, points: FloatArray, which: IntArray) -> None:
    angle, lever = np.zeros(len(points)), turns.lever(points[:, None], which)
    for _ in range(_MOST_ROUNDS):
        if not len(points):
            return
        gap = turns.solid.distance(turns.turned(points[:, None], which, angle)[:, 0]) - turns.keep
        touching = gap <= CONTACT_MM
        turns.contact(which[touching], angle[touching])
        angle = angle + gap / np.maximum(lever, 1e-9)
        go_on = ~touching & (angle < turns.bound[which] - ANGLE_TOLERANCE_RAD)
        points, which, angle, lever = points[go_on], which[go_on], angle[go_on], lever[go_on]
    raise ArithmeticError("a tilt did not converge")  # each round closes a fixed share of the gap at least


def _advance_triangles(turns: _Turns, triangles: FloatArray, which: IntArray) -> None:
    angle = np.zeros(len(triangles))
    for _ in range(_MOST_ROUNDS):
        if not len(triangles):
            return
        seen = turns.turned(triangles, which, angle)
        value, lowest = distance_bounds(turns.solid, seen)
        gap = lowest - turns.keep
        touching = value - turns.keep <= CONTACT_MM
        turns.contact(which[touching], angle[touching])
        loose = ~touching & (gap < 0.5 * (value - turns.keep))
        step = np.where(loose, np.maximum(gap, 0.0), gap) / np.maximum(turns.lever(triangles, which), 1e-9)
        angle = angle + step
        go_on = ~touching & (angle < turns.bound[which] - ANGLE_TOLERANCE_RAD)
        whole, split = go_on & ~loose, go_on & loose
        triangles = np.concatenate([triangles[whole], split_in_four(triangles[split])])
        which = np.concatenate([which[whole], np.tile(which[split], 4)])
        angle = np.concatenate([angle[whole], np.tile(angle[split], 4)])
    raise ArithmeticError("a tilt did not converge")  # each round halves a triangle or closes a share of the gap
