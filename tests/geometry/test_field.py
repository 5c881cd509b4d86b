"""The field in a sphere: closed forms, symmetry, and the sign that everything else hangs on."""

from __future__ import annotations

import numpy as np
import pytest
from coilwright.geometry.errors import InputError, ItemError
from coilwright.geometry.field import check_inside, field_at_points, field_at_targets
from coilwright.geometry.sphere import Spheres
from coilwright.geometry.windings import Elements
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.spatial.transform import Rotation
from scipy.special import ellipe, ellipk

MU0 = 4e-7 * np.pi
# Double rounding through a few dozen operations, relative to the largest field.
ROUNDING = 1e-12
ORIGIN = np.zeros(3)


def ring(centre: tuple[float, float, float], radius: float, turns: float, sense: int) -> Elements:
    """A loop as elements, by a quadrature that shares no code with the product: 40 radii, 120 angles."""
    nodes, weights = np.polynomial.legendre.leggauss(40)
    r = radius * (nodes + 1) / 2
    angle = np.arange(120) * 2 * np.pi / 120
    x = centre[0] + np.outer(r, np.cos(angle))
    y = centre[1] + np.outer(r, np.sin(angle))
    moment = np.outer(weights * radius / 2 * r, np.full(120, 2 * np.pi / 120)) * turns * sense
    positions = np.stack([x, y, np.full_like(x, centre[2])], axis=-1).reshape(-1, 3)
    moments = np.stack([0 * moment, 0 * moment, moment], axis=-1).reshape(-1, 3)
    return Elements(positions, moments)  # mm2 * 1e6 / 1e6: A m2 / s for 1 A/us


def figure8() -> Elements:
    a, b = ring((0, 37, -6), 34, 9, -1), ring((0, -37, -6), 34, 9, 1)
    return Elements(np.vstack([a.positions_mm, b.positions_mm]), np.vstack([a.moments, b.moments]))


def over_top(height: float) -> np.ndarray:
    pose = np.diag([1.0, -1, -1, 1])
    pose[2, 3] = height
    return pose


def random_dipoles(seed: int, count: int = 30) -> Elements:
    rng = np.random.default_rng(seed)
    direction = rng.normal(size=(count, 3))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    return Elements(direction * rng.uniform(95, 140, (count, 1)), rng.normal(size=(count, 3)))


def random_points(seed: int, count: int = 40, radius: float = 88.0) -> np.ndarray:
    rng = np.random.default_rng(seed + 1000)
    direction = rng.normal(size=(count, 3))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    return direction * radius * rng.uniform(0, 1, (count, 1)) ** (1 / 3)


def test_the_value_of_the_worked_figure_eight() -> None:
    # Two loops at y = +37 and -37 mm, radius 34, 9 turns, senses -1 and +1, 6 mm behind the contact face, 96 mm from
    # the centre: +0.9925 V/m per A/us at 70 mm from the centre (design notes, tried by a throw-away prototype).
    # The coil's +x is the head's +x here, its +z the head's -z.
    e = field_at_points(over_top(96.0), figure8(), np.array([[0.0, 0, 70]]), ORIGIN)[0]
    assert e[0] == pytest.approx(0.9925, abs=5e-5)
    np.testing.assert_allclose(e[1:], 0, rtol=0, atol=1e-12)


def test_coaxial_loop_against_the_vector_potential_by_elliptic_integrals() -> None:
    # On the axis of symmetry no charge builds up: the field is minus the rate of the vector potential of the loop,
    # A_phi = mu0 I / (pi k) sqrt(a / rho) ((1 - k^2/2) K - E), k^2 = 4 a rho / ((a + rho)^2 + z^2) (Jackson, 5.5).
    a, height = 40.0, 100.0
    loop = ring((0, 0, 0), a, 1, 1)
    pose = np.eye(4)
    pose[2, 3] = height
    rng = np.random.default_rng(0)
    points = random_points(1, 60)
    rho, z = np.hypot(points[:, 0], points[:, 1]), height - points[:, 2]
    k2 = 4 * a * rho / ((a + rho) ** 2 + z**2)
    a_phi = MU0 / np.pi / np.sqrt(k2) * np.sqrt(a / rho) * ((1 - k2 / 2) * ellipk(k2) - ellipe(k2)) * 1e6
    phi = np.stack([-points[:, 1], points[:, 0], 0 * rho], axis=1) / rho[:, None]
    e = field_at_points(pose, loop, points, ORIGIN)
    np.testing.assert_allclose(e, -a_phi[:, None] * phi, rtol=0, atol=1e-9 * np.abs(a_phi).max())
    assert rng is not None


@pytest.mark.parametrize("seed", range(5))
def test_nothing_radial_nothing_at_the_centre_largest_outside(seed: int) -> None:
    dipoles, points = random_dipoles(seed), random_points(seed)
    e = field_at_points(np.eye(4), dipoles, points, ORIGIN)
    scale = np.linalg.norm(e, axis=1).max()
    radial = (e * points).sum(axis=1) / np.linalg.norm(points, axis=1)
    assert np.abs(radial).max() < ROUNDING * scale
    assert np.linalg.norm(field_at_points(np.eye(4), dipoles, np.zeros((1, 3)), ORIGIN)) == 0
    # the largest field of a ball lies on its surface (Heller and van Hulsteyn 1992)
    out = points / np.linalg.norm(points, axis=1, keepdims=True) * 90
    surface = np.linalg.norm(field_at_points(np.eye(4), dipoles, out, ORIGIN), axis=1)
    dense = np.random.default_rng(seed).normal(size=(4000, 3))
    dense *= 90 / np.linalg.norm(dense, axis=1, keepdims=True)
    most = max(surface.max(), np.linalg.norm(field_at_points(np.eye(4), dipoles, dense, ORIGIN), axis=1).max())
    assert scale <= most


@settings(max_examples=30, deadline=None)
@given(
    arrays(np.float64, 3, elements=st.floats(-3, 3)),
    arrays(np.float64, 3, elements=st.floats(-100, 100)),
    st.integers(0, 10_000),
)
def test_moving_coil_and_head_together_moves_the_field(rotvec: np.ndarray, shift: np.ndarray, seed: int) -> None:
    motion = np.eye(4)
    motion[:3, :3], motion[:3, 3] = Rotation.from_rotvec(rotvec).as_matrix(), shift
    dipoles, points = random_dipoles(seed), random_points(seed)
    still = field_at_points(np.eye(4), dipoles, points, ORIGIN)
    moved = field_at_points(motion, dipoles, points @ motion[:3, :3].T + shift, shift)
    np.testing.assert_allclose(moved, still @ motion[:3, :3].T, rtol=0, atol=1e-10 * np.abs(still).max())


def test_both_forms_agree() -> None:
    points = random_points(3, 25)
    poses = np.stack([over_top(h) for h in np.linspace(100, 130, 25)])
    centres = np.random.default_rng(1).uniform(-3, 3, (25, 3))
    batch = field_at_targets(poses, figure8(), points, centres)
    single = [field_at_points(poses[i], figure8(), points[i : i + 1], centres[i])[0] for i in range(25)]
    np.testing.assert_allclose(batch, single, rtol=0, atol=ROUNDING * np.abs(batch).max())


def test_far_below_an_element_on_its_own_axis_is_no_singularity() -> None:
    # r parallel to R, the textbook form's 0/0
    one = Elements(np.array([[0.0, 0, 100]]), np.array([[1.0, 0, 0]]))
    line = np.array([[0, 0, z] for z in (0.0, 1e-9, 50, 99.999)])
    e = field_at_points(np.eye(4), one, line, ORIGIN)
    assert np.isfinite(e).all()
    beside = field_at_points(np.eye(4), one, line + [1e-6, 0, 0], ORIGIN)
    np.testing.assert_allclose(e[:3], beside[:3], rtol=0, atol=1e-6 * np.abs(e).max())


def test_peak_below_the_centre_and_decay() -> None:
    x = np.linspace(-40, 40, 41)
    grid = np.array([[a, b, np.sqrt(80.0**2 - a**2 - b**2)] for a in x for b in x])
    e = np.linalg.norm(field_at_points(over_top(96.0), figure8(), grid, ORIGIN), axis=1)
    assert np.abs(grid[e.argmax(), :2]).max() < 2.1
    line = np.array([[0, 0, z] for z in np.linspace(10, 88, 40)])
    along = field_at_points(over_top(96.0), figure8(), line, ORIGIN)[:, 0]
    assert (np.diff(along) > 0).all()


def test_half_value_depth_is_that_of_a_figure_eight() -> None:
    # Deng, Lisanby and Peterchev 2013 (Brain Stimul 6:1-13): sphere of 85 mm, cortex from 70 mm radius inwards;
    # half-value depth: from the cortical surface to the deepest point with half of the largest cortical field.
    # Figure-eight coils: 0.9 to 3.4 cm. Their coils stand 5 mm off the head (from memory).
    pose = over_top(85.0 + 5.0)
    x = np.linspace(-40, 40, 41)
    shell = np.array([[a, b, np.sqrt(70.0**2 - a**2 - b**2)] for a in x for b in x])
    peak = np.linalg.norm(field_at_points(pose, figure8(), shell, ORIGIN), axis=1).max()
    depth = np.linspace(0, 60, 601)
    inwards = np.stack([0 * depth, 0 * depth, 70 - depth], axis=1)
    below = np.linalg.norm(field_at_points(pose, figure8(), inwards, ORIGIN), axis=1)
    assert 9 <= depth[below >= peak / 2].max() <= 34


def test_refusals_name_what_is_where() -> None:
    one = Elements(np.array([[0.0, 0, 100]]), np.array([[1.0, 0, 0]]))
    with pytest.raises(InputError, match=r"a point lies 100\.0 mm from the sphere's centre"):
        field_at_points(np.eye(4), one, np.array([[0, 0, -100.0]]), ORIGIN)
    with pytest.raises(ItemError, match="item 1: a coil element lies nearer"):
        field_at_targets(np.stack([np.eye(4)] * 2), one, np.array([[0, 0, 50.0], [0, 0, 101]]), np.zeros((2, 3)))
    with pytest.raises(ItemError, match=r"lies outside the conducting sphere \(91\.0 mm from its centre"):
        check_inside(Spheres.given((0, 0, 0), 90.0, 2), np.array([[0, 0, 89.0], [0, 0, 91.0]]))
