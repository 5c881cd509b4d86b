"""Tilt windows: closed forms over a ball, bisection with another collision library on a real scalp, properties."""

from __future__ import annotations

import numpy as np
import pytest
from coilwright.geometry.clearance import Obstacle, clearances, lift_clear
from coilwright.geometry.coil import Coil
from coilwright.geometry.errors import InputError
from coilwright.geometry.frames import invert_rigid
from coilwright.geometry.placement import Directions, place
from coilwright.geometry.reach import LIMIT, Windows, tilt_windows
from coilwright.geometry.solids import Box, Cylinder, Solid
from coilwright.geometry.surface import Surface, sphere_surface
from scipy.spatial.transform import Rotation

RADIUS, HEIGHT = 90.0, 6.0
# Exact to the last 0.011 degrees on the mesh; a fine ball's facets lie up to 0.01 mm inside the sphere.
TOLERANCE_DEG = 0.05


def over_top(height: float = HEIGHT, turn_deg: float = 0.0) -> np.ndarray:
    pose = np.eye(4)
    pose[:3, :3] = Rotation.from_euler("z", turn_deg, degrees=True).as_matrix() @ np.diag([1.0, -1, -1])
    pose[2, 3] = RADIUS + height
    return pose[None]


def tilted(pose: np.ndarray, azimuth_deg: float, tilt_deg: float) -> np.ndarray:
    axis = np.array([np.cos(np.radians(azimuth_deg)), np.sin(np.radians(azimuth_deg)), 0])
    turn = np.eye(4)
    turn[:3, :3] = Rotation.from_rotvec(np.radians(tilt_deg) * axis).as_matrix()
    return pose @ turn


@pytest.fixture(scope="module")
def fine_ball() -> Surface:
    return sphere_surface(RADIUS, subdivisions=6)


def windows(
    poses: np.ndarray, solids: tuple[Solid, ...], *obstacles: Obstacle, limit: float = 60.0, step: float = 15.0
) -> Windows:
    return tilt_windows(poses, solids, obstacles, limit_deg=limit, azimuth_step_deg=step)


@pytest.mark.parametrize("margin", [0.0, 1.0, 3.0])
@pytest.mark.parametrize("turn", [0.0, 20.0])
def test_a_wide_flat_face_over_a_ball_in_every_azimuth(fine_ball: Surface, margin: float, turn: float) -> None:
    # Closed form: the face touches the ball grown by the margin when R + m = (R + h) cos(tilt).
    wide: tuple[Solid, ...] = (Cylinder(90.0, 10.0, np.array([0.0, 0, -5])),)
    found = windows(over_top(turn_deg=turn), wide, Obstacle("scalp", fine_ball.triangles, 0.0, margin))
    expected = np.degrees(np.arctan2(np.sqrt((RADIUS + HEIGHT) ** 2 - (RADIUS + margin) ** 2), RADIUS + margin))
    assert np.abs(found.tilt_deg - expected).max() < TOLERANCE_DEG
    assert (found.blocked_by == 0).all()


def test_a_small_box_touches_with_its_rim(fine_ball: Surface) -> None:
    # Closed form: the edge at w from the axis, parallel to it, meets the ball (margin 0) where
    # sin(tilt) = (w^2 + (R + h)^2 - R^2) / (2 (R + h) w).
    half, top = 20.0, RADIUS + HEIGHT
    box: tuple[Solid, ...] = (Box(np.array([2 * half, 2 * half, 10]), np.array([0.0, 0, -5])),)
    found = windows(over_top(), box, Obstacle("scalp", fine_ball.triangles, 0.0, 0.0), step=90.0)
    expected = np.degrees(np.arcsin((half**2 + top**2 - RADIUS**2) / (2 * top * half)))
    assert np.abs(found.tilt_deg - expected).max() < TOLERANCE_DEG


def test_the_side_at_azimuth_plus_90_dips() -> None:
    box: tuple[Solid, ...] = (Box(np.array([100.0, 100, 10]), np.array([0.0, 0, -5])),)
    # a ball on the coil's +y side: only axes around azimuth 0 dip towards it
    ear = Obstacle.ball("ear", (over_top()[0] @ [0, 45, 12, 1])[:3], 3.0, 1.0)
    found = windows(over_top(), box, ear, step=90.0)
    assert found.blocked_by[0].tolist() == [0, LIMIT, LIMIT, LIMIT]
    assert found.tilt_deg[0, 1:].tolist() == [60.0] * 3
    # closed form: the face's plane comes within 4 mm of the ball's centre at (45, 12)
    expected = np.degrees(np.arctan2(12, 45) - np.arcsin(4 / np.hypot(45, 12)))
    assert found.tilt_deg[0, 0] == pytest.approx(expected, abs=TOLERANCE_DEG)


def low_places(real_scalp: Surface, count: int) -> np.ndarray:
    """Poses all over the upper and lower head, at a standoff of 12 mm as the hardest cases are."""
    rng = np.random.default_rng(9)
    high = np.flatnonzero(real_scalp.vertices[:, 2] > -20)
    vertex = real_scalp.vertices[rng.choice(high, count, replace=False)]
    inwards = real_scalp.vertices.mean(axis=0) - vertex
    targets = vertex + 20 * inwards / np.linalg.norm(inwards, axis=1, keepdims=True)
    vector = np.cross(inwards, [0.3, 0.2, 0.9])
    standing = place(real_scalp, targets, Directions(vector, np.full(count, np.nan)), standoff_mm=12.0)
    return standing.head_from_coil


def test_windows_against_bisection_with_another_collision_library(real_scalp: Surface) -> None:
    """Outside check: python-fcl, mesh against box, margin 0; never more permissive by over 0.05 degrees."""
    fcl = pytest.importorskip("fcl", reason="python-fcl")
    size = np.array([90.0, 160, 16])
    box: tuple[Solid, ...] = (Box(size, np.array([0.0, 0, -8])),)
    poses = low_places(real_scalp, 30)
    poses = poses[clearances(poses, box, Obstacle("scalp", real_scalp.triangles, 0.0, 0.0)) > 0.5][:20]
    found = windows(poses, box, Obstacle("scalp", real_scalp.triangles, 0.0, 0.0), step=30.0)
    model = fcl.BVHModel()
    model.beginModel(len(real_scalp.vertices), len(real_scalp.faces))
    model.addSubModel(real_scalp.vertices, real_scalp.faces)
    model.endModel()
    head, body = fcl.CollisionObject(model, fcl.Transform()), fcl.Box(*size)

    def free(pose: np.ndarray) -> bool:
        centre = pose[:3, :3] @ [0, 0, -8] + pose[:3, 3]
        casing = fcl.CollisionObject(body, fcl.Transform(pose[:3, :3], centre))
        return int(fcl.collide(head, casing, fcl.CollisionRequest(), fcl.CollisionResult())) == 0

    blocked = 0
    for i, pose in enumerate(poses):
        for a, azimuth in enumerate(found.azimuth_deg):
            tilt = found.tilt_deg[i, a]
            for share in np.linspace(0, 1, 12):
                assert free(tilted(pose, azimuth, share * max(tilt - TOLERANCE_DEG, 0)))
            if found.blocked_by[i, a] == 0:
                blocked += 1
                assert not free(tilted(pose, azimuth, tilt + TOLERANCE_DEG))
    assert blocked > 50


def test_the_margin_is_kept_at_the_reported_tilt_and_lost_just_past_it(figure8: Coil, real_scalp: Surface) -> None:
    targets = np.array([[-38.0, -20, 56], [40, 30, 40]])
    standing = place(real_scalp, targets, Directions.midline(np.array([45.0, 10])), standoff_mm=6.0)
    poses = lift_clear(
        standing.head_from_coil, figure8.solids, real_scalp, standoff_mm=6, lift_most_mm=5
    ).head_from_coil
    scalp = Obstacle("scalp", real_scalp.triangles, 0.0, 1.0)
    found = windows(poses, figure8.solids, scalp, step=45.0)
    for i, pose in enumerate(poses):
        at = np.array([tilted(pose, a, t) for a, t in zip(found.azimuth_deg, found.tilt_deg[i], strict=True)])
        past = np.array([tilted(pose, a, t + 0.05) for a, t in zip(found.azimuth_deg, found.tilt_deg[i], strict=True)])
        assert clearances(at, figure8.solids, scalp).min() >= 1.0
        assert clearances(past, figure8.solids, scalp)[found.blocked_by[i] == 0].max() < 1.0


def test_more_to_keep_from_never_widens_a_window(figure8: Coil, real_scalp: Surface) -> None:
    targets = np.array([[-38.0, -20, 56]])
    standing = place(real_scalp, targets, Directions.midline(np.array([45.0])), standoff_mm=6.0)
    poses = lift_clear(
        standing.head_from_coil, figure8.solids, real_scalp, standoff_mm=6, lift_most_mm=5
    ).head_from_coil
    rng = np.random.default_rng(5)
    last = windows(poses, figure8.solids, Obstacle("scalp", real_scalp.triangles, 0.0, 0.0), step=30.0).tilt_deg
    for margin in (1.0, 2.5, 5.0):
        now = windows(poses, figure8.solids, Obstacle("scalp", real_scalp.triangles, 0.0, margin), step=30.0).tilt_deg
        assert (now <= last + 0.012).all()
        last = now
    ear = Obstacle.ball("ear", (poses[0] @ [*rng.uniform(-40, 40, 2), 30, 1])[:3], 15.0, 1.0)
    both = windows(poses, figure8.solids, Obstacle("scalp", real_scalp.triangles, 0.0, 5.0), ear, step=30.0)
    assert (both.tilt_deg <= last + 0.012).all()


def test_rigid_motion_changes_nothing(figure8: Coil) -> None:
    ball = sphere_surface(RADIUS, subdivisions=4)
    motion = np.eye(4)
    motion[:3, :3], motion[:3, 3] = Rotation.from_rotvec([0.4, -1.0, 0.3]).as_matrix(), [12, -50, 33]
    moved = ball.triangles @ motion[:3, :3].T + motion[:3, 3]
    still = windows(over_top(), figure8.solids, Obstacle("scalp", ball.triangles, 0.0, 1.0), step=30.0)
    other = windows(motion @ over_top(), figure8.solids, Obstacle("scalp", moved, 0.0, 1.0), step=30.0)
    np.testing.assert_allclose(other.tilt_deg, still.tilt_deg, rtol=0, atol=0.012)
    np.testing.assert_allclose(invert_rigid(motion) @ motion, np.eye(4), rtol=0, atol=1e-12)


@pytest.mark.parametrize("limit", [0.0, 90.1, float("nan"), -5.0])
def test_limits_of_the_limit(limit: float) -> None:
    with pytest.raises(InputError, match="tilt limit: expected more than 0 and at most 90 degrees"):
        windows(over_top(), (Box(np.ones(3), np.zeros(3)),), limit=limit)


def test_nothing_in_the_way() -> None:
    found = windows(over_top(), (Box(np.ones(3), np.zeros(3)),), limit=25.0)
    assert (found.tilt_deg == 25.0).all()
    assert (found.blocked_by == LIMIT).all()
