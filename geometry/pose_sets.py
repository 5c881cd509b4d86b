"""Random sets of poses over a patch of scalp: uniform by area, uniform in turn, reproducible."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .draws import Draws
from .errors import InputError
from .frames import FloatArray, check_points
from .surface import Surface
from .triangles import area_in_ball, dot

# Draws at once for rejection at the patch's border.
_BATCH = 256


@dataclass(frozen=True)
class Patch:
    """Scalp within a straight distance of a scalp point.

    Attributes
    ----------
    centre : ndarray, shape (3,)
        On the scalp, head frame, mm.
    radius_mm : float
    faces : ndarray of int
        Faces with a part in the patch.
    areas : ndarray
        Area of that part, mm2.
    """

    centre: FloatArray
    radius_mm: float
    faces: np.ndarray
    areas: FloatArray


def patch(scalp: Surface, near_mm: FloatArray, radius_mm: float, *, farthest_mm: float = 60.0) -> Patch:
    """Return the scalp within `radius_mm`, in a straight line, of the scalp point nearest to `near_mm`.

    Raises
    ------
    InputError
        The nearest scalp is farther than `farthest_mm`: the region holds no scalp.
    """
    found = scalp.nearest(check_points(near_mm, "region centre"))
    if not found.distance[0] <= farthest_mm:
        raise InputError(
            f"the region holds no scalp: the nearest is {found.distance[0]:.1f} mm from its centre, over"
            f" {farthest_mm:g}"
        )
    centre = found.points[0]
    _, faces = scalp.candidate_pairs(centre[None], np.array([radius_mm]))
    faces = np.sort(faces)
    areas = area_in_ball(scalp.triangles[faces], scalp.face_normals[faces], np.tile(centre, (len(faces), 1)), radius_mm)
    keep = areas > 0
    return Patch(centre, radius_mm, faces[keep], areas[keep])


def random_scalp_points(scalp: Surface, where: Patch, count: int, draws: Draws) -> FloatArray:
    """Return `count` points (N, 3) uniform by area over a patch: not denser where triangles are small.

    Faces are drawn by their whole area, points evenly inside them; points beyond the patch's border are drawn anew.

    Examples
    --------
    >>> from coilwright.geometry.surface import sphere_surface
    >>> ball = sphere_surface(90.0, subdivisions=3)
    >>> points = random_scalp_points(ball, patch(ball, np.array([0, 0, 90.0]), 30.0), 50, Draws(3, "region"))
    >>> bool((np.linalg.norm(points - points.mean(axis=0), axis=1) < 60).all())
    True
    """
    whole = scalp.areas[where.faces]
    upper = np.cumsum(whole)
    chosen: list[FloatArray] = []
    have = 0
    while have < count:
        face = where.faces[np.minimum(np.searchsorted(upper, draws.unit(_BATCH) * upper[-1], "right"), len(whole) - 1)]
        root, v = np.sqrt(draws.unit(_BATCH))[:, None], draws.unit(_BATCH)[:, None]
        corners = scalp.triangles[face]
        points = (1 - root) * corners[:, 0] + root * (1 - v) * corners[:, 1] + root * v * corners[:, 2]
        offset = points - where.centre
        points = points[dot(offset, offset) <= where.radius_mm**2]
        chosen.append(points)
        have += len(points)
    return np.concatenate(chosen)[:count]
