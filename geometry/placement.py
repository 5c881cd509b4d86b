"""Target and direction to a pose: where on the scalp the contact face stands, and how it is turned.

Head frame, millimetres. The direction is fixed once per target, in the tangent plane at the scalp point over it; moving
or lifting the coil never changes it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final, Literal, TypeAlias

import numpy as np

from .errors import ItemError
from .frames import FloatArray, angle_between_deg, check_points, midline_direction, rigid_from_axes, unit_vectors
from .sphere import Spheres
from .surface import QUALITY_LIMIT_DEG, QUALITY_RADII_MM, Surface
from .triangles import dot

Aim: TypeAlias = Literal["nearest_scalp", "over_target"]

DEEPEST_TARGET_MM: Final = 60.0
# A wanted direction that stands farther out of the tangent plane has a projection that means nothing.
STEEPEST_DEG: Final = 80.0


@dataclass(frozen=True)
class Directions:
    """Wanted field directions of N targets: a vector each, or a midline angle each.

    Attributes
    ----------
    vectors : ndarray, shape (N, 3)
        Head frame; NaN where the angle counts.
    midline_deg : ndarray, shape (N,)
        NaN where the vector counts.
    """

    vectors: FloatArray
    midline_deg: FloatArray

    @classmethod
    def midline(cls, midline_deg: FloatArray) -> Directions:
        """Return directions that are all given by midline angles."""
        return cls(np.full((len(midline_deg), 3), np.nan), np.asarray(midline_deg, dtype=np.float64))


@dataclass(frozen=True)
class Standing:
    """Where coils stand before anything is lifted.

    Attributes
    ----------
    head_from_coil : ndarray, shape (N, 4, 4)
    scalp_points, normals, wanted : ndarray, shape (N, 3)
        The scalp point under (or on the ray over) each target, the outward unit normal there, and the wanted direction
        of the stimulating phase, a unit vector in the tangent plane.
    projection_deg : ndarray, shape (N,)
        How far the given vector stood out of that plane; 0 for midline angles.
    """

    head_from_coil: FloatArray
    scalp_points: FloatArray
    normals: FloatArray
    wanted: FloatArray
    projection_deg: FloatArray


def check_targets(scalp: Surface, targets: FloatArray) -> FloatArray:
    """Return the nearest scalp points (N, 3) of targets, or refuse those outside the head or too deep.

    Raises
    ------
    ItemError
        One reason for each target.
    """
    points = np.atleast_2d(check_points(targets, "targets"))
    found = scalp.nearest(points)
    outside = scalp.signed_distance(points, found) > 0
    problems = []
    for i in np.flatnonzero(outside | ~(found.distance <= DEEPEST_TARGET_MM)):
        distance = found.distance[i]
        if outside[i]:
            reason = f"lies {distance:.1f} mm outside the head; check its frame, unit and sign"
        else:
            reason = (
                f"lies {distance:.1f} mm under the scalp, deeper than {DEEPEST_TARGET_MM:g} mm; check frame and unit"
            )
        problems.append((int(i), reason))
    if problems:
        raise ItemError(problems)
    return found.points


def place(
    scalp: Surface,
    targets: FloatArray,
    directions: Directions,
    *,
    standoff_mm: float,
    normal_radius_mm: float = 15.0,
    aim: Aim = "nearest_scalp",
    spheres: Spheres | None = None,
    turned: bool = False,
) -> Standing:
    """Place coils for many targets in one call.

    Parameters
    ----------
    scalp : Surface
    targets : ndarray, shape (N, 3)
        Head frame, mm, inside the head.
    directions : Directions
        Of the field in the phase that stimulates.
    standoff_mm : float
        From the scalp to the contact face.
    normal_radius_mm : float
        Radius of the area-weighted mean of the scalp's normals.
    aim : {"nearest_scalp", "over_target"}
        The scalp point nearest to the target, or the one on the ray from the sphere's centre through it.
    spheres : Spheres
        Needed for ``over_target``.
    turned : bool
        Whether the second phase stimulates: the coil is then turned by 180 degrees.

    Raises
    ------
    ItemError
        Targets outside the head or too deep; directions that stand more than 80 degrees out of the tangent plane.

    Examples
    --------
    >>> from coilwright.geometry.surface import sphere_surface
    >>> ball = sphere_surface(90.0, subdivisions=4)
    >>> standing = place(ball, np.array([[0, 0, 60.0]]), Directions.midline(np.array([0.0])), standoff_mm=6.0)
    >>> bool(abs(standing.head_from_coil[0, :3, 3] - [0, 0, 96]).max() < 2)  # a facet of this ball is 6 mm wide
    True
    >>> bool(standing.head_from_coil[0, 1, 0] > 0.999)  # +x is anterior
    True
    """
    nearest = check_targets(scalp, targets)
    if aim == "nearest_scalp":
        return stand(
            scalp, nearest, directions, standoff_mm=standoff_mm, normal_radius_mm=normal_radius_mm, turned=turned
        )
    if spheres is None:
        raise ItemError([(0, "aim over_target needs the sphere whose centre the ray leaves")])
    outwards = unit_vectors(targets - spheres.centres, "target minus the sphere's centre")
    along_ray = scalp.ray_exit(targets, outwards)
    points = targets + along_ray[:, None] * outwards
    lost = np.flatnonzero(~(along_ray <= DEEPEST_TARGET_MM))
    if lost.size:
        raise ItemError(
            (int(i), f"the ray from the sphere's centre through it meets no scalp within {DEEPEST_TARGET_MM:g} mm")
            for i in lost
        )
    return stand(
        scalp,
        points,
        directions,
        standoff_mm=standoff_mm,
        normal_radius_mm=normal_radius_mm,
        turned=turned,
        along=outwards,
    )


def stand(
    scalp: Surface,
    points: FloatArray,
    directions: Directions,
    *,
    standoff_mm: float,
    normal_radius_mm: float = 15.0,
    turned: bool = False,
    along: FloatArray | None = None,
) -> Standing:
    """Stand coils on scalp points; see `place`.

    Parameters
    ----------
    points : ndarray, shape (N, 3)
        On the scalp.
    along : ndarray, shape (N, 3), optional
        Unit vectors along which the standoff is taken; the normals if left out. The contact face stays `standoff_mm`
        from the tangent plane in either case.
    """
    normals = scalp.normals(points, normal_radius_mm)
    wanted, projection = _wanted(directions, normals)
    outwards = normals if along is None else along
    height = standoff_mm / dot(outwards, normals)
    origin = points + height[:, None] * outwards
    x = -wanted if turned else wanted
    z = -normals
    pose = rigid_from_axes(origin, x, np.cross(z, x), z)
    return Standing(pose, points, normals, wanted, projection)


def _wanted(directions: Directions, normals: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Project vectors into the tangent planes, take midline angles there; say how far vectors stood out."""
    by_angle = np.isfinite(directions.midline_deg)
    wanted, projection = np.empty_like(normals), np.zeros(len(normals))
    rows = np.flatnonzero(by_angle)
    if rows.size:
        try:
            wanted[rows] = midline_direction(directions.midline_deg[rows], normals[rows])
        except ItemError as error:
            raise ItemError((int(rows[i]), reason) for i, reason in error.problems) from None
    rows = np.flatnonzero(~by_angle)
    if rows.size:
        given, n = unit_vectors(directions.vectors[rows]), normals[rows]
        off_axis = angle_between_deg(given, n)
        projection[rows] = np.abs(90.0 - off_axis)
        bad = np.flatnonzero(~(projection[rows] <= STEEPEST_DEG))
        if bad.size:
            raise ItemError(
                (
                    int(rows[i]),
                    f"the direction stands {projection[rows[i]]:.1f} degrees out of the plane that touches the scalp,"
                    f" over {STEEPEST_DEG:g}: within 10 degrees of the coil's axis a direction means nothing",
                )
                for i in bad
            )
        flat = given - dot(given, n)[:, None] * n
        wanted[rows] = flat / np.linalg.norm(flat, axis=1, keepdims=True)
    return wanted, projection


def scalp_quality(scalp: Surface, points: FloatArray, names: Sequence[str]) -> list[tuple[str, str]]:
    """Return (name, message) of the targets under which the scalp is too rough to trust its normal."""
    worst = scalp.normal_disagreement_deg(points)
    radii = ", ".join(f"{r:g}" for r in QUALITY_RADII_MM)
    return [
        (
            names[i],
            f"the scalp's normals at {radii} mm disagree by {worst[i]:.1f} degrees (over {QUALITY_LIMIT_DEG:g}): smooth"
            " the scalp, use a finer mesh, or raise placement.normal_radius_mm",
        )
        for i in np.flatnonzero(~(worst <= QUALITY_LIMIT_DEG)).tolist()
    ]
