"""Ratios in one run against general libraries doing the same work: ``pytest -m bench -s -n 0 tests/bench``."""

from __future__ import annotations

import subprocess
import sys
import time
from collections.abc import Callable

import numpy as np
import pytest
import trimesh
from coilwright.geometry.coil import Coil
from coilwright.geometry.field import field_at_points
from coilwright.geometry.placement import Directions, place
from coilwright.geometry.surface import Surface
from coilwright.geometry.windings import coil_elements

pytestmark = pytest.mark.bench


def best(work: Callable[[], object], repeats: int = 3) -> float:
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        times.append(time.perf_counter() - start)
    return min(times)


def table(title: str, rows: list[tuple[str, str]]) -> None:
    print(f"\n{title}")
    for name, value in rows:
        print(f"  {name:<58}{value:>18}")


def targets_under(scalp: Surface, count: int) -> np.ndarray:
    """Points 10 to 50 mm under the upper scalp: cortex on the crowns and in the depth."""
    rng = np.random.default_rng(1)
    upper = np.flatnonzero(scalp.vertices[:, 2] > 0)
    vertex = upper[rng.integers(len(upper), size=count)]
    middle = scalp.vertices.mean(axis=0)
    inwards = middle - scalp.vertices[vertex]
    depth = rng.uniform(10, 50, (count, 1))
    return scalp.vertices[vertex] + depth * inwards / np.linalg.norm(inwards, axis=1, keepdims=True)


def targets_anywhere(count: int) -> np.ndarray:
    """Points 50 to 70 mm from the head's origin, in every direction: 33 mm deep in the median."""
    rng = np.random.default_rng(0)
    direction = rng.normal(size=(count, 3))
    return direction * rng.uniform(50, 70, (count, 1)) / np.linalg.norm(direction, axis=1, keepdims=True)


@pytest.mark.parametrize("where", ["under the upper scalp", "anywhere in the head"])
def test_placing_ten_thousand_targets(real_scalp: Surface, where: str) -> None:
    targets = targets_under(real_scalp, 10_000) if where.startswith("under") else targets_anywhere(10_000)
    found = real_scalp.nearest(targets)
    tangential = np.abs(real_scalp.normals(found.points, 15.0) @ [0.64, 0.74, 0.21]) < 0.9
    targets = targets[tangential & (found.distance < 59)]
    vectors = np.tile([0.64, 0.74, 0.21], (len(targets), 1))
    directions = Directions(vectors, np.full(len(targets), np.nan))
    head = trimesh.Trimesh(real_scalp.vertices, real_scalp.faces, process=False)
    few = Directions(directions.vectors[::10], directions.midline_deg[::10])

    def fresh() -> tuple[Surface, trimesh.Trimesh]:
        mesh = trimesh.Trimesh(real_scalp.vertices, real_scalp.faces, process=False)
        return Surface(real_scalp.vertices, real_scalp.faces), mesh

    once = best(lambda: place(fresh()[0], targets, directions, standoff_mm=5.0))
    theirs_once = best(lambda: trimesh.proximity.closest_point(fresh()[1], targets))
    ours = best(lambda: place(real_scalp, targets, directions, standoff_mm=5.0))
    tenth = best(lambda: place(real_scalp, targets[::10], few, standoff_mm=5.0))
    theirs = best(lambda: trimesh.proximity.closest_point(head, targets), 2)
    nearest = best(lambda: real_scalp.nearest(targets))
    table(
        f"placing {len(targets)} targets {where} on {len(real_scalp.vertices)} vertices",
        [
            ("place (nearest point, side, normals, frames), one call", f"{once:.2f} s"),
            ("trimesh, nearest point alone, one call", f"{theirs_once:.2f} s"),
            ("ratio in one call, trees built by both", f"{theirs_once / once:.1f}"),
            ("ratio when both have their trees", f"{theirs / ours:.1f}"),
            ("ratio, nearest points alone", f"{theirs / nearest:.1f}"),
            ("ten times the targets take (times)", f"{ours / tenth:.1f}"),
        ],
    )


def test_help_is_quick() -> None:
    def run(code: str) -> float:
        return best(lambda: subprocess.run([sys.executable, "-c", code], check=True, capture_output=True), 7)

    ours = run(
        "import sys; sys.argv = ['coilwright', '--help']\n"
        "from coilwright.runner.cli import main\n"
        "try: main()\n"
        "except SystemExit: pass"
    )
    click = run("import click")
    table("coilwright --help", [("over `import click`", f"{ours / click:.2f}")])


def textbook(positions: np.ndarray, moments: np.ndarray, points: np.ndarray) -> np.ndarray:
    """The formula as papers print it, with einsum."""
    big, r = positions[:, None] * 1e-3, points[None] * 1e-3
    a = big - r
    a_length, big_length = np.linalg.norm(a, axis=2), np.linalg.norm(big, axis=2)
    f = a_length * (big_length * a_length + np.einsum("epi,epi->ep", a, np.broadcast_to(big, a.shape)))
    ratio = np.einsum("epi,epi->ep", a, np.broadcast_to(big, a.shape)) / a_length
    gradient = (a_length**2 / big_length + ratio + 2 * a_length + 2 * big_length)[..., None] * big - (
        a_length + 2 * big_length + ratio
    )[..., None] * r
    v = (
        np.einsum("epi,ei,ep->epi", np.broadcast_to(big, a.shape), moments, 0 * f)
        + (np.einsum("epi,ei->ep", gradient, moments) / f**2)[..., None] * big
        - moments[:, None] / f[..., None]
    )
    return np.asarray(1e-7 * np.cross(points * 1e-3, v.sum(axis=0)))


def test_field_pairs_per_second(figure8: Coil) -> None:
    elements = coil_elements(figure8)
    pose = np.diag([1.0, -1, -1, 1])
    pose[2, 3] = 96
    rng = np.random.default_rng(0)
    points = rng.normal(size=(100_000, 3)) * 25
    points = points[np.linalg.norm(points, axis=1) < 85]
    few = points[:5000]
    pairs = len(elements.moments) * len(points)
    ours = best(lambda: field_at_points(pose, elements, points, np.zeros(3)))
    head = elements.positions_mm @ pose[:3, :3].T + pose[:3, 3]
    moment = elements.moments @ pose[:3, :3].T
    plain = best(lambda: textbook(head, moment, few)) * len(points) / len(few)
    a, b = rng.normal(size=(len(elements.moments), 200)), rng.normal(size=(200, len(points)))
    dense = best(lambda: a @ b) / 200
    np.testing.assert_allclose(
        field_at_points(pose, elements, few, np.zeros(3)), textbook(head, moment, few), rtol=0, atol=1e-10
    )
    table(
        f"field: {len(elements.moments)} elements x {len(points)} points",
        [
            ("pairs per second", f"{pairs / ours:.3g}"),
            ("ratio over the textbook formula by einsum", f"{plain / ours:.1f}"),
            ("time over one multiply-add a pair of a dense product", f"{ours / dense:.0f}"),
        ],
    )
