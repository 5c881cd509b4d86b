"""An invented head and cortex, made by code: smooth, closed, with nose and ears, of human size. Nobody's anatomy."""

from __future__ import annotations

from typing import Final

import numpy as np

from .frames import FloatArray, unit_vectors
from .surface import Surface, sphere_surface

# Half axes of the skull's ellipsoid, mm: right-left, front-back, up-down.
SKULL_HALF_MM: Final = (77.0, 96.0, 90.0)
# Bumps on the ellipsoid: direction, height in mm, width in degrees.
_FEATURES: Final = (
    ((0.0, 0.93, -0.38), 24.0, 9.0),  # nose
    ((-0.93, -0.12, -0.42), 17.0, 10.0),  # left ear
    ((0.93, -0.12, -0.42), 17.0, 10.0),  # right ear
    ((0.0, 0.70, -0.72), 12.0, 26.0),  # chin
)
_CORTEX_SCALE: Final = 0.82


def _radius(directions: FloatArray) -> FloatArray:
    ellipsoid = 1.0 / np.sqrt(((directions / SKULL_HALF_MM) ** 2).sum(axis=1))
    radius = ellipsoid.copy()
    for direction, height, width in _FEATURES:
        cosine = directions @ unit_vectors(direction)
        radius += height * np.exp((cosine - 1.0) / (1.0 - np.cos(np.radians(width))))
    return np.asarray(radius)


def phantom_scalp() -> Surface:
    """Return the invented scalp, origin between the ears' level and the vertex; RAS, mm.

    Examples
    --------
    >>> head = phantom_scalp()
    >>> head.is_closed, bool(head.volume_mm3 > 0)
    (True, True)
    """
    ball = sphere_surface(1.0, subdivisions=5)
    return Surface(ball.vertices * _radius(ball.vertices)[:, None], ball.faces, "phantom scalp")


def phantom_cortex() -> Surface:
    """Return an invented cortex under the scalp: the smooth skull scaled down, with shallow folds."""
    ball = sphere_surface(1.0, subdivisions=4)
    d = ball.vertices
    base = _CORTEX_SCALE / np.sqrt(((d / SKULL_HALF_MM) ** 2).sum(axis=1))
    folds = 1.5 * np.sin(9 * d[:, 1] + 2 * np.sin(5 * d[:, 0])) * np.sin(7 * d[:, 2] + 4 * d[:, 1])
    return Surface(d * (base + folds)[:, None], ball.faces, "phantom cortex")
