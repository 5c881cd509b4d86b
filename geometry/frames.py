"""Poses, axes and units: the one place where conventions live.

Head frame: right-handed, x to the subject's Right, y Anterior, z Superior (RAS), millimetres, origin named.
Coil frame: origin at the centre of the contact face; +z leaves that face towards the head; +x is the direction of the
electric field induced straight below the origin while the coil current first rises; +y = z cross x.
A pose maps coil points to head points: ``p_head = head_from_coil @ p_coil``, 4x4, column vectors, row-major storage.
Quaternions are ordered w x y z, with w >= 0 (w = 0: the first non-zero component positive).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final, Literal, TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.spatial.transform import Rotation

from .errors import InputError, ItemError

FloatArray: TypeAlias = NDArray[np.float64]
IntArray: TypeAlias = NDArray[np.int64]
Axes: TypeAlias = Literal["RAS", "LPS"]
Unit: TypeAlias = Literal["m", "cm", "mm"]

MM_PER_UNIT: Final[dict[str, float]] = {"m": 1000.0, "cm": 10.0, "mm": 1.0}

# The largest entry of R^T R - 1 that passes. Writing a matrix with 7 significant digits costs 1e-7; a matrix typed with
# three digits (1e-3) is not a rotation any more and is refused, never repaired in silence.
ORTHONORMAL_TOLERANCE: Final = 1e-6
# The last row is exact in every format; this only forgives what a float32 copy of exact numbers cannot even do.
LAST_ROW_TOLERANCE: Final = 1e-12
# Below this a quaternion component is rounding of zero, and must not decide which of q and -q is canonical.
QUATERNION_ZERO: Final = 1e-12

_LPS_FROM_RAS: Final = np.diag([-1.0, -1.0, 1.0, 1.0])


def read_only(array: ArrayLike) -> FloatArray:
    """Return a float64 copy that cannot be written to."""
    copy = np.array(array, dtype=np.float64)
    copy.setflags(write=False)
    return copy


def check_points(points: ArrayLike, name: str = "points") -> FloatArray:
    """Return finite points as float64, shape (..., 3), or refuse.

    Parameters
    ----------
    points : array_like, shape (..., 3)
        Coordinates; any frame, any unit.
    name : str
        What the caller calls them, for the message.

    Raises
    ------
    InputError
        Wrong shape, or a number that is not finite.

    Examples
    --------
    >>> check_points([1, 2, 3]).dtype
    dtype('float64')
    """
    try:
        array = np.asarray(points, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise InputError(f"{name}: expected numbers, got something that is not a number ({error})") from None
    if array.ndim < 1 or array.shape[-1] != 3:
        raise InputError(f"{name}: expected shape (..., 3), got {array.shape}")
    finite = np.isfinite(array).all(axis=-1)
    if not finite.all():
        index = int(np.flatnonzero(~np.atleast_1d(finite).ravel())[0])
        raise InputError(f"{name}: point {index} is not finite; every coordinate must be a number")
    return array


def unit_vectors(vectors: ArrayLike, name: str = "direction") -> FloatArray:
    """Return vectors scaled to length 1, shape (..., 3); zero length is refused.

    Examples
    --------
    >>> unit_vectors([0, 0, 5.0])
    array([0., 0., 1.])
    """
    array = check_points(vectors, name)
    length = np.linalg.norm(array, axis=-1, keepdims=True)
    if not (length > 0).all():
        raise InputError(f"{name}: a vector of zero length has no direction; give one with a length")
    return np.asarray(array / length)


def angle_between_deg(first: ArrayLike, second: ArrayLike) -> FloatArray:
    """Return the angle between vectors in degrees, 0 to 180, by arctan2: right to rounding everywhere.

    Parameters
    ----------
    first, second : array_like, shape (..., 3)
        Vectors of any length but zero, in one frame.

    Returns
    -------
    ndarray, shape (...)
        Degrees.

    Examples
    --------
    >>> float(angle_between_deg([1, 0, 0], [0, 2, 0]))
    90.0
    """
    a, b = np.asarray(first, dtype=np.float64), np.asarray(second, dtype=np.float64)
    cross = np.linalg.norm(np.cross(a, b), axis=-1)
    return np.asarray(np.degrees(np.arctan2(cross, (a * b).sum(axis=-1))))


def points_to_ras_mm(points: ArrayLike, *, axes: str, unit: str, name: str = "points") -> FloatArray:
    """Convert points to the head frame's axes and unit: RAS, millimetres. Done once, on reading.

    Examples
    --------
    >>> points_to_ras_mm([0.04, -0.02, 0.09], axes="LPS", unit="m")
    array([-40.,  20.,  90.])
    """
    if axes not in ("RAS", "LPS"):
        raise InputError(f"axes: expected RAS or LPS, got {axes!r}")
    if unit not in MM_PER_UNIT:
        raise InputError(f"unit: expected m, cm or mm, got {unit!r}")
    scaled = check_points(points, name) * MM_PER_UNIT[unit]
    return np.asarray(scaled * [-1.0, -1.0, 1.0]) if axes == "LPS" else scaled


def _rigid_problem(matrix: FloatArray) -> str | None:
    """Say what keeps one 4x4 matrix from being a rigid transform, or None."""
    if not np.isfinite(matrix).all():
        return "holds a number that is not finite"
    if not (np.abs(matrix[3] - [0, 0, 0, 1]) <= LAST_ROW_TOLERANCE).all():
        return f"has the last row {matrix[3].tolist()}, expected [0, 0, 0, 1]"
    rotation = matrix[:3, :3]
    determinant = float(np.linalg.det(rotation))
    deviation = float(np.abs(rotation.T @ rotation - np.eye(3)).max())
    if not determinant > 0:
        return f"is mirrored or flat: its determinant is {determinant:.6g}, expected +1 (a right-handed frame)"
    if not deviation <= ORTHONORMAL_TOLERANCE:
        return (
            f"is not orthonormal: it deviates by {deviation:.3g}, allowed {ORTHONORMAL_TOLERANCE:g}"
            f" (determinant {determinant:.6g}{_zooms_and_shears(matrix)});"
            " take out scale and shear, or call frames.nearest_rotation, which says by how much it turns"
        )
    return None


def _zooms_and_shears(matrix: FloatArray) -> str:
    """Say what transforms3d finds in a matrix that is no rotation."""
    from transforms3d.affines import decompose44

    _, _, zooms, shears = decompose44(matrix)
    return f", scales {np.round(zooms, 6).tolist()}, shears {np.round(shears, 6).tolist()}"


def check_rigid(matrix: ArrayLike, name: str = "matrix") -> FloatArray:
    """Return rigid transforms as float64, shape (..., 4, 4), or refuse and say what is wrong with which.

    Parameters
    ----------
    matrix : array_like, shape (..., 4, 4)
        Row-major, column vectors, translation in the last column.
    name : str
        What the caller calls it, for the message.

    Raises
    ------
    ItemError
        One line for each matrix that is mirrored, scaled, sheared, not finite, or has a wrong last row.

    Examples
    --------
    >>> check_rigid(np.eye(4)).shape
    (4, 4)
    """
    try:
        array = np.asarray(matrix, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise InputError(f"{name}: expected numbers ({error})") from None
    if array.ndim < 2 or array.shape[-2:] != (4, 4):
        raise InputError(f"{name}: expected shape (..., 4, 4), got {array.shape}")
    flat = array.reshape(-1, 4, 4)
    with np.errstate(invalid="ignore", over="ignore"):
        rotation = flat[:, :3, :3]
        gram = np.abs(np.swapaxes(rotation, 1, 2) @ rotation - np.eye(3)).max(axis=(1, 2))
        good = (
            np.isfinite(flat).all(axis=(1, 2))
            & (np.abs(flat[:, 3] - [0, 0, 0, 1]) <= LAST_ROW_TOLERANCE).all(axis=1)
            & (gram <= ORTHONORMAL_TOLERANCE)
        )
    good[good] = np.linalg.det(rotation[good]) > 0
    problems = [(int(i), f"{name} {_rigid_problem(flat[i])}") for i in np.flatnonzero(~good)]
    if problems:
        raise ItemError(problems)
    return array


@dataclass(frozen=True)
class Pose:
    """Rigid transforms from one named frame into another.

    Parameters
    ----------
    matrix : array_like, shape (..., 4, 4)
        ``to_from_from``: maps points of `from_frame` to points of `to_frame`; millimetres.
    to_frame, from_frame : str
        Names of both frames. Two RAS frames of one head with different origins have different names.

    Examples
    --------
    >>> head_from_coil = Pose(np.eye(4), to_frame="head", from_frame="coil")
    >>> tracker_from_head = Pose(np.eye(4), to_frame="tracker", from_frame="head")
    >>> (tracker_from_head @ head_from_coil).from_frame
    'coil'
    """

    matrix: FloatArray
    to_frame: str
    from_frame: str

    def __post_init__(self) -> None:
        name = f"{self.to_frame}_from_{self.from_frame}"
        object.__setattr__(self, "matrix", read_only(check_rigid(self.matrix, name)))

    def __matmul__(self, other: Pose) -> Pose:
        """Compose: ``a_from_b @ b_from_c = a_from_c``; frames that do not meet are refused."""
        if self.from_frame != other.to_frame:
            raise InputError(
                f"cannot compose {self.to_frame}_from_{self.from_frame} with {other.to_frame}_from_{other.from_frame}:"
                f" {self.from_frame!r} and {other.to_frame!r} are different frames; a transform between them is missing"
            )
        return Pose(self.matrix @ other.matrix, self.to_frame, other.from_frame)

    def inverse(self) -> Pose:
        """Return the transform the other way round, with its frames exchanged."""
        return Pose(invert_rigid(self.matrix), self.from_frame, self.to_frame)

    def apply(self, points: ArrayLike) -> FloatArray:
        """Map points of `from_frame`, shape (..., 3), to points of `to_frame`."""
        return transform_points(self.matrix, check_points(points))

    @property
    def quaternion_wxyz(self) -> FloatArray:
        """Canonical unit quaternions, shape (..., 4), ordered w x y z."""
        return quaternion_from_matrix(self.matrix)

    @property
    def origin(self) -> FloatArray:
        """The origin of `from_frame` seen in `to_frame`, shape (..., 3)."""
        return np.asarray(self.matrix[..., :3, 3])


def transform_points(matrix: FloatArray, points: FloatArray) -> FloatArray:
    """Map points (..., 3) by matrices (..., 4, 4) that broadcast against them."""
    return np.asarray((matrix[..., :3, :3] @ points[..., None])[..., 0] + matrix[..., :3, 3])


def invert_rigid(matrix: FloatArray) -> FloatArray:
    """Invert rigid transforms, shape (..., 4, 4), by the transpose."""
    inverse = np.zeros_like(matrix)
    transposed = np.swapaxes(matrix[..., :3, :3], -1, -2)
    inverse[..., :3, :3] = transposed
    inverse[..., :3, 3] = -(transposed @ matrix[..., :3, 3:])[..., 0]
    inverse[..., 3, 3] = 1.0
    return inverse


def rigid_from_axes(origin: FloatArray, x: FloatArray, y: FloatArray, z: FloatArray) -> FloatArray:
    """Build 4x4 matrices, shape (..., 4, 4), from origins and the axes' directions, each (..., 3)."""
    matrix = np.zeros((*origin.shape[:-1], 4, 4))
    matrix[..., :3, 0], matrix[..., :3, 1], matrix[..., :3, 2] = x, y, z
    matrix[..., :3, 3] = origin
    matrix[..., 3, 3] = 1.0
    return matrix


def quaternion_from_matrix(matrix: FloatArray) -> FloatArray:
    """Return canonical unit quaternions w x y z, shape (..., 4), of rigid matrices (..., 4, 4).

    Components below 1e-12 count as zero when the sign is chosen, so that rounding never decides between q and -q.

    Examples
    --------
    >>> quaternion_from_matrix(np.eye(4))
    array([1., 0., 0., 0.])
    """
    shape = matrix.shape[:-2]
    rotations = np.array(matrix[..., :3, :3], dtype=np.float64).reshape(-1, 3, 3)  # SciPy before 1.15 wants to own it
    q = Rotation.from_matrix(rotations).as_quat(scalar_first=True)
    significant = np.abs(q) > QUATERNION_ZERO
    leading = np.take_along_axis(q, significant.argmax(axis=1)[:, None], axis=1)
    q = np.where(leading < 0, -q, q)
    q[:, 0] = np.where(significant[:, 0], q[:, 0], 0.0)
    return np.asarray(q.reshape(*shape, 4) + 0.0)


def matrix_from_quaternion(quaternion_wxyz: ArrayLike, origin: ArrayLike) -> FloatArray:
    """Return rigid matrices (..., 4, 4) from unit quaternions w x y z (..., 4) and origins (..., 3).

    Raises
    ------
    InputError
        A quaternion whose length is off 1 by more than 1e-6: it is refused, not normalised in silence.

    Examples
    --------
    >>> matrix_from_quaternion([1, 0, 0, 0], [1, 2, 3])[:3, 3]
    array([1., 2., 3.])
    """
    q = np.asarray(quaternion_wxyz, dtype=np.float64)
    if q.shape[-1:] != (4,):
        raise InputError(f"quaternion: expected shape (..., 4), got {q.shape}")
    off = np.abs(np.linalg.norm(q, axis=-1) - 1.0)
    if not (off <= ORTHONORMAL_TOLERANCE).all():
        index = int(np.flatnonzero(~(np.atleast_1d(off) <= ORTHONORMAL_TOLERANCE))[0])
        raise InputError(
            f"quaternion {index}: its length is off 1 by {np.atleast_1d(off)[index]:.3g}; give unit quaternions"
        )
    points = check_points(origin, "origin")
    rotation = (
        Rotation.from_quat(np.array(q).reshape(-1, 4), scalar_first=True).as_matrix().reshape(*q.shape[:-1], 3, 3)
    )
    return rigid_from_axes(points, rotation[..., 0], rotation[..., 1], rotation[..., 2])


def nearest_rotation(matrix: ArrayLike) -> tuple[FloatArray, float]:
    """Repair one 3x3 matrix by name: the nearest rotation (Frobenius norm) and the angle it was off, in degrees.

    Raises
    ------
    InputError
        A mirrored or flat matrix, which no small turn repairs.

    Examples
    --------
    >>> rotation, degrees = nearest_rotation(np.eye(3) * 1.001)
    >>> round(degrees, 6)
    0.0
    """
    array = np.asarray(matrix, dtype=np.float64)
    if array.shape != (3, 3) or not np.isfinite(array).all():
        raise InputError(f"matrix: expected 3x3 finite numbers, got shape {array.shape}")
    if not np.linalg.det(array) > 0:
        raise InputError(f"matrix: its determinant is {np.linalg.det(array):.6g}; a mirrored matrix is not repaired")
    u, _, vt = np.linalg.svd(array)
    rotation = u @ vt
    columns = array / np.linalg.norm(array, axis=0)
    return rotation, float(angle_between_deg(columns.T, rotation.T).max())


def change_head_axes_ras_lps(matrix: FloatArray) -> FloatArray:
    """Express poses in the other head axes and keep the coil's own axes: ``L @ M``.

    The first of two conversions that are both called "RAS to LPS"; its own inverse.

    Examples
    --------
    >>> change_head_axes_ras_lps(np.eye(4))[:3, 0]
    array([-1.,  0.,  0.])
    """
    return np.asarray(_LPS_FROM_RAS @ matrix)


def change_head_and_coil_axes_ras_lps(matrix: FloatArray) -> FloatArray:
    """Express poses in the other head axes and turn the coil's axes half a turn about z: ``L @ M @ L``.

    The second of two conversions that are both called "RAS to LPS"; its own inverse. The coil's x and y axes change
    sign, so a reader that does not turn them back sees the current reversed.

    Examples
    --------
    >>> change_head_and_coil_axes_ras_lps(np.eye(4))[:3, 0]
    array([1., 0., 0.])
    """
    return np.asarray(_LPS_FROM_RAS @ matrix @ _LPS_FROM_RAS)


def midline_reference(normals: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return anterior in the tangent plane and the axis at +90 degrees of midline angle (a cross n), each (..., 3).

    Raises
    ------
    ItemError
        Where the outward normal is within 30 degrees of the anterior-posterior axis.
    """
    n = np.atleast_2d(normals)
    off_axis = angle_between_deg(n, [0.0, 1.0, 0.0])
    off_axis = np.minimum(off_axis, 180.0 - off_axis)
    bad = np.flatnonzero(~(off_axis >= MIDLINE_LEAST_DEG))
    if bad.size:
        raise ItemError(
            (
                int(i),
                f"the scalp there faces within {MIDLINE_LEAST_DEG:g} degrees of the anterior-posterior axis"
                f" ({off_axis[i]:.1f}), where a midline angle means little; give the direction as a vector",
            )
            for i in bad
        )
    anterior = np.array([0.0, 1.0, 0.0]) - n * n[:, 1:2]
    anterior /= np.linalg.norm(anterior, axis=1, keepdims=True)
    return anterior, np.cross(anterior, n)


MIDLINE_LEAST_DEG: Final = 30.0


def midline_direction(angle_deg: ArrayLike, normals: FloatArray) -> FloatArray:
    """Return unit directions (N, 3) in the tangent plane at midline angles: cos(angle) a + sin(angle) (a cross n).

    Parameters
    ----------
    angle_deg : array_like, shape (N,)
        0 is anterior, positive clockwise seen from outside the head.
    normals : ndarray, shape (N, 3)
        Outward unit normals, head frame.

    Raises
    ------
    ItemError
        As `midline_reference`.

    Examples
    --------
    >>> midline_direction([90.0], np.array([[0.0, 0.0, 1.0]])).round(12) + 0.0
    array([[1., 0., 0.]])
    """
    anterior, across = midline_reference(normals)
    angle = np.radians(np.asarray(angle_deg, dtype=np.float64))[:, None]
    return np.asarray(np.cos(angle) * anterior + np.sin(angle) * across)
