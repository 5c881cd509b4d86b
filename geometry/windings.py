"""Windings to magnetic dipole elements: quadrature over the area that the wire encloses.

A closed current is a sheet of dipoles over any surface that it bounds. Coil frame, millimetres; moments per A/us of
coil current change, in A m2 / s for 1 A/us.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np

from .coil import Coil, Loop, Spiral
from .errors import InputError
from .frames import FloatArray, angle_between_deg, read_only
from .triangles import cross

# Radial nodes for each smooth piece, and nodes around: chosen so that the field 15 mm below the scalp is within 0.1 %
# of a converged one for windings of up to 60 mm radius (tests/geometry/test_windings.py holds it).
RADIAL: Final = 3
AROUND: Final = 16
_A_PER_S_IN_A_PER_US: Final = 1e6
_M2_PER_MM2: Final = 1e-6


@dataclass(frozen=True)
class Elements:
    """Magnetic dipoles that stand for a coil, coil frame.

    Attributes
    ----------
    positions_mm : ndarray, shape (E, 3)
    moments : ndarray, shape (E, 3)
        Moment rates in A m2 / s for a coil current that changes by 1 A/us.
    """

    positions_mm: FloatArray
    moments: FloatArray


def coil_elements(coil: Coil, *, radial: int = RADIAL, around: int = AROUND) -> Elements:
    """Return the dipole elements of a coil's windings.

    Parameters
    ----------
    coil : Coil
    radial, around : int
        Gauss-Legendre nodes along the radius (for each smooth piece) and equal steps around.

    Raises
    ------
    InputError
        A coil file without windings.

    Examples
    --------
    >>> from coilwright.geometry.coil import load_coil
    >>> from coilwright.geometry.files import Inputs
    >>> elements = coil_elements(load_coil("figure8-generic", Inputs()))
    >>> bool(abs(elements.moments.sum(axis=0)).max() < 1e-6 * abs(elements.moments).sum())
    True
    """
    paths = iter(coil.paths)
    parts = []
    for part in coil.file.windings:
        if part.loop:
            parts.append(_loop(part.loop, radial, around))
        elif part.spiral:
            parts.append(_spiral(part.spiral, radial, around))
        else:
            parts.append(_path(next(paths), radial))
    if not parts:
        raise InputError(f"{coil.name}: the coil file has no windings; a field needs them")
    return Elements(
        read_only(np.concatenate([positions for positions, _ in parts])),
        read_only(np.concatenate([m for _, m in parts]) * _A_PER_S_IN_A_PER_US * _M2_PER_MM2),
    )


def quadrature_error(coil: Coil, points_mm: FloatArray, *, radial: int = RADIAL, around: int = AROUND) -> float:
    """Estimate the relative error of the default elements: against three times the nodes, in free space.

    Parameters
    ----------
    coil : Coil
    points_mm : ndarray, shape (P, 3)
        Coil frame, where the field is wanted.

    Returns
    -------
    float
        Largest difference over the largest field.
    """
    fields = [_free_space_field(coil_elements(coil, radial=radial * k, around=around * k), points_mm) for k in (1, 3)]
    scale = np.linalg.norm(fields[1], axis=1).max()
    return float(np.linalg.norm(fields[0] - fields[1], axis=1).max() / scale)


# How far the field below the origin may stand off +x: a real coil's lead adds a few degrees.
X_AXIS_LIMIT_DEG: Final = 30.0
_BELOW_MM: Final = 20.0


def check_x_axis(coil: Coil) -> None:
    """Refuse windings whose field below the origin is not along +x: every pose would be turned by the difference.

    In free space, 20 mm below the origin; a coil with no field there (a round coil about its own centre) is refused as
    well, because its +x would mean nothing.

    Raises
    ------
    InputError
        With the angle, and the usual reason.
    """
    elements = coil_elements(coil)
    grid = np.array([[x, y, _BELOW_MM] for x in range(-60, 61, 20) for y in range(-60, 61, 20)], dtype=np.float64)
    below = _free_space_field(elements, np.array([[0.0, 0.0, _BELOW_MM]]))[0]
    largest = float(np.linalg.norm(_free_space_field(elements, grid), axis=1).max())
    if not np.linalg.norm(below) > 0.1 * largest:
        raise InputError(
            f"{coil.name}: windings: there is hardly a field below the origin, so +x means nothing; put the origin"
            " where the field is (over the windings of a round coil)"
        )
    off = float(angle_between_deg(below, [1.0, 0.0, 0.0]))
    if not off <= X_AXIS_LIMIT_DEG:
        raise InputError(
            f"{coil.name}: windings: while the current rises the field below the origin stands {off:.0f} degrees off"
            " +x; exchange the senses, or turn the coil's axes"
        )


def _free_space_field(elements: Elements, points_mm: FloatArray) -> FloatArray:
    """Minus the rate of the vector potential of the dipoles, V/m per A/us."""
    offset = (points_mm[:, None] - elements.positions_mm) * 1e-3
    distance = np.linalg.norm(offset, axis=2, keepdims=True)
    return np.asarray(-1e-7 * (cross(elements.moments[None], offset) / distance**3).sum(axis=1))


def _disc_piece(inner: float, outer: float, radial: int) -> tuple[FloatArray, FloatArray]:
    """Gauss-Legendre radii and weights of area between two radii, full circle."""
    nodes, weights = np.polynomial.legendre.leggauss(radial)
    radius = (outer - inner) / 2 * nodes + (outer + inner) / 2
    return radius, weights * (outer - inner) / 2 * 2 * np.pi * radius


def _rings(
    centre: tuple[float, float, float], radii: FloatArray, strength: FloatArray, around: int
) -> tuple[FloatArray, FloatArray]:
    """Spread the strength of each ring over equal steps around, every other ring turned by half a step."""
    step = 2 * np.pi / around
    angle = step * (np.arange(around)[None] + 0.5 * (np.arange(len(radii))[:, None] % 2))
    positions = np.empty((len(radii), around, 3))
    positions[..., 0] = centre[0] + radii[:, None] * np.cos(angle)
    positions[..., 1] = centre[1] + radii[:, None] * np.sin(angle)
    positions[..., 2] = centre[2]
    moments = np.zeros_like(positions)
    moments[..., 2] = strength[:, None] / around
    return positions.reshape(-1, 3), moments.reshape(-1, 3)


def _loop(loop: Loop, radial: int, around: int) -> tuple[FloatArray, FloatArray]:
    radii, area = _disc_piece(0.0, loop.radius_mm, 2 * radial)
    return _rings(loop.centre_mm, radii, area * loop.turns * loop.sense, around)


def _spiral(spiral: Spiral, radial: int, around: int) -> tuple[FloatArray, FloatArray]:
    """Turns spread evenly from inner to outer: at radius r, the turns outside r enclose it."""
    inner_radii, inner_area = _disc_piece(0.0, spiral.inner_mm, radial)
    outer_radii, outer_area = _disc_piece(spiral.inner_mm, spiral.outer_mm, radial)
    share = (spiral.outer_mm - outer_radii) / (spiral.outer_mm - spiral.inner_mm)
    strength = np.concatenate([inner_area, outer_area * share]) * spiral.turns * spiral.sense
    return _rings(spiral.centre_mm, np.concatenate([inner_radii, outer_radii]), strength, around)


def _path(wire: FloatArray, radial: int) -> tuple[FloatArray, FloatArray]:
    """A fan of triangles from the wire's middle; an open wire is closed by a straight stretch."""
    following = np.roll(wire, -1, axis=0)
    middle = wire.mean(axis=0)
    area = 0.5 * cross(wire - middle, following - middle)
    nodes, weights = np.polynomial.legendre.leggauss(2 * radial)
    u, w = (nodes + 1) / 2, weights / 2 * (nodes + 1)
    edge = (wire + following) / 2 - middle
    positions = middle + u[:, None, None] * edge
    moments = w[:, None, None] * area
    return positions.reshape(-1, 3), moments.reshape(-1, 3)
