"""The conducting sphere of the field model: given, or fitted to the scalp around a target.

Head frame, millimetres. The field inside a sphere does not depend on its radius or conductivity, only on its centre:
what is fitted matters by where its centre lands.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike

from .errors import InputError
from .frames import FloatArray, check_points
from .surface import Surface

FIT_RADIUS_MM: Final = 70.0
# The smaller radius at which the fit is repeated, to say how much the field depends on the choice.
NARROW_FIT_RADIUS_MM: Final = 30.0
RESIDUAL_FINDING_MM: Final = 2.0
# Vertices farther from the sphere than this many robust standard deviations (ears, nose) are left out of the fit.
OUTLIER_SPREADS: Final = 3.0
_ROUNDS: Final = 8


@dataclass(frozen=True)
class Spheres:
    """One sphere for each target.

    Attributes
    ----------
    centres : ndarray, shape (N, 3)
    radii : ndarray, shape (N,)
    residual_mm : ndarray, shape (N,)
        Root mean square distance of the vertices used to the sphere; 0 for a given sphere.
    """

    centres: FloatArray
    radii: FloatArray
    residual_mm: FloatArray

    @classmethod
    def given(cls, centre_mm: ArrayLike, radius_mm: float, count: int) -> Spheres:
        """Return one given sphere for `count` targets."""
        centre = check_points(centre_mm, "sphere centre")
        return cls(np.tile(centre, (count, 1)), np.full(count, float(radius_mm)), np.zeros(count))


def fit_sphere(points: FloatArray, weights: FloatArray) -> tuple[FloatArray, float, float]:
    """Fit a sphere by weighted geometric least squares: centre (3,), radius, root mean square residual.

    Algebraic start, then Gauss-Newton on the distances.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> direction = rng.normal(size=(50, 3))
    >>> on_it = 90 * direction / np.linalg.norm(direction, axis=1, keepdims=True) + [1, 2, 3]
    >>> centre, radius, rms = fit_sphere(on_it, np.ones(50))
    >>> centre.round(6).tolist(), round(radius, 6), rms < 1e-9
    ([1.0, 2.0, 3.0], 90.0, True)
    """
    middle = np.average(points, axis=0, weights=weights)
    p, root = points - middle, np.sqrt(weights)[:, None]
    design = np.column_stack([2 * p, np.ones(len(p))])
    solution = np.linalg.lstsq(design * root, (p * p).sum(axis=1) * root[:, 0], rcond=None)[0]
    centre, radius = solution[:3], float(np.sqrt(max(solution[3] + solution[:3] @ solution[:3], 0.0)))
    for _ in range(_ROUNDS):
        offset = p - centre
        distance = np.linalg.norm(offset, axis=1)
        jacobian = np.column_stack([-offset / distance[:, None], -np.ones(len(p))])
        step = np.linalg.lstsq(jacobian * root, (radius - distance) * root[:, 0], rcond=None)[0]
        centre, radius = centre + step[:3], radius + float(step[3])
    residual = np.linalg.norm(p - centre, axis=1) - radius
    return centre + middle, radius, float(np.sqrt(np.average(residual**2, weights=weights)))


def fit_spheres(scalp: Surface, at: ArrayLike, *, within_mm: float = FIT_RADIUS_MM) -> Spheres:
    """Fit one sphere a point to the scalp's vertices within `within_mm` of it, ears and nose left out.

    Parameters
    ----------
    scalp : Surface
    at : array_like, shape (N, 3)
        Scalp points over the targets.
    within_mm : float

    Raises
    ------
    InputError
        Fewer than 10 vertices there.
    """
    points = np.atleast_2d(check_points(at))
    results = [_fit_near(scalp, point, within_mm) for point in points]
    return Spheres(
        np.array([r[0] for r in results]).reshape(-1, 3),
        np.array([r[1] for r in results]),
        np.array([r[2] for r in results]),
    )


def _fit_near(scalp: Surface, point: FloatArray, within_mm: float) -> tuple[FloatArray, float, float]:
    near = np.flatnonzero(((scalp.vertices - point) ** 2).sum(axis=1) <= within_mm**2)
    if len(near) < 10:
        raise InputError(f"{scalp.name}: only {len(near)} vertices within {within_mm:g} mm of the target's scalp point")
    keep = np.ones(len(near), dtype=bool)
    for _ in range(_ROUNDS):
        used = near[keep]
        centre, radius, rms = fit_sphere(scalp.vertices[used], scalp.vertex_areas[used])
        residual = np.abs(np.linalg.norm(scalp.vertices[near] - centre, axis=1) - radius)
        spread = max(1.4826 * float(np.median(residual)), 0.1)
        kept = residual <= OUTLIER_SPREADS * spread
        if kept.sum() < 10 or np.array_equal(kept, keep):
            break
        keep = kept
    return centre, radius, rms
