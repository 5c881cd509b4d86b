"""Surfaces: nearest points, inside and outside, normals, and what a careful reader refuses."""

from __future__ import annotations

import numpy as np
import pytest
import trimesh
from coilwright.geometry import triangles as tri
from coilwright.geometry.errors import InputError, ItemError
from coilwright.geometry.frames import angle_between_deg
from coilwright.geometry.mesh_files import parse_surface, read_surface
from coilwright.geometry.surface import Surface, check_head_size, outward, sphere_surface
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

CUBE = Surface(trimesh.creation.box(extents=[2, 2, 2]).vertices, trimesh.creation.box(extents=[2, 2, 2]).faces, "cube")
coordinates = arrays(np.float64, (20, 3), elements=st.floats(-3, 3))


@given(coordinates)
def test_cube_distances_against_the_closed_form(points: np.ndarray) -> None:
    excess = np.abs(points) - 1
    outside = np.linalg.norm(np.maximum(excess, 0), axis=1)
    expected = outside + np.minimum(excess.max(axis=1), 0)
    np.testing.assert_allclose(CUBE.signed_distance(points), expected, rtol=0, atol=1e-12)


@given(arrays(np.float64, (3, 3), elements=st.floats(-5, 5)), arrays(np.float64, 3, elements=st.floats(-9, 9)))
def test_nearest_point_of_a_triangle_against_a_dense_search(corners: np.ndarray, point: np.ndarray) -> None:
    if np.linalg.norm(np.cross(corners[1] - corners[0], corners[2] - corners[0])) < 1e-2:
        return  # degenerate triangles are refused by Surface
    weights = tri.nearest_barycentric(point[None], corners[None])[0]
    assert abs(weights.sum() - 1) < 1e-12
    assert (weights > -1e-9).all()
    found = np.linalg.norm(weights @ corners - point)
    u = np.linspace(0, 1, 41)
    b, c = (grid.ravel() for grid in np.meshgrid(u, u))
    inside = b + c <= 1
    sampled = np.stack([1 - b - c, b, c], axis=1)[inside] @ corners
    assert found <= np.linalg.norm(sampled - point, axis=1).min() + 1e-9


def test_area_of_a_triangle_in_a_ball_against_sampling() -> None:
    rng = np.random.default_rng(5)
    corners = rng.uniform(-2, 2, (40, 3, 3))
    normals = tri.area_vectors(corners)
    area = np.linalg.norm(normals, axis=1)
    centres = rng.uniform(-1, 1, (40, 3))
    found = tri.area_in_ball(corners, normals / area[:, None], centres, 1.2)
    root, v = np.sqrt(rng.uniform(size=(40_000, 1))), rng.uniform(size=(40_000, 1))
    weights = np.hstack([1 - root, root * (1 - v), root * v])
    for k in range(40):
        share = (np.linalg.norm(weights @ corners[k] - centres[k], axis=1) <= 1.2).mean()
        # four standard deviations of 40,000 draws
        assert abs(found[k] / area[k] - share) <= 4 * np.sqrt(max(share * (1 - share), 1e-3) / 40_000)


def test_area_in_ball_is_all_or_nothing_at_the_ends() -> None:
    corners = np.array([[[0.0, 0, 0], [1, 0, 0], [0, 1, 0]]])
    normal = np.array([[0.0, 0, 1]])
    assert tri.area_in_ball(corners, normal, np.zeros((1, 3)), 5.0)[0] == pytest.approx(0.5, abs=1e-12)
    assert tri.area_in_ball(corners, normal, np.array([[0.0, 0, 5.1]]), 5.0)[0] == 0.0
    # the ball's disc lies wholly inside the triangle
    assert tri.area_in_ball(corners, normal, np.array([[0.25, 0.25, 0]]), 0.1)[0] == pytest.approx(
        np.pi * 0.01, rel=1e-12
    )


def test_normals_on_a_ball_point_outwards_and_do_not_depend_on_the_mesh() -> None:
    rng = np.random.default_rng(2)
    direction = rng.normal(size=(50, 3))
    direction /= np.linalg.norm(direction, axis=1, keepdims=True)
    for subdivisions, tolerance in ((3, 6.0), (5, 0.5)):
        ball = sphere_surface(90.0, subdivisions=subdivisions)
        normals = ball.normals(90 * direction, 15.0)
        assert angle_between_deg(normals, direction).max() < tolerance


def test_normals_are_continuous_where_whole_triangles_would_jump() -> None:
    ball = sphere_surface(90.0, subdivisions=2)  # facets of about 25 mm, larger than the radius of the mean
    along = np.linspace(0, 0.2, 400)
    points = 88 * np.stack([np.sin(along), 0 * along, np.cos(along)], axis=1)
    steps = np.linalg.norm(np.diff(ball.normals(points, 15.0), axis=0), axis=1)
    assert steps.max() < 0.01


def test_a_bump_is_a_quality_finding_and_a_ball_is_none() -> None:
    ball = sphere_surface(90.0, subdivisions=5)
    top = np.array([[0.0, 0, 90]])
    assert ball.normal_disagreement_deg(top)[0] < 1
    bumpy = ball.vertices + 3 * np.sin(ball.vertices[:, :1] / 4) * ball.vertices / 90
    assert Surface(bumpy, ball.faces).normal_disagreement_deg(top + [[3, 0, 0]])[0] > 5


def test_no_normal_where_there_is_no_surface() -> None:
    with pytest.raises(ItemError, match="has no normal at"):
        CUBE.normals([[0, 0, 50.0]], 2.0)
    with pytest.raises(ItemError, match="faces both ways"):
        CUBE.normals([[0, 0, 0.0]], 2.0)  # opposite sides cancel


def test_findings_and_refusals() -> None:
    open_mesh = Surface(CUBE.vertices, CUBE.faces[:-1], "open")
    assert "not closed (3 edges" in str(open_mesh.findings()[0])
    inward, found = outward(Surface(CUBE.vertices, CUBE.faces[:, ::-1], "inward"))
    assert inward.volume_mm3 == pytest.approx(8)
    assert "normals point inwards" in str(found[0])
    with pytest.raises(InputError, match="the mesh is empty"):
        Surface(CUBE.vertices, np.empty((0, 3), dtype=int))
    with pytest.raises(InputError, match="point 0 is not finite"):
        Surface(np.where(CUBE.vertices == CUBE.vertices[0], np.nan, CUBE.vertices), CUBE.faces)
    with pytest.raises(InputError, match="names vertex 99, but there are 8"):
        Surface(CUBE.vertices, np.vstack([CUBE.faces, [0, 1, 99]]))
    with pytest.raises(InputError, match="1 triangles have no area"):
        Surface(CUBE.vertices, np.vstack([CUBE.faces, [0, 1, 1]]))


@pytest.mark.parametrize(("scale", "unit", "hint"), [(0.001, "mm", "say `unit: m`"), (0.1, "mm", "say `unit: cm`")])
def test_a_head_in_another_unit_is_refused_with_the_unit_it_has(scale: float, unit: str, hint: str) -> None:
    ball = sphere_surface(90.0 * scale, subdivisions=2)
    with pytest.raises(InputError, match=hint):
        check_head_size(ball, unit)
    check_head_size(sphere_surface(90.0, subdivisions=2), "mm")


@pytest.mark.parametrize("suffix", ["ply", "stl", "obj"])
def test_mesh_files_against_trimesh(suffix: str) -> None:
    ball = sphere_surface(90.0, subdivisions=2, centre_mm=(1, 2, 3))
    data = trimesh.Trimesh(ball.vertices, ball.faces, process=False).export(file_type=suffix)
    data = data.encode() if isinstance(data, str) else data
    back = parse_surface(data, f"head.{suffix}")
    assert back.is_closed
    assert back.volume_mm3 == pytest.approx(ball.volume_mm3, rel=1e-5)
    if suffix != "stl":  # STL has no vertex order to keep
        np.testing.assert_allclose(back.vertices, ball.vertices, rtol=0, atol=1e-5)
        np.testing.assert_array_equal(back.faces, ball.faces)


def test_gifti_goes_through_its_own_matrix() -> None:
    import nibabel
    from nibabel.gifti import GiftiCoordSystem, GiftiDataArray, GiftiImage

    ball = sphere_surface(90.0, subdivisions=1)
    shift = np.eye(4)
    shift[:3, 3] = [5, -7, 11]
    points = GiftiDataArray(
        ball.vertices.astype(np.float32), intent="NIFTI_INTENT_POINTSET", coordsys=GiftiCoordSystem(xform=shift)
    )
    corners = GiftiDataArray(ball.faces.astype(np.int32), intent="NIFTI_INTENT_TRIANGLE")
    back = parse_surface(GiftiImage(darrays=[points, corners]).to_bytes(), "cortex.gii")
    np.testing.assert_allclose(back.vertices, ball.vertices + [5, -7, 11], rtol=0, atol=1e-4)
    np.testing.assert_array_equal(back.faces, ball.faces)
    assert nibabel.__version__


@pytest.mark.parametrize(
    ("data", "name", "message"),
    [
        (b"", "a.ply", "the file is empty"),
        (b"ply\nrubbish", "a.ply", "cannot be read as PLY"),
        (b"\x00\x01", "a.gii", "cannot be read as GII"),
        (b"solid", "a.vtk", "expected a surface"),
        (b"v 0 0 0\n", "a.obj", "no triangles|cannot be read as OBJ"),
    ],
)
def test_damaged_meshes_are_refused_in_one_line(data: bytes, name: str, message: str) -> None:
    with pytest.raises(InputError, match=message) as refused:
        parse_surface(data, name)
    assert len(refused.value.lines) == 1


def test_missing_mesh() -> None:
    with pytest.raises(InputError, match="cannot be read"):
        read_surface("/nowhere/scalp.ply")


def test_lps_metres_are_converted_on_reading() -> None:
    ball = sphere_surface(90.0, subdivisions=1, centre_mm=(1, 2, 3))
    moved = ball.vertices * [-0.001, -0.001, 0.001]
    data = trimesh.Trimesh(moved, ball.faces, process=False).export(file_type="ply")
    np.testing.assert_allclose(
        parse_surface(data, "h.ply", axes="LPS", unit="m").vertices, ball.vertices, rtol=0, atol=1e-4
    )
