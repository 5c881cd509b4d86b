"""Placement: the worked poses, one asymmetric target a quadrant, projections, refusals."""

from __future__ import annotations

import numpy as np
import pytest
from coilwright.geometry.errors import InputError, ItemError
from coilwright.geometry.frames import angle_between_deg, quaternion_from_matrix
from coilwright.geometry.placement import Directions, check_targets, place, scalp_quality
from coilwright.geometry.sphere import Spheres, fit_sphere, fit_spheres
from coilwright.geometry.surface import Surface, sphere_surface
from hypothesis import given, settings
from hypothesis import strategies as st

# A facet of the 90 mm ball is 3 mm wide: its nearest point lies up to half of that beside the radius, 1 degree.
FACET_MM, FACET_DEG = 1.6, 1.1
CENTRE = Spheres.given((0, 0, 0), 90.0, 1)


def stand(ball: Surface, target: tuple[float, ...], midline: float, **more: object) -> np.ndarray:
    standing = place(
        ball, np.array([target]), Directions.midline(np.array([midline])), standoff_mm=6.0, spheres=CENTRE, **more
    )  # type: ignore[arg-type]
    return standing.head_from_coil[0]


@pytest.mark.parametrize("aim", ["nearest_scalp", "over_target"])
def test_the_two_worked_poses(ball: Surface, aim: str) -> None:
    first = stand(ball, (0, 0, 60), 0, aim=aim)
    np.testing.assert_allclose(first[:3, 3], [0, 0, 96], rtol=0, atol=FACET_MM)
    np.testing.assert_allclose(quaternion_from_matrix(first), [0, 0.7071, 0.7071, 0], rtol=0, atol=0.01)
    second = stand(ball, (-42, 0, 56), 45, aim=aim)
    np.testing.assert_allclose(second[:3, 3], [-57.6, 0, 76.8], rtol=0, atol=FACET_MM)
    axes = np.array([[0.5657, 0.7071, 0.4243], [0.5657, -0.7071, 0.4243], [0.6, 0, -0.8]])
    assert angle_between_deg(second[:3, :3].T, axes).max() < FACET_DEG
    tip = second @ [30, 0, 0, 1]
    np.testing.assert_allclose(tip[:3], [-40.6294, 21.2132, 89.5279], rtol=0, atol=FACET_MM)


# The figure-eight's handle runs along -x of the coil. Worked out by hand, head seen from above, nose up:
#   left motor (-x, 0), +45: +x points forward and to the midline (right), so the handle points back and to the left;
#   right motor (+x, 0), -45: +x forward and to the midline (left), so the handle points back and to the right;
#   left frontal (-x, +y), +90: +x points to the right, so the handle points left;
#   right parietal (+x, -y), 180: +x points back, so the handle points forward.
@pytest.mark.parametrize(
    ("target", "midline", "handle_x", "handle_y"),
    [
        ((-45, -12, 48), 45, -1, -1),
        ((45, -12, 48), -45, +1, -1),
        ((-30, 42, 44), 90, -1, 0),
        ((33, -40, 46), 180, 0, +1),
    ],
)
def test_the_handle_points_where_a_person_expects(
    ball: Surface, target: tuple[float, ...], midline: float, handle_x: int, handle_y: int
) -> None:
    pose = stand(ball, target, midline)
    handle = (pose @ [-100, 0, 0, 1])[:3] - pose[:3, 3]
    for component, sign in zip(handle[:2], (handle_x, handle_y), strict=True):
        if sign:
            assert component * sign > 25
    # the coil lies outside, its contact face looks in, the frame is right-handed
    assert pose[:3, 3] @ pose[:3, 2] < 0
    assert np.linalg.det(pose[:3, :3]) == pytest.approx(1, abs=1e-9)


@settings(max_examples=60, deadline=None)
@given(st.floats(-70, 70), st.floats(-170, 170), st.floats(20, 60), st.floats(-180, 180))
def test_any_pose_on_a_ball_against_the_closed_form(
    elevation: float, azimuth: float, depth: float, angle: float
) -> None:
    ball = sphere_surface(90.0, subdivisions=5)
    e, a = np.radians([elevation, azimuth])
    n = np.array([np.cos(e) * np.cos(a), np.cos(e) * np.sin(a), np.sin(e)])
    if not np.degrees(np.arctan2(np.hypot(n[0], n[2]), abs(n[1]))) > 31:
        return  # midline angles are refused there
    pose = stand(ball, tuple((90 - depth) * n), angle)
    anterior = np.array([0, 1.0, 0]) - n * n[1]
    anterior /= np.linalg.norm(anterior)
    t = np.radians(angle)
    x = np.cos(t) * anterior + np.sin(t) * np.cross(anterior, n)
    assert np.linalg.norm(pose[:3, 3] - 96 * n) < 2 * FACET_MM
    assert angle_between_deg(pose[:3, 2], -n) < FACET_DEG
    # where midline angles are steep a shift of 1 degree turns the reference by more
    assert angle_between_deg(pose[:3, 0], x) < 3 * FACET_DEG


def test_over_target_stands_on_the_ray(real_scalp: Surface) -> None:
    targets = np.array([[-38.0, -20, 56], [40, 30, 40], [10, -70, 30]])
    spheres = fit_spheres(real_scalp, real_scalp.nearest(targets).points)
    standing = place(
        real_scalp,
        targets,
        Directions.midline(np.array([45.0, 0, 0])),
        standoff_mm=5,
        aim="over_target",
        spheres=spheres,
    )
    ray = targets - spheres.centres
    to_origin = standing.head_from_coil[:, :3, 3] - spheres.centres
    assert angle_between_deg(ray, to_origin).max() < 1e-6
    # the contact face stays the standoff from the tangent plane
    height = ((standing.head_from_coil[:, :3, 3] - standing.scalp_points) * standing.normals).sum(axis=1)
    np.testing.assert_allclose(height, 5.0, rtol=0, atol=1e-9)


def test_turned_coils_keep_the_wanted_direction(ball: Surface) -> None:
    plain, turned = (stand(ball, (-42, 0, 56), 45, turned=t) for t in (False, True))
    np.testing.assert_allclose(turned[:3, :2], -plain[:3, :2], rtol=0, atol=1e-12)
    np.testing.assert_allclose(turned[:3, 2:], plain[:3, 2:], rtol=0, atol=1e-12)


@pytest.mark.parametrize(("tip", "refused"), [(79.0, False), (81.0, True)])
def test_vectors_are_projected_and_say_how_far_they_stood_out(ball: Surface, tip: float, refused: bool) -> None:
    t = np.radians(tip)
    directions = Directions(np.array([[0, np.cos(t), np.sin(t)]]), np.array([np.nan]))
    target = np.array([[0.0, 0, 60]])
    if refused:
        with pytest.raises(ItemError, match="degrees out of the plane that touches the scalp, over 80"):
            place(ball, target, directions, standoff_mm=6)
        return
    standing = place(ball, target, directions, standoff_mm=6)
    assert standing.projection_deg[0] == pytest.approx(tip, abs=FACET_DEG)
    assert angle_between_deg(standing.wanted[0], [0, 1, 0]) < 6  # near 80 degrees a tip of 1 degree turns it by 5


def test_a_direction_without_length_is_refused(ball: Surface) -> None:
    with pytest.raises(InputError, match="a vector of zero length has no direction"):
        place(ball, np.array([[0.0, 0, 60]]), Directions(np.zeros((1, 3)), np.array([np.nan])), standoff_mm=6)


def test_targets_outside_or_too_deep_are_refused_each_with_its_distance(ball: Surface) -> None:
    with pytest.raises(ItemError) as refused:
        check_targets(ball, np.array([[0, 0, 60.0], [0, 0, 95.0], [0, 0, 29.0], [0, 0, 31.0]]))
    problems = dict(refused.value.problems)
    assert sorted(problems) == [1, 2]
    assert problems[1].startswith("lies 5.0 mm outside the head")
    assert "deeper than 60 mm" in problems[2]


def test_scalp_quality_names_the_rough_place(ball: Surface) -> None:
    rough = ball.vertices + 3 * np.sin(ball.vertices[:, :1] / 4) * ball.vertices / 90
    found = scalp_quality(Surface(rough, ball.faces), np.array([[3.0, 0, 90]]), ["index"])
    assert found[0][0] == "index"
    assert "raise placement.normal_radius_mm" in found[0][1]
    assert scalp_quality(ball, np.array([[0.0, 0, 90]]), ["index"]) == []


@given(st.tuples(*[st.floats(-50, 50)] * 3), st.floats(50, 150))
def test_sphere_fit_gives_the_sphere_back(centre: tuple[float, ...], radius: float) -> None:
    rng = np.random.default_rng(3)
    cap = rng.normal(size=(60, 3)) + [0, 0, 2]
    points = radius * cap / np.linalg.norm(cap, axis=1, keepdims=True) + centre
    found, r, rms = fit_sphere(points, rng.uniform(0.5, 2, 60))
    np.testing.assert_allclose(found, centre, rtol=0, atol=1e-6)
    assert abs(r - radius) < 1e-6
    assert rms < 1e-6


def test_sphere_fit_leaves_ears_out(real_scalp: Surface) -> None:
    ball = sphere_surface(90.0, subdivisions=4)
    ear = np.linalg.norm(ball.vertices - [-90, 0, 0], axis=1) < 15
    with_ear = Surface(np.where(ear[:, None], ball.vertices * 1.25, ball.vertices), ball.faces)
    fitted = fit_spheres(with_ear, [[-80.0, 0, 40.0]])
    assert np.linalg.norm(fitted.centres[0]) < 0.5
    assert fitted.residual_mm[0] < 0.1
    with pytest.raises(InputError, match="only 0 vertices within 70 mm"):
        fit_spheres(real_scalp, [[0.0, 0, 500.0]])
