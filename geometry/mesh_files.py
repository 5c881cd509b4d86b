"""PLY, STL, OBJ (trimesh) and GIfTI (nibabel), packed by gzip or not, to one `Surface`: RAS, mm, vertex order kept.

GIfTI coordinates are taken through the file's own coordinate-system matrix. STL has no shared vertices; equal ones are
joined, so that a closed STL reads as a closed surface.
"""

from __future__ import annotations

import gzip
import io
from pathlib import Path
from typing import Any

import numpy as np

from .errors import InputError
from .frames import FloatArray, IntArray, points_to_ras_mm
from .surface import Surface

MESH_SUFFIXES = (".ply", ".stl", ".obj", ".gii")


def parse_surface(data: bytes, name: str, *, axes: str = "RAS", unit: str = "mm") -> Surface:
    """Read a surface from bytes.

    Parameters
    ----------
    data : bytes
        The file.
    name : str
        Its name: the suffix (``.gz`` after it or not) says the format, messages show it.
    axes, unit : str
        Of the file; converted to RAS and mm here and nowhere else.

    Raises
    ------
    InputError
        An unknown suffix, a file that is damaged or holds no triangles.
    """
    packed = Path(name).suffix.lower() == ".gz"
    suffix = Path(Path(name).stem if packed else name).suffix.lower()
    if suffix not in MESH_SUFFIXES:
        raise InputError(f"{name}: expected a surface ({' '.join(MESH_SUFFIXES)}), got {suffix or 'no suffix'!r}")
    if not data:
        raise InputError(f"{name}: the file is empty")
    try:
        data = gzip.decompress(data) if packed else data
        vertices, faces = _gifti(data) if suffix == ".gii" else _trimesh(data, suffix)
    except InputError:
        raise
    except Exception as error:  # noqa: BLE001 - a damaged file makes third-party readers raise almost anything
        if isinstance(error, ImportError):  # trimesh looks for helpers when it cannot make sense of the bytes
            error = ValueError("damaged, or of another kind")
        what = str(error).split("\n")[0][:120] or type(error).__name__
        raise InputError(f"{name}: cannot be read as {suffix[1:].upper()} ({what})") from None
    if not len(vertices) or faces.ndim != 2 or faces.shape[1:] != (3,) or not len(faces):
        raise InputError(f"{name}: the mesh is empty or has no triangles; expected a triangle surface")
    return Surface(points_to_ras_mm(vertices, axes=axes, unit=unit, name=f"{name}: vertices"), faces, name)


def read_surface(path: Path | str, *, axes: str = "RAS", unit: str = "mm") -> Surface:
    """Read a surface from a file; see `parse_surface`."""
    try:
        data = Path(path).read_bytes()
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror})") from None
    return parse_surface(data, Path(path).name, axes=axes, unit=unit)


def _trimesh(data: bytes, suffix: str) -> tuple[FloatArray, IntArray]:
    import trimesh

    mesh: Any = trimesh.load(io.BytesIO(data), file_type=suffix[1:], process=False, maintain_order=True, force="mesh")
    vertices, faces = np.array(mesh.vertices, dtype=np.float64), np.array(mesh.faces, dtype=np.int64)
    if suffix == ".stl":
        vertices, inverse = np.unique(vertices, axis=0, return_inverse=True)
        faces = inverse.reshape(-1)[faces]
    return vertices, faces


def _gifti(data: bytes) -> tuple[FloatArray, IntArray]:
    import nibabel
    from nibabel.gifti.gifti import GiftiImage

    image: Any = GiftiImage.from_bytes(data)
    points = image.get_arrays_from_intent("NIFTI_INTENT_POINTSET")
    corners = image.get_arrays_from_intent("NIFTI_INTENT_TRIANGLE")
    if len(points) != 1 or len(corners) != 1:
        raise InputError(
            f"expected one point set and one triangle list, got {len(points)} and {len(corners)}"
            f" (read by nibabel {nibabel.__version__}); is it a surface?"
        )
    vertices = np.asarray(points[0].data, dtype=np.float64)
    system = points[0].coordsys
    if system is not None and system.xform is not None:
        xform = np.asarray(system.xform, dtype=np.float64)
        vertices = vertices @ xform[:3, :3].T + xform[:3, 3]
    return vertices, np.asarray(corners[0].data, dtype=np.int64)
