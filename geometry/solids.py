"""Convex solids known by their signed distance: negative inside, 1-Lipschitz, convex; with its gradient.

Box, cylinder, capsule and convex hull, each in the frame of whoever holds it, millimetres. Convexity is what
`reach` builds on: the tangent plane of the distance at one point bounds it from below everywhere.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Protocol

import numpy as np
from scipy.spatial.transform import Rotation

from .errors import InputError
from .frames import FloatArray, read_only
from .surface import Surface
from .triangles import dot


class Solid(Protocol):
    """A closed convex set of points."""

    def distance(self, points: FloatArray) -> FloatArray:
        """Return signed distances (N,) of points (N, 3)."""
        ...

    def distance_and_gradient(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return signed distances (N,) and their gradients (N, 3), unit vectors away from the solid."""
        ...

    @property
    def outline(self) -> Surface:
        """A closed mesh of the solid, for pictures and for bounding it; curved parts are inscribed."""
        ...

    @property
    def bounds(self) -> tuple[FloatArray, float]:
        """Centre and radius of a ball that holds the solid."""
        ...


def _capped(excess: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Distance to a box in K dimensions from the excess |p| - half size (N, K), and its derivative by |p|."""
    outside = np.maximum(excess, 0.0)
    length = np.linalg.norm(outside, axis=1)
    largest = excess.argmax(axis=1)
    value = length + np.minimum(excess.max(axis=1), 0.0)
    inside = np.zeros_like(excess)
    inside[np.arange(len(excess)), largest] = 1.0
    away = length > 0
    slope = np.where(away[:, None], outside / np.where(away, length, 1.0)[:, None], inside)
    return value, slope


@dataclass(frozen=True)
class Box:
    """A box with its sides along the axes.

    Examples
    --------
    >>> Box(np.array([2.0, 2, 2]), np.zeros(3)).distance(np.array([[0, 0, 3.0], [0, 0, 0]]))
    array([ 2., -1.])
    """

    size_mm: FloatArray
    centre_mm: FloatArray

    def distance_and_gradient(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """See `Solid`."""
        offset = points - self.centre_mm
        value, slope = _capped(np.abs(offset) - self.size_mm / 2)
        return value, np.where(offset < 0, -slope, slope)

    def distance(self, points: FloatArray) -> FloatArray:
        """See `Solid`."""
        return self.distance_and_gradient(points)[0]

    @cached_property
    def outline(self) -> Surface:
        """See `Solid`."""
        import trimesh

        mesh = trimesh.creation.box(extents=self.size_mm)
        return Surface(np.asarray(mesh.vertices) + self.centre_mm, np.asarray(mesh.faces), "box")

    @property
    def bounds(self) -> tuple[FloatArray, float]:
        """See `Solid`."""
        return self.centre_mm, float(np.linalg.norm(self.size_mm) / 2)


@dataclass(frozen=True)
class Cylinder:
    """A cylinder with its axis along z."""

    radius_mm: float
    height_mm: float
    centre_mm: FloatArray

    def distance_and_gradient(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """See `Solid`."""
        offset = points - self.centre_mm
        radial = np.hypot(offset[:, 0], offset[:, 1])
        excess = np.stack([radial - self.radius_mm, np.abs(offset[:, 2]) - self.height_mm / 2], axis=1)
        value, slope = _capped(excess)
        gradient = np.empty_like(points)
        gradient[:, :2] = slope[:, :1] * offset[:, :2] / np.where(radial > 0, radial, 1.0)[:, None]
        gradient[:, 2] = np.where(offset[:, 2] < 0, -slope[:, 1], slope[:, 1])
        return value, gradient

    def distance(self, points: FloatArray) -> FloatArray:
        """See `Solid`."""
        return self.distance_and_gradient(points)[0]

    @cached_property
    def outline(self) -> Surface:
        """See `Solid`."""
        import trimesh

        mesh = trimesh.creation.cylinder(radius=self.radius_mm, height=self.height_mm, sections=48)
        return Surface(np.asarray(mesh.vertices) + self.centre_mm, np.asarray(mesh.faces), "cylinder")

    @property
    def bounds(self) -> tuple[FloatArray, float]:
        """See `Solid`."""
        return self.centre_mm, float(np.hypot(self.radius_mm, self.height_mm / 2))


@dataclass(frozen=True)
class Capsule:
    """All points within `radius_mm` of a segment."""

    from_mm: FloatArray
    to_mm: FloatArray
    radius_mm: float

    def distance_and_gradient(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """See `Solid`."""
        along = self.to_mm - self.from_mm
        t = np.clip((points - self.from_mm) @ along / (along @ along), 0.0, 1.0)
        offset = points - (self.from_mm + t[:, None] * along)
        length = np.sqrt(dot(offset, offset))
        return length - self.radius_mm, offset / np.where(length > 0, length, 1.0)[:, None]

    def distance(self, points: FloatArray) -> FloatArray:
        """See `Solid`."""
        return self.distance_and_gradient(points)[0]

    @cached_property
    def outline(self) -> Surface:
        """See `Solid`."""
        import trimesh

        along = self.to_mm - self.from_mm
        length = float(np.linalg.norm(along))
        mesh = trimesh.creation.capsule(height=length, radius=self.radius_mm, count=[24, 24])
        turn = Rotation.align_vectors((along / length)[None], [[0.0, 0.0, 1.0]])[0].as_matrix()
        centred = np.asarray(mesh.vertices) - np.asarray(mesh.vertices).mean(axis=0)
        return Surface(centred @ turn.T + (self.from_mm + self.to_mm) / 2, np.asarray(mesh.faces), "capsule")

    @property
    def bounds(self) -> tuple[FloatArray, float]:
        """See `Solid`."""
        half = float(np.linalg.norm(self.to_mm - self.from_mm) / 2)
        return (self.from_mm + self.to_mm) / 2, half + self.radius_mm


@dataclass(frozen=True)
class Hull:
    """The convex hull of a closed mesh."""

    outline: Surface

    @classmethod
    def of(cls, mesh: Surface) -> Hull:
        """Return the hull of a mesh's vertices; a mesh that is not closed or has no volume is refused."""
        from scipy.spatial import ConvexHull

        if not mesh.is_closed:
            raise InputError(f"{mesh.name}: a casing must be a closed mesh; close its holes")
        if not abs(mesh.volume_mm3) > 0:
            raise InputError(f"{mesh.name}: a casing must have a volume")
        hull = ConvexHull(mesh.vertices)
        used, faces = np.unique(hull.simplices, return_inverse=True)
        vertices, faces = mesh.vertices[used], faces.reshape(-1, 3)
        corner, outwards = vertices[faces], hull.equations[:, :3]
        turned = dot(np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]), outwards) < 0
        faces[turned] = faces[turned][:, ::-1]
        return cls(Surface(vertices, faces, mesh.name))

    @cached_property
    def _planes(self) -> tuple[FloatArray, FloatArray]:
        normals = self.outline.face_normals
        return normals, read_only(dot(normals, self.outline.triangles[:, 0]))

    def distance_and_gradient(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """See `Solid`."""
        normals, offsets = self._planes
        heights = points @ normals.T - offsets
        nearest_plane = heights.argmax(axis=1)
        value, gradient = heights.max(axis=1), normals[nearest_plane].copy()
        outside = np.flatnonzero(value > 0)
        if outside.size:
            found = self.outline.nearest(points[outside])
            offset = points[outside] - found.points
            far = found.distance > 1e-9
            value[outside] = np.where(far, found.distance, value[outside])
            gradient[outside[far]] = offset[far] / found.distance[far, None]
        return value, gradient

    def distance(self, points: FloatArray) -> FloatArray:
        """See `Solid`."""
        return self.distance_and_gradient(points)[0]

    @property
    def bounds(self) -> tuple[FloatArray, float]:
        """See `Solid`."""
        centre = (self.outline.vertices.max(axis=0) + self.outline.vertices.min(axis=0)) / 2
        return centre, float(np.linalg.norm(self.outline.vertices - centre, axis=1).max())
