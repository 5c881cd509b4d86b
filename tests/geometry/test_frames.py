"""Frames: what is refused, what is converted, and that rounding never decides."""

from __future__ import annotations

import numpy as np
import pytest
from coilwright.geometry import frames
from coilwright.geometry.errors import InputError, ItemError
from coilwright.geometry.frames import Pose
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.spatial.transform import Rotation

# Rotations composed of a dozen double operations.
ROUNDING = 1e-12


def rigid(rotation: Rotation, origin: tuple[float, float, float] = (0, 0, 0)) -> np.ndarray:
    matrix = np.eye(4)
    matrix[:3, :3], matrix[:3, 3] = rotation.as_matrix(), origin
    return matrix


GENERIC = rigid(Rotation.from_rotvec([0.3, -1.1, 0.7]), (-57.6, 3.0, 76.8))


def test_composing_frames_that_do_not_meet_names_both() -> None:
    a = Pose(GENERIC, to_frame="head[scanner]", from_frame="coil")
    b = Pose(GENERIC, to_frame="tracker", from_frame="head[template]")
    with pytest.raises(InputError) as refused:
        _ = b @ a
    assert str(refused.value) == (
        "cannot compose tracker_from_head[template] with head[scanner]_from_coil: 'head[template]' and 'head[scanner]'"
        " are different frames; a transform between them is missing"
    )


def test_pose_is_immutable_and_its_inverse_exchanges_frames() -> None:
    pose = Pose(GENERIC, to_frame="head", from_frame="coil")
    with pytest.raises(ValueError, match="read-only"):
        pose.matrix[0, 3] = 1.0
    there_and_back = pose @ pose.inverse()
    assert (there_and_back.to_frame, there_and_back.from_frame) == ("head", "head")
    np.testing.assert_allclose(there_and_back.matrix, np.eye(4), rtol=0, atol=1e-12)


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (lambda m: m @ np.diag([1, 1, -1, 1]), "is mirrored or flat: its determinant is -1"),
        (lambda m: m @ np.diag([1.001, 1, 1, 1]), "is not orthonormal: it deviates by 0.002"),
        (lambda m: m + np.eye(4)[[3, 0, 1, 2]] * 0.1, "has the last row"),
        (lambda m: np.where(np.arange(16).reshape(4, 4) == 3, np.nan, m), "holds a number that is not finite"),
        (lambda m: np.where(np.arange(16).reshape(4, 4) == 7, np.inf, m), "holds a number that is not finite"),
    ],
)
def test_what_is_no_rigid_transform_is_refused_and_named(spoil: object, message: str) -> None:
    batch = np.stack([GENERIC, spoil(GENERIC), GENERIC])  # type: ignore[operator]
    with pytest.raises(ItemError) as refused:
        frames.check_rigid(batch, "head_from_coil")
    assert [index for index, _ in refused.value.problems] == [1]
    assert message in str(refused.value)


def test_scale_is_named_by_transforms3d() -> None:
    with pytest.raises(ItemError, match=r"scales \[2\.0, 1\.0, 1\.0\]"):
        frames.check_rigid(np.diag([2.0, 1, 1, 1]))


@pytest.mark.parametrize("deviation", [0.49e-6, 0.51e-6])
def test_orthonormal_tolerance_is_where_it_says(deviation: float) -> None:
    matrix = np.diag([1 + deviation, 1, 1, 1])
    if deviation < 0.5e-6:
        frames.check_rigid(matrix)
    else:
        with pytest.raises(ItemError):
            frames.check_rigid(matrix)


def test_the_two_conversions_to_lps_differ_by_a_half_turn_of_the_coil() -> None:
    head_only = frames.change_head_axes_ras_lps(GENERIC)
    both = frames.change_head_and_coil_axes_ras_lps(GENERIC)
    flip = np.array([-1, -1, 1])
    # origin and +z tip agree; the +x tip lands on opposite sides of the origin
    for point, same in (((0, 0, 0), True), ((0, 0, 50), True), ((50, 0, 0), False)):
        in_ras = GENERIC[:3, :3] @ point + GENERIC[:3, 3]
        np.testing.assert_allclose(head_only[:3, :3] @ point + head_only[:3, 3], in_ras * flip, rtol=0, atol=1e-12)
        agrees = np.abs(both[:3, :3] @ point + both[:3, 3] - in_ras * flip).max() < 1e-9
        assert bool(agrees) == same
    np.testing.assert_allclose(frames.change_head_and_coil_axes_ras_lps(both), GENERIC, rtol=0, atol=1e-12)
    np.testing.assert_allclose(frames.change_head_axes_ras_lps(head_only), GENERIC, rtol=0, atol=1e-12)


def test_lps_of_the_worked_pose_by_hand() -> None:
    # INTERFACE: the coil's point (30, 0, 0) of the second worked pose, in RAS and in LPS
    pose = frames.rigid_from_axes(
        np.array([-57.6, 0, 76.8]),
        np.array([0.8, 0, 0.6]) * np.sqrt(0.5) + [0, np.sqrt(0.5), 0],
        np.array([0.8, 0, 0.6]) * np.sqrt(0.5) - [0, np.sqrt(0.5), 0],
        np.array([0.6, 0, -0.8]),
    )
    ras = pose @ [30, 0, 0, 1]
    np.testing.assert_allclose(ras[:3], [-40.6294, 21.2132, 89.5279], rtol=0, atol=5e-5)
    lps = frames.change_head_axes_ras_lps(pose) @ [30, 0, 0, 1]
    np.testing.assert_allclose(lps[:3], [40.6294, -21.2132, 89.5279], rtol=0, atol=5e-5)


@given(arrays(np.float64, 3, elements=st.floats(-3, 3)), arrays(np.float64, 3, elements=st.floats(-200, 200)))
def test_quaternions_are_canonical_and_give_the_matrix_back(rotvec: np.ndarray, origin: np.ndarray) -> None:
    matrix = rigid(Rotation.from_rotvec(rotvec), tuple(origin))
    q = frames.quaternion_from_matrix(matrix)
    assert q[0] >= 0
    np.testing.assert_allclose(frames.matrix_from_quaternion(q, origin), matrix, rtol=0, atol=ROUNDING)
    np.testing.assert_allclose(frames.matrix_from_quaternion(-q, origin), matrix, rtol=0, atol=ROUNDING)


@pytest.mark.parametrize("axis", [(0, 1, 1), (1, 0, 0), (0, 0, -1), (-1, 2, 0.5)])
@pytest.mark.parametrize("short", [0.0, 1e-16, -1e-16, 1e-14])
def test_half_turns_have_one_sign_whatever_rounding_says(axis: tuple[float, float, float], short: float) -> None:
    unit = np.array(axis) / np.linalg.norm(axis)
    q = frames.quaternion_from_matrix(rigid(Rotation.from_rotvec((np.pi - short) * unit)))
    assert q[0] >= 0
    first = q[np.abs(q) > 1e-9][0]
    assert first > 0


def test_quaternion_off_unit_length_is_refused_not_normalised() -> None:
    with pytest.raises(InputError, match=r"quaternion 1: its length is off 1 by 0\.01"):
        frames.matrix_from_quaternion([[1, 0, 0, 0], [1.01, 0, 0, 0]], np.zeros((2, 3)))
    with pytest.raises(InputError, match="quaternion 0"):
        frames.matrix_from_quaternion([[np.nan, 0, 0, 0]], np.zeros((1, 3)))


def test_nearest_rotation_repairs_by_name_and_says_by_how_much() -> None:
    turned = Rotation.from_rotvec([0, 0, 0.2]).as_matrix()
    sheared = turned @ np.array([[1, 0.02, 0], [0, 1, 0], [0, 0, 1]])
    rotation, degrees = frames.nearest_rotation(sheared)
    assert 0.3 < degrees < 1.2  # a shear of 0.02 tips one axis by 1.15 degrees; the nearest rotation shares it out
    frames.check_rigid(rigid(Rotation.from_matrix(rotation)))
    with pytest.raises(InputError, match="mirrored"):
        frames.nearest_rotation(np.diag([1.0, 1, -1]))


@given(st.floats(-30, 30))
def test_angles_are_right_near_zero_and_near_half_a_turn(exponent: float) -> None:
    small = 10.0 ** (-abs(exponent) / 2 - 1)
    a, b = np.array([1.0, 0, 0]), np.array([np.cos(small), np.sin(small), 0])
    assert abs(np.radians(frames.angle_between_deg(a, b)) - small) <= 1e-15 + 1e-9 * small
    assert abs(np.pi - np.radians(frames.angle_between_deg(a, -b)) - small) <= 1e-15 + 1e-9 * small


@pytest.mark.parametrize(
    ("angle", "normal", "expected"),
    [
        (0, (0, 0, 1), (0, 1, 0)),  # anterior
        (90, (0, 0, 1), (1, 0, 0)),  # from above, nose up: clockwise goes to the right
        (45, (-0.6, 0, 0.8), (0.8 * np.sqrt(0.5), np.sqrt(0.5), 0.6 * np.sqrt(0.5))),  # left: forward, to the midline
        (-45, (0.6, 0, 0.8), (-0.8 * np.sqrt(0.5), np.sqrt(0.5), 0.6 * np.sqrt(0.5))),  # right: its mirror image
    ],
)
def test_midline_angles(angle: float, normal: tuple[float, ...], expected: tuple[float, ...]) -> None:
    found = frames.midline_direction([angle], np.array([normal]))
    np.testing.assert_allclose(found[0], expected, rtol=0, atol=1e-12)


@pytest.mark.parametrize(("tip", "refused"), [(29.9, True), (30.1, False), (150.1, True), (149.9, False)])
def test_midline_is_refused_near_the_anterior_posterior_axis(tip: float, refused: bool) -> None:
    normal = np.array([[np.sin(np.radians(tip)), np.cos(np.radians(tip)), 0]])
    if refused:
        with pytest.raises(ItemError, match="give the direction as a vector"):
            frames.midline_direction([0.0], normal)
    else:
        frames.midline_direction([0.0], normal)


def test_points_are_converted_once_and_bad_words_are_refused() -> None:
    np.testing.assert_array_equal(frames.points_to_ras_mm([[4, -2, 9]], axes="LPS", unit="cm"), [[-40, 20, 90]])
    with pytest.raises(InputError, match="axes: expected RAS or LPS, got 'LAS'"):
        frames.points_to_ras_mm([1, 2, 3], axes="LAS", unit="mm")
    with pytest.raises(InputError, match="unit: expected m, cm or mm, got 'inch'"):
        frames.points_to_ras_mm([1, 2, 3], axes="RAS", unit="inch")
    with pytest.raises(InputError, match="point 1 is not finite"):
        frames.check_points([[0, 0, 0], [0, np.inf, 0]])
