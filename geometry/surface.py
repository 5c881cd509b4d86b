"""Scalp and cortex as one immutable triangle mesh: checking, nearest point, inside or outside, normals.

Head frame, millimetres. Faces wind so that their normals point outwards. Vertex order is that of the file.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Final

import numpy as np
from numpy.typing import ArrayLike
from scipy.spatial import KDTree

from . import triangles as tri
from .chunks import in_chunks
from .errors import Finding, InputError, ItemError
from .frames import FloatArray, IntArray, angle_between_deg, check_points, read_only

# Extent of the largest side of a head's bounding box, mm: from a newborn's head to a head with neck and shoulders.
# Outside it the declared unit is wrong. Common practice, no source.
SHORTEST_HEAD_MM: Final = 100.0
LONGEST_HEAD_MM: Final = 450.0
# Triangles flatter than this have no normal. mm2
DEGENERATE_AREA_MM2: Final = 1e-12
QUALITY_RADII_MM: Final = (8.0, 15.0, 30.0)
QUALITY_LIMIT_DEG: Final = 5.0
# Points whose normals are found at once: their working arrays stay in the processor's cache.
NORMALS_AT_ONCE: Final = 500


@dataclass(frozen=True)
class Nearest:
    """Nearest points of a surface.

    Attributes
    ----------
    points : ndarray, shape (N, 3)
    distance : ndarray, shape (N,)
        Unsigned, mm.
    face : ndarray of int, shape (N,)
    barycentric : ndarray, shape (N, 3)
    """

    points: FloatArray
    distance: FloatArray
    face: IntArray
    barycentric: FloatArray


@dataclass(frozen=True, eq=False)
class Surface:
    """A triangle mesh in the head frame.

    Parameters
    ----------
    vertices : array_like, shape (V, 3)
        RAS, millimetres.
    faces : array_like of int, shape (F, 3)
        Corners, anticlockwise seen from outside.
    name : str
        How messages call it.

    Raises
    ------
    InputError
        Empty, not finite, indices out of range, or triangles without area.

    Examples
    --------
    >>> ball = sphere_surface(90.0, subdivisions=3)
    >>> ball.findings()
    ()
    """

    vertices: FloatArray
    faces: IntArray
    name: str = "surface"

    def __post_init__(self) -> None:
        vertices = read_only(check_points(self.vertices, f"{self.name}: vertices"))
        faces = np.array(self.faces, dtype=np.int64)
        faces.setflags(write=False)
        if vertices.ndim != 2 or not len(vertices) or faces.ndim != 2 or faces.shape[1:] != (3,) or not len(faces):
            raise InputError(f"{self.name}: the mesh is empty or has no triangles; expected a triangle surface")
        if not (faces.min() >= 0 and faces.max() < len(vertices)):
            raise InputError(f"{self.name}: a face names vertex {faces.max()}, but there are {len(vertices)} vertices")
        object.__setattr__(self, "vertices", vertices)
        object.__setattr__(self, "faces", faces)
        flat = np.flatnonzero(~(self.areas > DEGENERATE_AREA_MM2))
        if flat.size:
            raise InputError(
                f"{self.name}: {flat.size} triangles have no area (the first is face {flat[0]});"
                " take out degenerate triangles in a mesh editor"
            )

    @cached_property
    def triangles(self) -> FloatArray:
        """Corners, shape (F, 3, 3)."""
        return read_only(self.vertices[self.faces])

    @cached_property
    def area_vectors(self) -> FloatArray:
        """Face normals times areas, shape (F, 3), mm2."""
        return read_only(tri.area_vectors(self.triangles))

    @cached_property
    def areas(self) -> FloatArray:
        """Face areas, shape (F,), mm2."""
        return read_only(np.linalg.norm(self.area_vectors, axis=1))

    @cached_property
    def face_normals(self) -> FloatArray:
        """Outward unit normals, shape (F, 3)."""
        return read_only(self.area_vectors / self.areas[:, None])

    @cached_property
    def volume_mm3(self) -> float:
        """Signed volume; positive where normals point outwards."""
        a, b, c = self.triangles.swapaxes(0, 1)
        return float(tri.dot(a, tri.cross(b, c)).sum() / 6.0)

    @cached_property
    def extent_mm(self) -> FloatArray:
        """Sides of the bounding box, shape (3,)."""
        return read_only(np.ptp(self.vertices, axis=0))

    @cached_property
    def vertex_areas(self) -> FloatArray:
        """A third of the area of the faces around each vertex, shape (V,), mm2."""
        return read_only(np.bincount(self.faces.ravel(), np.repeat(self.areas / 3.0, 3), len(self.vertices)))

    @cached_property
    def is_closed(self) -> bool:
        """Whether every edge joins exactly two faces that wind alike."""
        edges = self._directed_edges
        keys = edges[:, 0] * len(self.vertices) + edges[:, 1]
        reverse = edges[:, 1] * len(self.vertices) + edges[:, 0]
        return len(np.unique(keys)) == len(keys) and bool(np.array_equal(np.sort(keys), np.sort(reverse)))

    @cached_property
    def _directed_edges(self) -> IntArray:
        return np.concatenate([self.faces[:, [0, 1]], self.faces[:, [1, 2]], self.faces[:, [2, 0]]])

    @cached_property
    def _centroid_tree(self) -> KDTree:
        return KDTree(self.triangles.mean(axis=1))

    @cached_property
    def _vertex_tree(self) -> KDTree:
        """Of the vertices that belong to a face."""
        return KDTree(self.vertices[np.unique(self.faces)])

    @cached_property
    def _reach(self) -> FloatArray:
        """How far each triangle's corners lie from its centroid, shape (F,), mm."""
        spokes = self.triangles - self.triangles.mean(axis=1, keepdims=True)
        return np.asarray(np.linalg.norm(spokes, axis=2).max(axis=1))

    def candidate_pairs(self, points: FloatArray, radius: FloatArray) -> tuple[IntArray, IntArray]:
        """Return (point index, face index) of every face that may come within `radius` of a point.

        Parameters
        ----------
        points : ndarray, shape (N, 3)
        radius : ndarray, shape (N,)
        """
        lists = self._centroid_tree.query_ball_point(points, radius + self._reach.max(), return_sorted=False)
        counts = np.fromiter(map(len, lists), dtype=np.int64, count=len(lists))
        owner = np.repeat(np.arange(len(points)), counts)
        face = np.concatenate([np.asarray(part, dtype=np.int64) for part in lists]) if len(lists) else owner
        offset = points[owner] - self._centroid_tree.data[face]
        near = tri.dot(offset, offset) <= (radius[owner] + self._reach[face]) ** 2 * (1 + 1e-12)
        return owner[near], face[near]

    def nearest(self, points: ArrayLike, *, chunk: int = 1_000) -> Nearest:
        """Return the nearest points on the triangles, not only on the vertices.

        Parameters
        ----------
        points : array_like, shape (N, 3)
            Head frame, mm.
        chunk : int
            Points at once; bounds memory.

        Examples
        --------
        >>> found = sphere_surface(90.0, subdivisions=3).nearest([[0, 0, 60.0]])
        >>> bool(abs(found.distance[0] - 30) < 0.5)
        True
        """
        query = np.atleast_2d(check_points(points))
        _ = self._centroid_tree, self._vertex_tree, self._reach, self.face_normals  # made once, before threads ask
        parts = in_chunks(lambda part: self._nearest_chunk(query[part]), len(query), chunk)
        if not parts:
            return Nearest(np.empty((0, 3)), np.empty(0), np.empty(0, dtype=np.int64), np.empty((0, 3)))
        return Nearest(
            np.concatenate([p.points for p in parts]),
            np.concatenate([p.distance for p in parts]),
            np.concatenate([p.face for p in parts]),
            np.concatenate([p.barycentric for p in parts]),
        )

    def _nearest_chunk(self, points: FloatArray) -> Nearest:
        """An upper bound from the nearest vertex, then every face that could be nearer."""
        bound = np.asarray(self._vertex_tree.query(points)[0]) * (1 + 1e-9) + 1e-9
        owner, face = self.candidate_pairs(points, bound)
        plane = tri.dot(points[owner] - self.triangles[face, 0], self.face_normals[face])
        owner, face = (part[np.abs(plane) <= bound[owner]] for part in (owner, face))
        squared, weights = self._squared(points[owner], face)
        starts = np.flatnonzero(np.diff(owner, prepend=-1))
        best = np.minimum.reduceat(squared, starts)
        rows = np.flatnonzero(squared == best[owner])
        rows = rows[np.unique(owner[rows], return_index=True)[1]]
        where = tri.dot(weights[rows, None, :], self.triangles[face[rows]].swapaxes(1, 2))
        return Nearest(where, np.sqrt(best), face[rows], weights[rows])

    def _squared(self, points: FloatArray, face: IntArray) -> tuple[FloatArray, FloatArray]:
        corners = self.triangles[face]
        weights = tri.nearest_barycentric(points, corners)
        offset = np.einsum("ni,nij->nj", weights, corners) - points
        return tri.dot(offset, offset), weights

    def signed_distance(self, points: ArrayLike, found: Nearest | None = None) -> FloatArray:
        """Return distances (N,), positive outside; the sign by angle-weighted pseudonormals.

        Baerentzen and Aanaes 2005, IEEE Trans Vis Comput Graph 11:243-253: right for closed surfaces, whether the
        nearest point lies in a face, on an edge or at a corner.

        Parameters
        ----------
        points : array_like, shape (N, 3)
        found : Nearest, optional
            The answer of `nearest` for these points, if it is known already.
        """
        query = np.atleast_2d(check_points(points))
        found = self.nearest(query) if found is None else found
        normal = self._pseudonormals(found)
        return np.where(tri.dot(query - found.points, normal) < 0, -found.distance, found.distance)

    def _pseudonormals(self, found: Nearest) -> FloatArray:
        normal = self.face_normals[found.face].copy()
        zeros = found.barycentric <= 1e-12
        corner = np.flatnonzero(zeros.sum(axis=1) == 2)
        normal[corner] = self._vertex_normals[self.faces[found.face[corner], zeros[corner].argmin(axis=1)]]
        edge = np.flatnonzero(zeros.sum(axis=1) == 1)
        normal[edge] += self.face_normals[self._neighbours[found.face[edge], zeros[edge].argmax(axis=1)]]
        return np.asarray(normal)

    @cached_property
    def _vertex_normals(self) -> FloatArray:
        """Sum of face normals weighted by the angle at the vertex, shape (V, 3), not of unit length."""
        total = np.zeros_like(self.vertices)
        for k in range(3):
            to_next = self.triangles[:, (k + 1) % 3] - self.triangles[:, k]
            to_last = self.triangles[:, (k + 2) % 3] - self.triangles[:, k]
            angle = np.radians(angle_between_deg(to_next, to_last))
            np.add.at(total, self.faces[:, k], self.face_normals * angle[:, None])
        return np.asarray(total)

    @cached_property
    def _neighbours(self) -> IntArray:
        """The face across the edge opposite to each corner, shape (F, 3); the face itself at a border."""
        count = len(self.faces)
        edges = self._directed_edges
        keys = edges[:, 0] * len(self.vertices) + edges[:, 1]
        order = np.argsort(keys)
        reverse = edges[:, 1] * len(self.vertices) + edges[:, 0]
        at = np.minimum(np.searchsorted(keys[order], reverse), len(keys) - 1)
        partner = np.where(keys[order][at] == reverse, order[at] % count, np.tile(np.arange(count), 3))
        return np.asarray(partner.reshape(3, count)[[1, 2, 0]].T)

    def normals(self, points: ArrayLike, radius_mm: float) -> FloatArray:
        """Return outward unit normals (N, 3): the area-weighted mean over the surface within `radius_mm` of each point.

        Raises
        ------
        ItemError
            A point with no surface in that radius, or where opposite sides cancel.

        Examples
        --------
        >>> ball = sphere_surface(90.0, subdivisions=4)
        >>> bool(ball.normals([[0, 0, 90.0]], 15.0)[0, 2] > 0.9999)
        True
        """
        query = np.atleast_2d(check_points(points))
        _ = self._centroid_tree, self._reach, self.face_normals  # made once, before threads ask for them
        parts = in_chunks(lambda part: self._normals(query[part], float(radius_mm)), len(query), NORMALS_AT_ONCE)
        bad = np.flatnonzero(np.concatenate([np.isnan(part[:, 0]) for part in parts])) if parts else np.empty(0, int)
        if bad.size:
            raise ItemError(
                (
                    int(i),
                    f"{self.name} has no normal at {np.round(query[i], 1).tolist()}: within {radius_mm:g} mm it is"
                    " missing or faces both ways; choose another point or a larger radius",
                )
                for i in bad
            )
        return np.concatenate(parts) if parts else np.empty((0, 3))

    def _normals(self, query: FloatArray, radius_mm: float) -> FloatArray:
        """Normals of a chunk of points; NaN where there is none."""
        owner, face, area = self._areas_in_balls(query, radius_mm)
        normals = self.face_normals[face]
        total = np.stack([np.bincount(owner, area * normals[:, k], len(query)) for k in range(3)], axis=1)
        weight = np.bincount(owner, area, len(query))
        length = np.linalg.norm(total, axis=1)
        good = (length > 0.1 * weight) & (weight > 0)
        return np.where(good[:, None], total / np.where(good, length, 1.0)[:, None], np.nan)

    def _areas_in_balls(self, centres: FloatArray, radius: float) -> tuple[IntArray, IntArray, FloatArray]:
        """Pairs of ball and face, and the face's area inside the ball; faces cut by the ball's edge are clipped."""
        pairs = KDTree(centres).sparse_distance_matrix(
            self._centroid_tree, radius + self._reach.max(), output_type="ndarray"
        )
        pairs = pairs[pairs["v"] < radius + self._reach[pairs["j"]]]
        owner, face = pairs["i"].astype(np.int64), pairs["j"].astype(np.int64)
        area = self.areas[face].copy()
        cut = np.flatnonzero(pairs["v"] + self._reach[face] > radius)
        area[cut] = tri.area_in_ball(
            self.triangles[face[cut]], self.face_normals[face[cut]], centres[owner[cut]], radius
        )
        order = np.lexsort((face, owner))  # sums run in one order on every machine
        return owner[order], face[order], area[order]

    def normal_disagreement_deg(self, points: ArrayLike) -> FloatArray:
        """Return the largest angle (N,) between the normals at 8, 15 and 30 mm: how far bumps may tip a coil."""
        at = [self.normals(points, radius) for radius in QUALITY_RADII_MM]
        pairs = [angle_between_deg(at[i], at[j]) for i, j in ((0, 1), (1, 2), (0, 2))]
        return np.asarray(np.max(pairs, axis=0))

    def ray_exit(self, origins: ArrayLike, directions: ArrayLike) -> FloatArray:
        """Return the distance (N,) along unit directions to the farthest crossing; NaN where there is none."""
        return tri.last_crossing(
            np.atleast_2d(check_points(origins)), np.atleast_2d(check_points(directions)), self.triangles
        )

    def findings(self) -> tuple[Finding, ...]:
        """Say what a careful person would look at: a surface that is not closed."""
        if self.is_closed:
            return ()
        keys = np.sort(self._directed_edges, axis=1)
        counts = np.unique(keys, axis=0, return_counts=True)[1]
        message = (
            f"the surface is not closed ({(counts != 2).sum()} edges do not join two faces): inside and outside are not"
            " certain near its borders; close it in a mesh editor"
        )
        return (Finding(self.name, message),)


def check_winding(surface: Surface) -> None:
    """Refuse a mesh whose faces wind against each other: neither its inside nor its normals mean anything.

    Raises
    ------
    InputError
    """
    edges = surface._directed_edges  # noqa: SLF001 - a function of this module
    keys = edges[:, 0] * len(surface.vertices) + edges[:, 1]
    against = len(keys) - len(np.unique(keys))
    if against:
        raise InputError(
            f"{surface.name}: {against} edges join faces that wind against each other; make the winding consistent,"
            " normals outwards, in a mesh editor"
        )


def check_head_size(surface: Surface, unit: str) -> None:
    """Refuse a mesh that is no head in the declared unit: the usual mistake is metres read as millimetres.

    Raises
    ------
    InputError
        With the factor that would make it a head.
    """
    largest = float(surface.extent_mm.max())
    if SHORTEST_HEAD_MM <= largest <= LONGEST_HEAD_MM:
        return
    remedy = "check the file's unit"
    for other, factor in (("m", 1000.0), ("cm", 10.0), ("mm", 1.0)):
        if SHORTEST_HEAD_MM <= largest / {"m": 1000.0, "cm": 10.0, "mm": 1.0}[unit] * factor <= LONGEST_HEAD_MM:
            remedy = f"it would be a head in {other}: say `unit: {other}`"
    raise InputError(
        f"{surface.name}: in the declared unit ({unit}) its largest side is {largest:.4g} mm; expected a head of"
        f" {SHORTEST_HEAD_MM:g} to {LONGEST_HEAD_MM:g} mm; {remedy}"
    )


def outward(surface: Surface) -> tuple[Surface, tuple[Finding, ...]]:
    """Return the surface with its faces wound outwards, and say so loudly if they had to be turned over."""
    if not surface.volume_mm3 < 0:
        return surface, ()
    turned = Surface(surface.vertices, surface.faces[:, ::-1], surface.name)
    return turned, (Finding(surface.name, "its normals point inwards: every face was turned over on reading"),)


def sphere_surface(radius_mm: float, *, subdivisions: int, centre_mm: ArrayLike = (0.0, 0.0, 0.0)) -> Surface:
    """Return an icosahedral sphere with its vertices at `radius_mm`; 20 * 4**subdivisions faces.

    Examples
    --------
    >>> sphere_surface(90.0, subdivisions=2).faces.shape
    (320, 3)
    """
    import trimesh

    ball = trimesh.creation.icosphere(subdivisions=subdivisions, radius=1.0)
    directions = ball.vertices / np.linalg.norm(ball.vertices, axis=1, keepdims=True)
    return Surface(directions * radius_mm + check_points(centre_mm), np.asarray(ball.faces), "sphere")
