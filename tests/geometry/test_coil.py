"""Coil files: what they may say, what is refused with its place, and the elements that stand for windings."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import trimesh
from coilwright.geometry.coil import BUILT_IN, Coil, load_coil
from coilwright.geometry.errors import InputError
from coilwright.geometry.files import Inputs
from coilwright.geometry.windings import coil_elements, quadrature_error

FILE = """\
coilwright_coil: 1
name: harbour-eight
casing:
  - {box: {size_mm: [110, 190, 16], centre_mm: [0, 0, -8]}}
handle: {from_mm: [-60, 0, -20], to_mm: [-200, 0, -20], radius_mm: 18}
windings:
  - {loop: {centre_mm: [0, 37, -6], radius_mm: 34, turns: 9, sense: -1}}
  - {loop: {centre_mm: [0, -37, -6], radius_mm: 34, turns: 9, sense: 1}}
slope_a_per_us_at_full_output: 150
waveform: {kind: biphasic, effective_phase: second}
"""


def load(folder: Path, text: str = FILE) -> Coil:
    (folder / "coil.yaml").write_text(text)
    return load_coil(str(folder / "coil.yaml"), Inputs())


def refused(folder: Path, *changes: tuple[str, str]) -> list[str]:
    text = FILE
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    with pytest.raises(InputError) as error:
        load(folder, text)
    return [line.replace(f"{folder}/", "") for line in error.value.lines]


def test_a_coil_file(tmp_path: Path) -> None:
    coil = load(tmp_path)
    assert (coil.name, coil.turned, coil.effective_sign, len(coil.solids)) == ("harbour-eight", True, -1.0, 2)
    assert coil.file.output_step_percent == 1.0
    centre, radius = coil.bounds
    for solid in coil.solids:
        assert np.linalg.norm(solid.outline.vertices - centre, axis=1).max() <= radius + 1e-9


@pytest.mark.parametrize("name", BUILT_IN)
def test_built_in_coils_are_generic_and_say_so(name: str) -> None:
    coil = load_coil(name, Inputs())
    assert coil.file.generic
    assert all(solid.outline.vertices[:, 2].max() <= 0 for solid in coil.solids)


def test_refusals_carry_their_place(tmp_path: Path) -> None:
    assert refused(tmp_path, ("radius_mm: 34, turns: 9, sense: -1", "radius_mm: 34, turns: 9, sense: 2")) == [
        "coil.yaml:7:62: windings[0].loop.sense: expected one of -1 or 1, got the number 2"
    ]
    assert refused(tmp_path, ("biphasic", "monophasic")) == [
        "coil.yaml:10:30: waveform.effective_phase: a monophasic pulse stimulates in its first phase;"
        " say first, or kind: biphasic"
    ]
    assert refused(tmp_path, ("[0, 37, -6]", "[0, 37, 6]")) == [
        "coil.yaml:7:5: windings[0]: the winding crosses the contact face (z = 6 > 0); windings lie behind it"
    ]
    assert refused(tmp_path, ("centre_mm: [0, 0, -8]", "centre_mm: [0, 0, -7]")) == [
        "coil.yaml:4:5: casing[0]: sticks out of the contact face (z > 0); the body lies at z <= 0"
    ]
    assert refused(tmp_path, ("casing:", "housing:")) == [
        "coil.yaml:1:1: casing: missing; this key is required",
        "coil.yaml:3:1: housing: unknown key; did you mean 'casing'?",
    ]
    assert refused(tmp_path, ("handle: {from_mm: [-60, 0, -20]", "handle: {from_mm: [-200, 0, -20]")) == [
        "coil.yaml:5:1: handle: from_mm and to_mm are the same point; give the two ends of the handle's axis"
    ]


def test_unknown_names_and_missing_files(tmp_path: Path) -> None:
    with pytest.raises(
        InputError, match=r"neither a built-in coil .* nor a coil file .*did you mean 'figure8-generic'"
    ):
        load_coil("figure8_generic", Inputs())
    with pytest.raises(InputError, match="no such file"):
        load_coil(str(tmp_path / "none.yaml"), Inputs())


def test_mesh_casings(tmp_path: Path) -> None:
    box = trimesh.creation.box(extents=[60, 60, 10])
    box.apply_translation([0, 0, -5])
    box.export(tmp_path / "casing.stl")
    text = FILE.replace("{box: {size_mm: [110, 190, 16], centre_mm: [0, 0, -8]}}", "{mesh: casing.stl}")
    coil = load(tmp_path, text)
    assert coil.solids[0].distance(np.array([[0, 0, 3.0]]))[0] == pytest.approx(3.0, abs=1e-5)
    assert coil.findings == ()
    # an L is not convex: its hull is used, and that is said
    other = trimesh.creation.box(extents=[20, 120, 10])
    other.apply_translation([41, 33, -5])
    trimesh.util.concatenate([box, other]).export(tmp_path / "casing.stl")
    assert "not convex; its hull" in str(load(tmp_path, text).findings[0])
    trimesh.Trimesh(box.vertices, box.faces[:-2], process=False).export(tmp_path / "casing.stl")
    with pytest.raises(
        InputError, match=r"coil.yaml:4:6: casing\[0\].mesh: casing.stl: a casing must be a closed mesh"
    ):
        load(tmp_path, text)


def test_moments_of_windings_against_the_enclosed_area(tmp_path: Path) -> None:
    coil = load(tmp_path)
    moments = coil_elements(coil).moments
    area = np.pi * 0.034**2 * 9 * 1e6
    assert moments[:, 2][moments[:, 2] > 0].sum() == pytest.approx(area, rel=1e-12)
    assert moments[:, 2].sum() == pytest.approx(0, abs=1e-9 * area)
    spiral = FILE.replace(
        "{loop: {centre_mm: [0, 37, -6], radius_mm: 34,",
        "{spiral: {centre_mm: [0, 37, -6], inner_mm: 26, outer_mm: 44,",
    )
    m = coil_elements(load(tmp_path, spiral)).moments[:, 2]
    # turns spread evenly between a and b enclose N pi (a^2 + ab + b^2) / 3
    assert -m[m < 0].sum() == pytest.approx(9 * np.pi * (26**2 + 26 * 44 + 44**2) / 3 * 1e-6 * 1e6, rel=1e-12)


def test_a_wire_path_agrees_with_the_loop_it_draws(tmp_path: Path) -> None:
    angle = np.linspace(0, 2 * np.pi, 721)[:-1]
    rows = [f"{34 * np.cos(a)}\t{37 + 34 * np.sin(a)}\t-6.0" for a in np.tile(angle, 9)]
    (tmp_path / "wire.tsv").write_text("x_mm\ty_mm\tz_mm\n" + "\n".join(rows) + "\n")
    text = FILE.replace("{loop: {centre_mm: [0, 37, -6], radius_mm: 34, turns: 9, sense: -1}}", "{path: wire.tsv}")
    by_path, by_loop = coil_elements(load(tmp_path, text)), coil_elements(load(tmp_path))
    half = len(by_loop.moments) // 2
    assert by_path.moments[:-half, 2].sum() == pytest.approx(-by_loop.moments[:half, 2].sum(), rel=1e-4)
    (tmp_path / "wire.tsv").write_text("x_mm\ty_mm\tz_mm\n0\t0\t1\n1\t0\t0\n0\t1\t0\n")
    with pytest.raises(InputError, match=r"windings\[0\]: the winding crosses the contact face \(z = 1 > 0\)"):
        load(tmp_path, text)


@pytest.mark.parametrize("name", BUILT_IN)
def test_the_default_elements_are_within_a_thousandth_15_mm_below_the_scalp(name: str) -> None:
    coil = load_coil(name, Inputs())
    grid = np.stack(np.meshgrid([-40.0, 0, 40], [-80.0, -40, 0, 40, 80], [15 + 4.0]), axis=-1).reshape(-1, 3)
    assert quadrature_error(coil, grid) < 1e-3
    # and it is an estimate of something: with a third of the nodes it is larger
    assert quadrature_error(coil, grid, radial=1, around=6) > 5 * quadrature_error(coil, grid)


def test_a_coil_without_windings_has_no_field(tmp_path: Path) -> None:
    text = "\n".join(line for line in FILE.splitlines() if "loop" not in line and "windings" not in line)
    with pytest.raises(InputError, match="the coil file has no windings; a field needs them"):
        coil_elements(load(tmp_path, text))
