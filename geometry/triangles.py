"""Vectorised questions about triangles: nearest point, area inside a ball, crossing of a ray.

Every function takes N triangles as an array (N, 3, 3), corner by corner, and answers N times. No frames, no units.
"""

from __future__ import annotations

import numpy as np

from .frames import FloatArray


def cross(a: FloatArray, b: FloatArray) -> FloatArray:
    """Cross product over the last axis, several times faster than numpy.cross for many short vectors."""
    out = np.empty(np.broadcast_shapes(a.shape, b.shape))
    out[..., 0] = a[..., 1] * b[..., 2] - a[..., 2] * b[..., 1]
    out[..., 1] = a[..., 2] * b[..., 0] - a[..., 0] * b[..., 2]
    out[..., 2] = a[..., 0] * b[..., 1] - a[..., 1] * b[..., 0]
    return out


def dot(a: FloatArray, b: FloatArray) -> FloatArray:
    """Dot product over the last axis."""
    return np.asarray(np.einsum("...i,...i->...", a, b))


def area_vectors(triangles: FloatArray) -> FloatArray:
    """Return normals scaled to the triangles' areas, shape (N, 3)."""
    return np.asarray(
        0.5 * cross(triangles[:, 1] - triangles[:, 0], triangles[:, 2] - triangles[:, 0]),
    )


def split_in_four(triangles: FloatArray) -> FloatArray:
    """Split triangles (N, 3, 3) at the middles of their sides: (4 N, 3, 3), all first quarters first."""
    a, b, c = triangles[:, 0], triangles[:, 1], triangles[:, 2]
    ab, bc, ca = (a + b) / 2, (b + c) / 2, (c + a) / 2
    parts = [(a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca)]
    return np.concatenate([np.stack(part, axis=1) for part in parts])


def nearest_barycentric(points: FloatArray, triangles: FloatArray) -> FloatArray:
    """Return the barycentric coordinates (N, 3) of the point of each triangle that is nearest to each point.

    By regions of the triangle's plane (Ericson 2005, Real-Time Collision Detection, section 5.1.5): exact zeros mark
    edges and corners, which the sign of a distance needs.

    Parameters
    ----------
    points : ndarray, shape (N, 3)
    triangles : ndarray, shape (N, 3, 3)

    Examples
    --------
    >>> corner = np.array([[[0.0, 0, 0], [1, 0, 0], [0, 1, 0]]])
    >>> nearest_barycentric(np.array([[0.25, 0.25, 3.0]]), corner)
    array([[0.5 , 0.25, 0.25]])
    """
    a, b, c = triangles[:, 0], triangles[:, 1], triangles[:, 2]
    ab, ac = b - a, c - a
    d1, d2 = dot(ab, points - a), dot(ac, points - a)
    d3, d4 = dot(ab, points - b), dot(ac, points - b)
    d5, d6 = dot(ab, points - c), dot(ac, points - c)
    va, vb, vc = d3 * d6 - d5 * d4, d5 * d2 - d1 * d6, d1 * d4 - d3 * d2
    zero = np.zeros(len(points))
    one = zero + 1.0
    with np.errstate(divide="ignore", invalid="ignore"):
        on_ab, on_ac = d1 / (d1 - d3), d2 / (d2 - d6)
        on_bc = (d4 - d3) / ((d4 - d3) + (d5 - d6))
        total = va + vb + vc
        inside_b, inside_c = vb / total, vc / total
    regions = [
        (d1 <= 0) & (d2 <= 0),
        (d3 >= 0) & (d4 <= d3),
        (d6 >= 0) & (d5 <= d6),
        (vc <= 0) & (d1 >= 0) & (d3 <= 0),
        (vb <= 0) & (d2 >= 0) & (d6 <= 0),
        (va <= 0) & (d4 - d3 >= 0) & (d5 - d6 >= 0),
    ]
    weight_b = np.select(regions, [zero, one, zero, on_ab, zero, 1 - on_bc], inside_b)
    weight_c = np.select(regions, [zero, zero, one, zero, on_ac, on_bc], inside_c)
    return np.stack([1 - weight_b - weight_c, weight_b, weight_c], axis=1)


def area_in_ball(triangles: FloatArray, normals: FloatArray, centres: FloatArray, radius: float) -> FloatArray:
    """Return the area (N,) of each triangle that lies within a ball: closed form, continuous in every argument.

    A ball cuts a plane in a disc; a triangle and a disc share, edge by edge, triangles and sectors seen from the disc's
    centre.

    Parameters
    ----------
    triangles : ndarray, shape (N, 3, 3)
    normals : ndarray, shape (N, 3)
        Their unit normals.
    centres : ndarray, shape (N, 3)
        Of the balls.
    radius : float
    """
    height = dot(centres - triangles[:, 0], normals)
    squared = np.maximum(radius**2 - height**2, 0.0)
    corners = triangles - (centres - height[:, None] * normals)[:, None]
    area = np.zeros(len(triangles))
    for k in range(3):
        area += _edge_and_disc(corners[:, k], corners[:, (k + 1) % 3], normals, squared)
    return np.maximum(area, 0.0)


def _edge_and_disc(a: FloatArray, b: FloatArray, normals: FloatArray, squared: FloatArray) -> FloatArray:
    """Signed area that the triangle (centre, a, b) shares with the disc about the centre."""
    d = b - a
    length = np.maximum(dot(d, d), np.finfo(float).tiny)
    middle = -dot(a, d) / length
    half = np.sqrt(np.maximum(middle**2 - (dot(a, a) - squared) / length, 0.0))
    p = a + np.clip(middle - half, 0.0, 1.0)[:, None] * d
    q = a + np.clip(middle + half, 0.0, 1.0)[:, None] * d
    sectors = np.arctan2(dot(cross(a, p), normals), dot(a, p)) + np.arctan2(dot(cross(q, b), normals), dot(q, b))
    return np.asarray(0.5 * (squared * sectors + dot(cross(p, q), normals)))


def last_crossing(origins: FloatArray, directions: FloatArray, triangles: FloatArray, chunk: int = 64) -> FloatArray:
    """Return for each ray the distance (N,) along it to its farthest crossing of the triangles; NaN where it has none.

    Möller and Trumbore 1997 (Journal of Graphics Tools 2:21-28), every ray against every triangle.

    Parameters
    ----------
    origins, directions : ndarray, shape (N, 3)
        Directions of unit length.
    triangles : ndarray, shape (M, 3, 3)
    chunk : int
        Rays at once; memory is chunk times M times 3 doubles.
    """
    result = np.full(len(origins), np.nan)
    ab, ac = triangles[:, 1] - triangles[:, 0], triangles[:, 2] - triangles[:, 0]
    for start in range(0, len(origins), chunk):
        o, d = origins[start : start + chunk, None], directions[start : start + chunk, None]
        p = cross(d, ac[None])
        determinant = dot(p, ab[None])
        with np.errstate(divide="ignore", invalid="ignore"):
            from_a = o - triangles[None, :, 0]
            u = dot(from_a, p) / determinant
            q = cross(from_a, ab[None])
            v = dot(np.broadcast_to(d, q.shape), q) / determinant
            t = dot(np.broadcast_to(ac[None], q.shape), q) / determinant
            slack = 1e-12  # an edge shared by two triangles must not let a ray slip through between them
            hit = (u >= -slack) & (v >= -slack) & (u + v <= 1 + slack) & (t > 0)
        far = np.where(hit, t, -np.inf).max(axis=1)
        result[start : start + chunk] = np.where(np.isfinite(far), far, np.nan)
    return result
