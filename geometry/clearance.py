"""How near a casing comes to scalp and keep-outs, exactly: by branch and bound on convex distances.

The distance to a convex solid is convex and 1-Lipschitz, so over a triangle it lies between its tangent plane at the
triangle's middle and its values at the corners. Triangles whose lower bound is above the best value are dropped, the
others are split in four. Millimetres; triangles in the coil frame.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
from scipy.spatial import KDTree

from .chunks import in_chunks
from .frames import FloatArray, IntArray, invert_rigid, transform_points
from .solids import Solid
from .surface import Surface
from .triangles import dot, split_in_four

# How far a reported distance may be above the true one, mm.
DISTANCE_TOLERANCE_MM: Final = 1e-6
_SQRT3: Final = 3**0.5
_MOST_ROUNDS: Final = 60
_TRIANGLES_AT_ONCE: Final = 400_000


@dataclass(frozen=True)
class Obstacle:
    """Something that a casing keeps away from: all points within `radius_mm` of some triangles.

    A mesh has radius 0; a ball is one point three times over; a capsule is a segment.

    Attributes
    ----------
    name : str
    triangles : ndarray, shape (M, 3, 3)
        Head frame, mm.
    radius_mm : float
    keep_mm : float
        The distance to keep from it.
    """

    name: str
    triangles: FloatArray
    radius_mm: float
    keep_mm: float

    @cached_property
    def tree(self) -> tuple[KDTree, float]:
        """A tree of the triangles' middles, and how far a corner lies from its middle at most."""
        middles = self.triangles.mean(axis=1)
        spokes = self.triangles - middles[:, None]
        return KDTree(middles), float(np.sqrt(dot(spokes, spokes).max()))

    @classmethod
    def ball(cls, name: str, centre_mm: FloatArray, radius_mm: float, keep_mm: float) -> Obstacle:
        """Return a spherical keep-out."""
        return cls(name, np.tile(np.asarray(centre_mm, dtype=np.float64), (1, 3, 1)), radius_mm, keep_mm)


def least_distance(
    solids: tuple[Solid, ...], triangles: FloatArray, owner: IntArray, count: int, *, above: float = np.inf
) -> FloatArray:
    """Return for each of `count` owners the least signed distance of its triangles to the solids.

    Parameters
    ----------
    solids : tuple of Solid
    triangles : ndarray, shape (K, 3, 3)
        In the solids' frame.
    owner : ndarray of int, shape (K,)
        Which pose each triangle belongs to.
    count : int
    above : float
        Distances above this need not be found; `inf` comes back where there is nothing nearer.

    Returns
    -------
    ndarray, shape (count,)
        Never below the true distance, above it by at most 1e-6 mm. Negative where a triangle enters a solid: minus the
        depth of a point inside, not of the deepest one.
    """
    best = np.full(count, above)
    corners = [_least_at_corners(solid, triangles) for solid in solids]
    for at_corners in corners:
        np.minimum.at(best, owner, at_corners)
    sides = triangles - triangles[:, [1, 2, 0]]
    slack = np.sqrt(dot(sides, sides).max(axis=1)) / _SQRT3
    for solid, at_corners in zip(solids, corners, strict=True):
        keep = at_corners - slack < best[owner]
        _refine(solid, triangles[keep], owner[keep], best)
    best[best >= above] = np.inf
    return best


def _least_at_corners(solid: Solid, triangles: FloatArray) -> FloatArray:
    return np.asarray(solid.distance(triangles.reshape(-1, 3)).reshape(-1, 3).min(axis=1))


def distance_bounds(solid: Solid, triangles: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return for each triangle (K, 3, 3) the distance at its middle, and a lower bound of it over the triangle."""
    middle = triangles.mean(axis=1)
    value, slope = solid.distance_and_gradient(middle)
    return value, value + dot(slope[:, None], triangles - middle[:, None]).min(axis=1)


def _refine(solid: Solid, triangles: FloatArray, owner: IntArray, best: FloatArray) -> None:
    """Lower `best` to the least distance of the triangles to one solid."""
    for _ in range(_MOST_ROUNDS):
        if not len(triangles):
            return
        value, lowest = distance_bounds(solid, triangles)
        np.minimum.at(best, owner, value)
        keep = (lowest < best[owner] - DISTANCE_TOLERANCE_MM) & (best[owner] >= 0)
        triangles, owner = split_in_four(triangles[keep]), np.tile(owner[keep], 4)
        np.minimum.at(best, owner, _least_at_corners(solid, triangles))
    raise ArithmeticError("a distance did not converge")  # outside a solid each round halves the bounds at least


def clearances(
    head_from_coil: FloatArray, solids: tuple[Solid, ...], obstacle: Obstacle, *, above: float = np.inf
) -> FloatArray:
    """Return for each pose (N,) the distance of casing and handle to an obstacle, mm; negative inside.

    Parameters
    ----------
    head_from_coil : ndarray, shape (N, 4, 4)
    solids : tuple of Solid
    obstacle : Obstacle
    above : float
        Distances above this come back as `inf`.
    """

    def work(part: slice) -> FloatArray:
        poses = head_from_coil[part]
        triangles, owner = near_triangles(poses, solids, obstacle, above)
        found = least_distance(solids, triangles, owner, len(poses), above=above + obstacle.radius_mm)
        return found - obstacle.radius_mm

    parts = in_chunks(work, len(head_from_coil), poses_at_once(obstacle))
    return np.concatenate(parts) if parts else np.empty(0)


def poses_at_once(obstacle: Obstacle) -> int:
    """How many poses are worked on together, so that memory stays bounded."""
    return max(1, min(16, _TRIANGLES_AT_ONCE // max(1, len(obstacle.triangles))))


def near_triangles(
    poses: FloatArray, solids: tuple[Solid, ...], obstacle: Obstacle, within: float
) -> tuple[FloatArray, IntArray]:
    """Return an obstacle's triangles (K, 3, 3) in each pose's coil frame, and whose they are (K,).

    Triangles that the bounding balls of all solids keep farther away than `within` are left out.
    """
    total = len(obstacle.triangles)
    if np.isfinite(within):
        owner, face = np.divmod(_near_keys(poses, solids, obstacle, within), total)
    else:
        owner, face = np.divmod(np.arange(len(poses) * total), total)
    inverse = invert_rigid(poses)[owner]
    turned = np.einsum("kij,kcj->kci", inverse[:, :3, :3], obstacle.triangles[face])
    return turned + inverse[:, None, :3, 3], owner


def _near_keys(poses: FloatArray, solids: tuple[Solid, ...], obstacle: Obstacle, within: float) -> IntArray:
    """Pose times the number of triangles plus triangle, of every pair that the bounding balls let come near."""
    bounds = [solid.bounds for solid in solids]
    centres = transform_points(poses[:, None], np.array([centre for centre, _ in bounds])[None])
    radii = np.array([radius for _, radius in bounds]) + within + obstacle.radius_mm
    keys = []
    tree, size = obstacle.tree
    for s, radius in enumerate(radii):
        lists = tree.query_ball_point(centres[:, s], radius + size, return_sorted=False)
        keys += [np.asarray(part, dtype=np.int64) + k * len(obstacle.triangles) for k, part in enumerate(lists)]
    return np.unique(np.concatenate(keys))


@dataclass(frozen=True)
class Lifted:
    """Poses after lifting.

    Attributes
    ----------
    head_from_coil : ndarray, shape (N, 4, 4)
    lift_mm : ndarray, shape (N,)
    clearance_mm : ndarray, shape (N,)
        Of casing and handle to the scalp, after the lift.
    """

    head_from_coil: FloatArray
    lift_mm: FloatArray
    clearance_mm: FloatArray


def lift_clear(
    head_from_coil: FloatArray, solids: tuple[Solid, ...], scalp: Surface, *, standoff_mm: float, lift_most_mm: float
) -> Lifted:
    """Lift each pose along -z by the least amount that keeps every point of the casing `standoff_mm` from the scalp.

    The clearance changes by at most the lift, so lifting by what is missing never passes the first height that is
    enough: conservative advancement (Mirtich 1996), here to `DISTANCE_TOLERANCE_MM`.

    Parameters
    ----------
    head_from_coil : ndarray, shape (N, 4, 4)
    solids : tuple of Solid
    scalp : Surface
    standoff_mm, lift_most_mm : float
        A pose that needs more than `lift_most_mm` is returned at that height, with a clearance below the standoff.
    """
    obstacle = Obstacle("scalp", scalp.triangles, 0.0, standoff_mm)
    _ = obstacle.tree  # made once, before threads ask for it
    parts = in_chunks(
        lambda part: _lift_chunk(head_from_coil[part], solids, obstacle, standoff_mm, lift_most_mm),
        len(head_from_coil),
        poses_at_once(obstacle),
    )
    lift = np.concatenate([part[0] for part in parts]) if parts else np.empty(0)
    clearance = np.concatenate([part[1] for part in parts]) if parts else np.empty(0)
    poses = head_from_coil.copy()
    poses[:, :3, 3] -= lift[:, None] * head_from_coil[:, :3, 2]
    inside = _inside(poses, solids, scalp)
    clearance[inside] = np.minimum(clearance[inside], -scalp.nearest(poses[inside, :3, 3]).distance)
    return Lifted(poses, lift, clearance)


def _lift_chunk(
    poses: FloatArray, solids: tuple[Solid, ...], obstacle: Obstacle, standoff_mm: float, lift_most_mm: float
) -> tuple[FloatArray, FloatArray]:
    """Lift and clearance of some poses. In the coil frame, lifting the coil is shifting the head along +z."""
    # The face's centre starts at the standoff over the scalp: nothing farther away than this can decide.
    above = standoff_mm + 2 * lift_most_mm + 10.0
    triangles, owner = near_triangles(poses, solids, obstacle, above)
    lift, clearance = np.zeros(len(poses)), np.full(len(poses), np.inf)
    pending = np.ones(len(poses), dtype=bool)
    while pending.any():
        mine = pending[owner]
        shifted = triangles[mine]
        shifted[:, :, 2] += lift[owner[mine], None]
        found = least_distance(solids, shifted, owner[mine], len(poses), above=above)
        clearance[pending] = found[pending]
        missing = standoff_mm - clearance
        pending &= (missing > DISTANCE_TOLERANCE_MM) & (lift < lift_most_mm)
        # A step shorter than the tolerance cannot be told from rounding; it also bounds the number of rounds.
        step = np.maximum(missing, DISTANCE_TOLERANCE_MM)
        lift = np.where(pending, np.minimum(lift + step, lift_most_mm), lift)
    return lift, clearance


def _inside(poses: FloatArray, solids: tuple[Solid, ...], scalp: Surface) -> IntArray:
    """Poses whose casing has a solid's centre inside the head: it may lie there without touching the surface."""
    centres = np.array([solid.bounds[0] for solid in solids])
    where = transform_points(poses[:, None], centres[None]).reshape(-1, 3)
    signed = scalp.signed_distance(where).reshape(len(poses), -1) if len(poses) else np.empty((0, 1))
    return np.flatnonzero((signed < 0).any(axis=1))
