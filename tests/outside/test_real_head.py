"""The main job on a real average head, against data and programs that we did not write.

Scalp, electrode positions and inner skull: shipped by MNE (mne/data/fsaverage). Cortex: fsaverage5 pial surface,
shipped by nilearn.
"""

from __future__ import annotations

import csv
import json
from pathlib import Path

import numpy as np
import pytest
import trimesh
from coilwright.geometry.clearance import Obstacle, clearances
from coilwright.geometry.coil import Coil
from coilwright.geometry.frames import angle_between_deg
from coilwright.geometry.mesh_files import read_surface
from coilwright.geometry.placement import Directions, place
from coilwright.geometry.sphere import fit_spheres
from coilwright.geometry.surface import Surface

from tests.conftest import Cli, Study, mne_folder, real_scalp_m

# Hand area in Talairach space, often misquoted as MNI (Mayka et al. 2006, NeuroImage 31:1453-1474; from memory).
HAND_MM = np.array([-37.0, -21.0, 58.0])


@pytest.fixture(scope="session")
def electrodes() -> dict[str, np.ndarray]:
    table = mne_folder().parents[1] / "channels" / "data" / "montages" / "fsaverage_1005.tsv"
    with table.open() as stream:
        rows = list(csv.DictReader(stream, delimiter="\t"))
    fiducials = ("LPA", "RPA", "Nz")
    return {
        row["label"]: 1000 * np.array([float(row[k]) for k in "xyz"]) for row in rows if row["label"] not in fiducials
    }


@pytest.fixture(scope="session")
def left_pial() -> Surface:
    datasets = pytest.importorskip("nilearn.datasets")
    return read_surface(datasets.fetch_surf_fsaverage("fsaverage5").pial_left)


def motor_targets(left_pial: Surface, scalp: Surface, count: int) -> np.ndarray:
    """Cortical points near the hand area, the ones nearest to it, at most 40 mm deep."""
    near = left_pial.vertices[np.argsort(np.linalg.norm(left_pial.vertices - HAND_MM, axis=1))[: 4 * count]]
    depth = -scalp.signed_distance(near)
    return near[(depth > 5) & (depth < 40)][:count]


def test_nearest_points_and_insides_against_trimesh(real_scalp: Surface) -> None:
    rng = np.random.default_rng(7)
    points = rng.uniform(-130, 130, (2000, 3))
    head = trimesh.Trimesh(real_scalp.vertices, real_scalp.faces, process=False)
    expected, distance, _ = trimesh.proximity.closest_point(head, points)
    found = real_scalp.nearest(points)
    np.testing.assert_allclose(found.distance, distance, rtol=0, atol=1e-10)
    np.testing.assert_allclose(found.points, expected, rtol=0, atol=1e-7)
    inside = head.contains(points)
    np.testing.assert_array_equal(real_scalp.signed_distance(points) < 0, inside)
    assert head.is_watertight == real_scalp.is_closed
    assert real_scalp.volume_mm3 == pytest.approx(head.volume, rel=1e-9)


def test_electrodes_lie_on_the_scalp_that_ships_with_them(
    real_scalp: Surface, electrodes: dict[str, np.ndarray]
) -> None:
    # trimesh measures a median of 2.2 mm and a largest distance of 6.8 mm (design notes, tried).
    points = np.array(list(electrodes.values()))
    distance = real_scalp.nearest(points).distance
    assert len(points) >= 330
    assert np.median(distance) == pytest.approx(2.2, abs=0.1)
    assert distance.max() == pytest.approx(6.8, abs=0.1)
    head = trimesh.Trimesh(real_scalp.vertices, real_scalp.faces, process=False)
    np.testing.assert_allclose(distance, trimesh.proximity.closest_point(head, points)[1], rtol=0, atol=1e-9)


def test_the_coil_over_c3_looks_at_the_brain(real_scalp: Surface, electrodes: dict[str, np.ndarray]) -> None:
    mne = pytest.importorskip("mne")
    skull = mne.read_bem_surfaces(mne_folder() / "fsaverage-inner_skull-bem.fif", verbose="error")[0]["rr"] * 1000
    c3 = electrodes["C3"]
    target = c3 + 20 * (skull.mean(axis=0) - c3) / np.linalg.norm(skull.mean(axis=0) - c3)
    standing = place(real_scalp, target[None], Directions.midline(np.array([45.0])), standoff_mm=5)
    pose = standing.head_from_coil[0]
    to_middle = skull.mean(axis=0) - pose[:3, 3]
    assert angle_between_deg(pose[:3, 2], to_middle) < 12
    assert target[0] < 0  # C3 is on the left
    # the handle (along -x of the figure-eight) points back and away from the midline, as an operator stands
    assert pose[1, 0] > 0.5
    assert pose[0, 0] > 0.3


def test_forty_targets_on_the_left_motor_strip(
    real_scalp: Surface, left_pial: Surface, figure8: Coil, study: Study, cli: Cli
) -> None:
    targets = motor_targets(left_pial, real_scalp, 40)
    assert len(targets) == 40
    vertices, faces = real_scalp_m()
    scalp = trimesh.Trimesh(vertices, faces, process=False)
    (study.folder / "head.ply").write_bytes(scalp.export(file_type="ply"))  # metres, as the package ships it
    rows = [f"t{i:02d}\t{x!r}\t{y!r}\t{z!r}\tmidline_deg: 45" for i, (x, y, z) in enumerate(targets.tolist())]
    (study.folder / "targets.tsv").write_text("name\tx_mm\ty_mm\tz_mm\tdirection\n" + "\n".join(rows) + "\n")
    study.write(
        {
            "head": {"scalp": "head.ply", "unit": "m", "origin": "surface"},
            "targets": "targets.tsv",
            "pulses.per_pose": 1,
        }
    )
    assert cli("schedule", study.protocol, "-o", study.folder / "plan").code == 0
    assert cli("dry-run", study.folder / "plan").code == 0
    matrices = json.loads((study.folder / "plan" / "matrices.json").read_text())["head_from_coil"]
    poses = np.array(list(matrices.values()))
    # every coil stands outside, on the left, looks inwards, and stands off by 6 mm: measured by trimesh
    head = trimesh.Trimesh(vertices * 1000, faces, process=False)
    assert not head.contains(poses[:, :3, 3]).any()
    assert (poses[:, 0, 3] < 0).all()
    assert ((poses[:, :3, 3] * poses[:, :3, 2]).sum(axis=1) < 0).all()
    away = trimesh.proximity.closest_point(head, poses[:, :3, 3])[1]
    # The float32 of PLY files costs 1e-5 mm.
    assert away.min() >= 6 - 1e-4
    assert away.max() < 6 + 5
    free = clearances(poses, figure8.solids, Obstacle("scalp", real_scalp.triangles, 0.0, 6.0))
    np.testing.assert_allclose(free, 6.0, rtol=0, atol=1e-3)
    table = [line.split("\t") for line in (study.folder / "plan" / "poses.tsv").read_text().splitlines()]
    rows_by_name = [dict(zip(table[0], row, strict=True)) for row in table[1:]]
    assert max(float(row["direction_error_deg"]) for row in rows_by_name) < 20
    assert min(float(row["field_per_slope"]) for row in rows_by_name) > 0.3


def test_scalp_to_cortex_under_the_motor_strip_is_what_is_published(
    real_scalp: Surface, left_pial: Surface, electrodes: dict[str, np.ndarray]
) -> None:
    # 12 to 20 mm (published range, as the design notes give it), about 16 mm under C3.
    at = real_scalp.nearest(electrodes["C3"][None]).points
    assert 12 <= left_pial.nearest(at).distance[0] <= 20


def test_the_sphere_of_the_real_head(real_scalp: Surface) -> None:
    at = real_scalp.nearest(HAND_MM[None]).points
    fitted = fit_spheres(real_scalp, at)
    assert 75 < fitted.radii[0] < 105
    # No part of this head is a sphere to better than that: `place` reports it as a finding, over 2 mm.
    assert fitted.residual_mm[0] == pytest.approx(2.4, abs=0.2)


def test_poses_open_in_tables_of_other_programs(study: Study, cli: Cli) -> None:
    import pandas as pd

    assert cli("place", study.protocol, "-o", study.folder / "poses").code == 0
    frame = pd.read_csv(study.folder / "poses" / "poses.tsv", sep="\t", na_values=["n/a"])
    assert frame["reachable"].tolist() == ["yes", "yes"]
    q = frame[["qx", "qy", "qz", "qw"]].to_numpy()
    from scipy.spatial.transform import Rotation
    from transforms3d.quaternions import quat2mat

    stored = json.loads((study.folder / "poses" / "matrices.json").read_text())["head_from_coil"]
    for i, name in enumerate(frame["pose"]):
        matrix = np.array(stored[name])
        np.testing.assert_allclose(Rotation.from_quat(q[i]).as_matrix(), matrix[:3, :3], rtol=0, atol=1e-12)
        np.testing.assert_allclose(quat2mat(q[i][[3, 0, 1, 2]]), matrix[:3, :3], rtol=0, atol=1e-12)
        np.testing.assert_array_equal(frame.loc[i, ["x_mm", "y_mm", "z_mm"]].to_numpy(dtype=float), matrix[:3, 3])
    assert Path(study.protocol).exists()
