"""The electric field that a coil induces in a conducting sphere: closed form, by reciprocity.

With an element's position R, its moment rate m, a point r (all from the sphere's centre), a = R - r and
F = |a| (|R||a| + a.R), the field is (Sarvas 1987, Phys Med Biol 32:11-22; Heller and van Hulsteyn 1992, Biophys J
63:129-138; docs/field.md derives it)

    E(r) = mu0 / 4 pi  r x sum [ (grad F . m) R / F^2 - m / F ].

It has no radial part and does not depend on the sphere's radius or conductivity. Positions in mm, moment rates in
A m2 / s per A/us, fields in V/m per A/us.
"""

from __future__ import annotations

from typing import Final

import numpy as np

from .chunks import in_chunks
from .errors import InputError, ItemError
from .frames import FloatArray, transform_points
from .sphere import Spheres
from .triangles import cross, dot
from .windings import Elements

_MU0_OVER_4PI: Final = 1e-7
_M_PER_MM: Final = 1e-3
# Element-point pairs at once: the working arrays of this many doubles stay in the processor's cache.
PAIRS_AT_ONCE: Final = 20_000
# Chunks that one thread works through in the same arrays.
CHUNKS_A_THREAD: Final = 40


def check_inside(spheres: Spheres, points: FloatArray) -> None:
    """Refuse points (N, 3) that lie outside their spheres.

    Raises
    ------
    ItemError
    """
    distance = np.linalg.norm(points - spheres.centres, axis=1)
    bad = np.flatnonzero(~(distance < spheres.radii))
    if bad.size:
        raise ItemError(
            (
                int(i),
                f"lies outside the conducting sphere ({distance[i]:.1f} mm from its centre, radius"
                f" {spheres.radii[i]:.1f} mm); give head.sphere, or check the target",
            )
            for i in bad
        )


def field_at_targets(
    head_from_coil: FloatArray, elements: Elements, points: FloatArray, centres: FloatArray
) -> FloatArray:
    """Return the field (N, 3) of each pose at its own point; V/m per A/us, head frame.

    Parameters
    ----------
    head_from_coil : ndarray, shape (N, 4, 4)
    elements : Elements
    points : ndarray, shape (N, 3)
        Head frame, mm.
    centres : ndarray, shape (N, 3)
        Of the spheres.

    Raises
    ------
    ItemError
        A coil element that lies no farther from the sphere's centre than the point: it would be inside the head.
    """
    count = max(1, PAIRS_AT_ONCE // len(elements.positions_mm))
    parts = [
        _at_targets(head_from_coil[i : i + count], elements, points[i : i + count], centres[i : i + count], i)
        for i in range(0, len(points), count)
    ]
    return np.concatenate(parts) if parts else np.empty((0, 3))


def _at_targets(
    pose: FloatArray, elements: Elements, points: FloatArray, centres: FloatArray, first: int
) -> FloatArray:
    big_r = (transform_points(pose[:, None], elements.positions_mm[None]) - centres[:, None]) * _M_PER_MM
    m = np.einsum("nij,ej->nei", pose[:, :3, :3], elements.moments)
    r = ((points - centres) * _M_PER_MM)[:, None]
    big_length = np.sqrt(dot(big_r, big_r))
    bad = np.flatnonzero(~(big_length.min(axis=1) > np.linalg.norm(r[:, 0], axis=1)))
    if bad.size:
        raise ItemError(
            (first + int(i), "a coil element lies nearer to the sphere's centre than the point") for i in bad
        )
    a = big_r - r
    a_length = np.sqrt(dot(a, a))
    a_dot_r = dot(a, big_r)
    f = a_length * (big_length * a_length + a_dot_r)
    ratio = a_dot_r / a_length
    along_big = a_length**2 / big_length + ratio + 2 * a_length + 2 * big_length
    along_small = a_length + 2 * big_length + ratio
    gradient_m = along_big * dot(big_r, m) - along_small * dot(np.broadcast_to(r, m.shape), m)
    v = ((gradient_m / f**2)[..., None] * big_r - m / f[..., None]).sum(axis=1)
    return np.asarray(_MU0_OVER_4PI * cross(r[:, 0], v))


def field_at_points(
    head_from_coil: FloatArray, elements: Elements, points: FloatArray, centre: FloatArray
) -> FloatArray:
    """Return the field (P, 3) of one pose at many points: every sum over elements is one matrix product.

    Parameters
    ----------
    head_from_coil : ndarray, shape (4, 4)
    elements : Elements
    points : ndarray, shape (P, 3)
        Head frame, mm, inside the sphere.
    centre : ndarray, shape (3,)

    Raises
    ------
    InputError
        A point farther from the centre than the nearest coil element.

    Examples
    --------
    >>> from coilwright.geometry.windings import Elements
    >>> one = Elements(np.array([[0.0, 0, 0]]), np.array([[0, 0, 1.0]]))
    >>> pose = np.eye(4); pose[2, 3] = 100.0
    >>> field_at_points(pose, one, np.array([[0.0, 0, 0]]), np.zeros(3)) + 0.0
    array([[0., 0., 0.]])
    """
    big_r = (transform_points(head_from_coil, elements.positions_mm) - centre) * _M_PER_MM
    m = elements.moments @ head_from_coil[:3, :3].T
    r = (points - centre) * _M_PER_MM
    big_squared = dot(big_r, big_r)[:, None]
    farthest = np.sqrt(dot(r, r)).max(initial=0.0)
    if not farthest < np.sqrt(big_squared.min()):
        raise InputError(
            f"a point lies {farthest / _M_PER_MM:.1f} mm from the sphere's centre, no nearer than the coil's nearest"
            f" element ({np.sqrt(big_squared.min()) / _M_PER_MM:.1f} mm); points must lie inside the head"
        )
    step = max(1, PAIRS_AT_ONCE // len(big_r))
    big_length, big_m = np.sqrt(big_squared), dot(big_r, m)[:, None]

    def some(part: slice) -> FloatArray:
        """The field at a stretch of points, chunk by chunk in the same working arrays."""
        mine = r[part]
        work, out = np.empty((7, len(big_r), step)), np.empty_like(mine)
        for start in range(0, len(mine), step):
            few = mine[start : start + step]
            v = _sum_elements(big_r, m, few, big_squared, big_length, big_m, work[:, :, : len(few)])
            out[start : start + step] = cross(few, v)
        return out

    parts = in_chunks(some, len(r), max(step * CHUNKS_A_THREAD, 1))
    return np.concatenate(parts) * _MU0_OVER_4PI if parts else np.empty((0, 3))


def _sum_elements(
    big_r: FloatArray,
    m: FloatArray,
    r: FloatArray,
    big_squared: FloatArray,
    big_length: FloatArray,
    big_m: FloatArray,
    work: FloatArray,
) -> FloatArray:
    """V(r), shape (P, 3), without any temporary of the size elements times points."""
    a_dot_r, a, f, ratio, small, big, r_m = work
    np.matmul(big_r, r.T, out=a_dot_r)
    np.subtract(big_squared, a_dot_r, out=a_dot_r)  # a.R = |R|^2 - R.r
    np.multiply(a_dot_r, 2.0, out=a)
    a -= big_squared
    a += dot(r, r)  # |a|^2 = 2 a.R - |R|^2 + |r|^2
    np.divide(a, big_length, out=big)
    np.sqrt(a, out=a)
    np.multiply(a, big_length, out=f)
    f += a_dot_r
    f *= a
    np.divide(a_dot_r, a, out=ratio)
    np.add(a, ratio, out=small)
    small += 2 * big_length
    big += small
    big += a
    big *= big_m
    np.matmul(m, r.T, out=r_m)
    small *= r_m
    big -= small  # grad F . m
    np.divide(1.0, f, out=f)
    big *= f
    big *= f
    return np.asarray((big_r.T @ big - m.T @ f).T)
