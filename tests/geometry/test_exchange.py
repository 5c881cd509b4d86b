"""Pose lists in open formats: the tests that every exporter passes, with a reader that shares no code."""

from __future__ import annotations

import csv
import io
import json
from typing import Any

import numpy as np
import pytest
from coilwright.geometry.errors import InputError
from coilwright.geometry.exchange import matrices, receipt, tsv
from coilwright.geometry.pose_list import PoseList
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

TIPS = np.array([[0, 0, 0, 1], [50, 0, 0, 1], [0, 0, 50, 1]], dtype=float).T


def pose(rotation: Rotation, origin: tuple[float, float, float]) -> np.ndarray:
    matrix = np.eye(4)
    matrix[:3, :3], matrix[:3, 3] = rotation.as_matrix(), origin
    return matrix


# Generic and asymmetric; half a turn, and almost half a turn; 90 degrees of pitch both ways.
POSES = {
    "generic": pose(Rotation.from_rotvec([0.3, -1.1, 0.7]), (-57.6, 3.125, 76.8)),
    "half turn": pose(Rotation.from_rotvec(np.pi * np.array([0, 0.6, 0.8])), (10, 20, 30)),
    "almost": pose(
        Rotation.from_rotvec((np.pi - np.radians(1e-6)) * np.array([0, 0.6, 0.8])), (1 / 3, 62 / 3, 30.00001)
    ),
    "up": pose(Rotation.from_euler("ZYX", [20, 90, 0], degrees=True), (0, 0, 100)),
    "down": pose(Rotation.from_euler("ZYX", [20, -90, 0], degrees=True), (-1e-7, 1e5, 0)),
}


def listed(**more: Any) -> PoseList:
    return PoseList.of(list(POSES), np.stack(list(POSES.values())), "scanner", **more)


def read_tsv_by_csv(data: bytes) -> dict[str, np.ndarray]:
    """The standard library's reader and SciPy's quaternions: not the product's."""
    rows = csv.DictReader(io.StringIO(data.decode()), delimiter="\t")
    return {
        row["pose"]: pose(
            Rotation.from_quat([float(row[q]) for q in ("qx", "qy", "qz", "qw")]),
            (float(row["x_mm"]), float(row["y_mm"]), float(row["z_mm"])),
        )
        for row in rows
    }


@pytest.mark.parametrize("form", ["tsv", "matrices"])
def test_origin_and_tips_land_where_they_should_in_order(form: str) -> None:
    if form == "tsv":
        back = read_tsv_by_csv(tsv.write(listed(), "p.tsv")["p.tsv"])
    else:
        stored = json.loads(matrices.write(listed(), "m.json")["m.json"])["head_from_coil"]
        back = {name: np.array(rows) for name, rows in stored.items()}
    assert list(back) == list(POSES)
    for name, matrix in POSES.items():
        np.testing.assert_allclose(back[name] @ TIPS, matrix @ TIPS, rtol=0, atol=1e-9)
        # the inverse, and rows read as columns, land elsewhere
        assert np.abs(np.linalg.inv(back[name]) @ TIPS - matrix @ TIPS).max() > 1


@pytest.mark.parametrize("form", ["tsv", "matrices"])
def test_what_went_out_comes_back(form: str) -> None:
    before = listed(coil="c", turned=True)
    if form == "tsv":
        files = tsv.write(before, "p.tsv")
        after = tsv.read(files["p.tsv"], "p.tsv", files["p.json"])
    else:
        after = matrices.read(matrices.write(before, "m.json")["m.json"], "m.json")
    assert (after.names, after.origin, after.coil, after.turned) == (before.names, "scanner", "c", True)
    np.testing.assert_allclose(after.pose.matrix, before.pose.matrix, rtol=0, atol=1e-12)
    np.testing.assert_array_equal(after.pose.origin, before.pose.origin)  # text keeps all 17 digits


@pytest.mark.parametrize(
    ("matrix", "message"),
    [
        (np.diag([1.0, 1, -1, 1]), "mirrored"),
        (np.diag([1.0, 1, 1.00001, 1]), "not orthonormal"),
        (np.eye(4)[[0, 1, 3, 2]], "last row"),
        (np.full((4, 4), np.nan), "not finite"),
        (np.where(np.arange(16).reshape(4, 4) == 3, np.inf, np.eye(4)), "not finite"),
    ],
)
def test_no_pose_list_holds_what_is_no_pose(matrix: np.ndarray, message: str) -> None:
    with pytest.raises(InputError, match=message):
        PoseList.of(["a"], matrix[None], "scanner")
    content = json.loads(matrices.write(listed(), "m.json")["m.json"])
    if np.isfinite(matrix).all():
        content["head_from_coil"]["up"] = matrix.tolist()
        with pytest.raises(InputError, match=message):
            matrices.read(json.dumps(content).encode(), "m.json")


@pytest.mark.parametrize(
    ("names", "message"),
    [
        ([], "the pose list is empty"),
        (["a", "a"], "pose 'a' is there twice"),
        (["a\tb"], "does not fit into a table"),
        (["a" * 65], "longer than 64 characters"),
        ([""], "does not fit into a table"),
    ],
)
def test_names(names: list[str], message: str) -> None:
    with pytest.raises(InputError, match=message):
        PoseList.of(names, np.tile(np.eye(4), (len(names), 1, 1)), "scanner")


def test_lists_whose_frame_is_not_known_are_refused() -> None:
    files = tsv.write(listed(), "p.tsv")
    with pytest.raises(InputError, match=r"its sidecar p.json is missing; without it the poses' frame is not known"):
        tsv.read(files["p.tsv"], "p.tsv", None)
    sidecar = json.loads(files["p.json"])
    for key, value in (("axes", "LPS"), ("unit", "m"), ("origin", "moon"), ("name", "tracker")):
        wrong = json.dumps(sidecar | {"Frame": sidecar["Frame"] | {key: value}}).encode()
        with pytest.raises(InputError, match="expected a head frame in RAS and mm with a named origin"):
            tsv.read(files["p.tsv"], "p.tsv", wrong)
    with pytest.raises(InputError, match="not a sidecar of poses"):
        tsv.read(files["p.tsv"], "p.tsv", b"[]")
    content = json.loads(matrices.write(listed(), "m.json")["m.json"])
    with pytest.raises(InputError, match="expected frame head, axes RAS, unit mm; got head, RAS, m"):
        matrices.read(json.dumps(content | {"unit": "m"}).encode(), "m.json")
    with pytest.raises(InputError, match="origin: expected one of scanner"):
        matrices.read(json.dumps(content | {"origin": "moon"}).encode(), "m.json")
    twice = matrices.write(listed(), "m.json")["m.json"].replace(b'"down"', b'"up"')
    with pytest.raises(InputError, match="'up' is there twice"):
        matrices.read(twice, "m.json")


@settings(max_examples=200, deadline=None)
@given(st.integers(0, 10_000), st.integers(0, 255))
def test_a_damaged_file_is_refused_or_right(position: int, value: int) -> None:
    for form in ("tsv", "matrices"):
        files = tsv.write(listed(), "p.tsv") if form == "tsv" else matrices.write(listed(), "m.json")
        name = "p.tsv" if form == "tsv" else "m.json"
        data = bytearray(files[name])
        data[position % len(data)] = value
        try:
            after = tsv.read(bytes(data), name, files["p.json"]) if form == "tsv" else matrices.read(bytes(data), name)
        except InputError:
            continue
        # what is read is a list of rigid poses; a changed digit cannot be told, a changed shape never passes
        assert np.abs(np.linalg.det(after.pose.matrix[:, :3, :3]) - 1).max() < 1e-5


def test_receipts_say_how_the_coil_stands() -> None:
    for turned, words in ((False, "stands by its first phase"), (True, "turned by 180 degrees")):
        files = receipt.write(
            listed(turned=turned), "x", to_format="tsv", conventions="c", pose_list_sha256="0", left_out={"far": "ear"}
        )
        text = files["x.receipt.txt"].decode()
        assert words in text
        assert "left out, cannot be reached: 1\n  far: ear" in text
        at = json.loads(files["x.receipt.json"])["worked_example"]["head_ras_mm"]
        np.testing.assert_allclose(list(at.values()), (POSES["generic"] @ TIPS)[:3].T, rtol=0, atol=1e-9)


def test_which_poses_are_reachable_must_be_known() -> None:
    with pytest.raises(InputError, match="pose 'generic' and 4 others do not say whether they are reachable"):
        listed().reachable()
    with pytest.raises(InputError, match="pose 'down' does not say whether it is reachable"):
        listed(columns={"reachable": ["yes", "no", "yes", "yes", "n/a"]}).reachable()
    assert listed(columns={"reachable": ["yes", "no", "yes", "yes", "no"]}).reachable() == [
        True,
        False,
        True,
        True,
        False,
    ]
