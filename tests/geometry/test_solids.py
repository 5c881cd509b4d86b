"""Convex solids: closed forms, gradients, convexity; and clearances against dense sampling and trimesh."""

from __future__ import annotations

import numpy as np
import pytest
import trimesh
from coilwright.geometry.clearance import Obstacle, clearances, least_distance, lift_clear
from coilwright.geometry.coil import Coil
from coilwright.geometry.errors import InputError
from coilwright.geometry.frames import rigid_from_axes
from coilwright.geometry.placement import Directions, place
from coilwright.geometry.solids import Box, Capsule, Cylinder, Hull, Solid
from coilwright.geometry.surface import Surface, sphere_surface
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays


def hull_of_box() -> Hull:
    mesh = trimesh.creation.box(extents=[4, 6, 2])
    return Hull.of(Surface(np.asarray(mesh.vertices) + [0, 1, -1], mesh.faces, "hull"))


SOLIDS: dict[str, Solid] = {
    "box": Box(np.array([4.0, 6, 2]), np.array([0.0, 1, -1])),
    "cylinder": Cylinder(3.0, 2.0, np.array([0.0, 1, -1])),
    "capsule": Capsule(np.array([0.0, 0, 0]), np.array([3.0, 1, -2]), 1.5),
    "hull": hull_of_box(),
}
clouds = arrays(np.float64, (12, 3), elements=st.floats(-8, 8))


@pytest.mark.parametrize("name", SOLIDS)
@given(points=clouds, others=clouds)
def test_distance_is_convex_lipschitz_and_bounded_by_its_tangent(
    name: str, points: np.ndarray, others: np.ndarray
) -> None:
    solid = SOLIDS[name]
    value, slope = solid.distance_and_gradient(points)
    other = solid.distance(others)
    gap = np.linalg.norm(points - others, axis=1)
    assert (np.abs(value - other) <= gap + 1e-9).all()
    assert (other >= value + (slope * (others - points)).sum(axis=1) - 1e-9).all()
    middle = solid.distance((points + others) / 2)
    assert (middle <= (value + other) / 2 + 1e-9).all()


@given(points=clouds)
def test_hull_of_a_box_is_the_box(points: np.ndarray) -> None:
    np.testing.assert_allclose(SOLIDS["hull"].distance(points), SOLIDS["box"].distance(points), rtol=0, atol=1e-9)


@pytest.mark.parametrize("name", ["cylinder", "capsule"])
def test_round_solids_against_their_meshes(name: str) -> None:
    solid = SOLIDS[name]
    rng = np.random.default_rng(4)
    points = rng.uniform(-8, 8, (300, 3))
    # the outline is inscribed, so its distance is larger, by at most its sagitta (r (1 - cos(pi / n)))
    difference = solid.outline.signed_distance(points) - solid.distance(points)
    assert difference.min() > -1e-9
    assert difference.max() < 0.03


@pytest.mark.parametrize("name", SOLIDS)
def test_bounds_hold_the_outline(name: str) -> None:
    centre, radius = SOLIDS[name].bounds
    assert np.linalg.norm(SOLIDS[name].outline.vertices - centre, axis=1).max() <= radius + 1e-9


def test_an_open_casing_mesh_is_refused() -> None:
    mesh = trimesh.creation.box(extents=[4, 6, 2])
    with pytest.raises(InputError, match="a casing must be a closed mesh"):
        Hull.of(Surface(mesh.vertices, mesh.faces[:-2], "casing.stl"))


@pytest.mark.parametrize("name", SOLIDS)
def test_least_distance_of_triangles_against_dense_sampling(name: str) -> None:
    rng = np.random.default_rng(11)
    corners = rng.uniform(-9, 9, (60, 3, 3))
    u = np.linspace(0, 1, 61)
    b, c = (grid.ravel() for grid in np.meshgrid(u, u))
    weights = np.stack([1 - b - c, b, c], axis=1)[b + c <= 1]
    found = least_distance((SOLIDS[name],), corners, np.arange(60), 60)
    sampled = np.array([SOLIDS[name].distance(weights @ triangle).min() for triangle in corners])
    assert ((found < 0) == (sampled < 0)).mean() > 0.95  # samples miss a few slight entries
    found, sampled, corners = found[found >= 0], sampled[found >= 0], corners[found >= 0]
    assert len(found) > 15
    assert (found <= sampled + 1e-6).all()
    assert (found >= sampled - 0.3).all()  # half the spacing of the samples
    # never below what the vertices of a finer mesh allow: refine the worst and compare closer
    worst = int((sampled - found).argmax())
    fine = rng.dirichlet([1, 1, 1], 400_000) @ corners[worst]
    assert abs(SOLIDS[name].distance(fine).min() - found[worst]) < 0.05


def pose_over_top(height: float) -> np.ndarray:
    x, y, z = np.array([0.0, 1, 0]), np.array([1.0, 0, 0]), np.array([0.0, 0, -1])
    return rigid_from_axes(np.array([0, 0, height]), x, y, z)[None]


def test_clearance_of_a_flat_face_over_a_ball_is_the_height(ball: Surface) -> None:
    box = (Box(np.array([60.0, 60, 10]), np.array([0.0, 0, -5])),)
    scalp = Obstacle("scalp", ball.triangles, 0.0, 0.0)
    # the top vertex of the ball lies within 0.02 mm of the pole
    assert clearances(pose_over_top(96.0), box, scalp)[0] == pytest.approx(6.0, abs=0.02)
    assert clearances(pose_over_top(80.0), box, scalp)[0] < 0


def test_ball_keep_out_is_exact() -> None:
    box = (Box(np.array([60.0, 60, 10]), np.array([0.0, 0, -5])),)
    keep_out = Obstacle.ball("ear", np.array([0.0, 50.0, 101.0]), 12.0, 1.0)
    # the box's side lies at y = 30: 50 - 30 - 12
    assert clearances(pose_over_top(96.0), box, keep_out)[0] == pytest.approx(8.0, abs=1e-9)


def test_lift_is_the_least_that_holds(figure8: Coil, real_scalp: Surface) -> None:
    targets = np.array([[-38.0, -20, 56], [-50, -30, 30], [-30, 40, 50], [30, -60, 50]])
    standing = place(real_scalp, targets, Directions.midline(np.array([45.0, 45, 20, -60])), standoff_mm=6.0)
    lifted = lift_clear(standing.head_from_coil, figure8.solids, real_scalp, standoff_mm=6.0, lift_most_mm=20.0)
    scalp = Obstacle("scalp", real_scalp.triangles, 0.0, 6.0)
    np.testing.assert_allclose(lifted.clearance_mm, 6.0, rtol=0, atol=3e-6)
    assert (lifted.lift_mm > 0.01).any()
    lower = lifted.head_from_coil.copy()
    lower[:, :3, 3] += 0.01 * lower[:, :3, 2]
    below = clearances(lower, figure8.solids, scalp)
    assert (below[lifted.lift_mm > 0.01] < 6.0).all()


def test_clearance_against_sampled_casing_and_trimesh(figure8: Coil, real_scalp: Surface) -> None:
    """Outside check: trimesh's distance from points of the casing's surface to the scalp."""
    targets = np.array([[-38.0, -20, 56], [-30, 40, 50]])
    standing = place(real_scalp, targets, Directions.midline(np.array([45.0, 20])), standoff_mm=9.0)
    found = clearances(standing.head_from_coil, figure8.solids, Obstacle("scalp", real_scalp.triangles, 0.0, 9.0))
    head = trimesh.Trimesh(real_scalp.vertices, real_scalp.faces, process=False)
    for k in range(2):
        least = np.inf
        for solid in figure8.solids:
            mesh = trimesh.Trimesh(solid.outline.vertices, solid.outline.faces, process=False)
            points = trimesh.sample.sample_surface(mesh, 3000, seed=1)[0]
            moved = np.vstack([points, solid.outline.vertices]) @ standing.head_from_coil[k, :3, :3].T
            distance = trimesh.proximity.closest_point(head, moved + standing.head_from_coil[k, :3, 3])[1]
            least = min(least, float(distance.min()))
        assert found[k] <= least + 1e-6
        assert found[k] >= least - 0.3  # 3,000 samples a solid lie about 2 mm apart on a gently curved gap


def test_a_pose_inside_the_head_is_no_pose(figure8: Coil) -> None:
    big = sphere_surface(400.0, subdivisions=4)
    inside = lift_clear(pose_over_top(96.0), figure8.solids, big, standoff_mm=6.0, lift_most_mm=5.0)
    assert inside.clearance_mm[0] < 0
