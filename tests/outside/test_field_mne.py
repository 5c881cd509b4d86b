"""The field against MNE's own forward solution in a sphere: another program, other code, by reciprocity.

A current dipole q at r gives a field B at R. A magnetic dipole of moment rate m at R induces at r the field E with
q . E = -m . B per unit current (Heller and van Hulsteyn 1992): so MNE's leadfield of point magnetometers is ours,
element by element.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from coilwright.geometry.field import field_at_points
from coilwright.geometry.windings import Elements

mne = pytest.importorskip("mne")

RELATIVE = 1e-12


def mne_field(positions_m: np.ndarray, moments: np.ndarray, points_m: np.ndarray) -> np.ndarray:
    """E at points for all elements together, from MNE's forward solution."""
    info = mne.create_info([f"MEG {i:04d}" for i in range(len(positions_m))], 1000.0, "mag")
    with info._unlock():
        info["dev_head_t"] = mne.transforms.Transform("meg", "head", np.eye(4))
    for i, channel in enumerate(info["chs"]):
        normal = moments[i] / np.linalg.norm(moments[i])
        helper = np.eye(3)[np.abs(normal).argmin()]
        x = np.cross(helper, normal)
        x /= np.linalg.norm(x)
        channel["loc"][:12] = np.concatenate([positions_m[i], x, np.cross(normal, x), normal])
        channel["coil_type"] = 2000  # a point magnetometer
        channel["coord_frame"] = 1
    sphere: Any = mne.make_sphere_model(r0=(0.0, 0.0, 0.0), head_radius=None, verbose="error")
    source = mne.setup_volume_source_space(
        pos={"rr": points_m, "nn": np.tile([0, 0, 1.0], (len(points_m), 1))}, verbose="error"
    )
    forward = mne.make_forward_solution(
        info, mne.transforms.Transform("head", "mri", np.eye(4)), source, sphere,
        meg=True, eeg=False, mindist=0.0, n_jobs=1, verbose="error",
    )  # fmt: skip
    gain = forward["sol"]["data"]  # T per A m, one row a magnetometer, three columns a point
    assert forward["nsource"] == len(points_m)
    return -(np.linalg.norm(moments, axis=1) @ gain).reshape(-1, 3)


def test_two_hundred_elements_at_a_thousand_points() -> None:
    rng = np.random.default_rng(17)
    outside = rng.normal(size=(200, 3))
    positions = 0.001 * rng.uniform(96, 150, (200, 1)) * outside / np.linalg.norm(outside, axis=1, keepdims=True)
    moments = rng.normal(size=(200, 3))
    inside = rng.normal(size=(1000, 3))
    points = 0.089 * rng.uniform(0.05, 1, (1000, 1)) ** (1 / 3) * inside / np.linalg.norm(inside, axis=1, keepdims=True)
    ours = field_at_points(np.eye(4), Elements(positions * 1000, moments), points * 1000, np.zeros(3))
    theirs = mne_field(positions, moments, points)
    difference = np.linalg.norm(ours - theirs, axis=1).max() / np.linalg.norm(theirs, axis=1).max()
    assert difference < RELATIVE
