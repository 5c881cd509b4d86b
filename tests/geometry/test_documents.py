"""YAML with places: each trap of YAML, all errors at once, and files that stay whole."""

from __future__ import annotations

import errno
import os
from pathlib import Path

import numpy as np
import pytest
from coilwright.geometry import files
from coilwright.geometry.documents import Model, Vector3, read_yaml, validate
from coilwright.geometry.draws import Draws
from coilwright.geometry.errors import InputError
from coilwright.geometry.files import Inputs, stream_file, write_files
from coilwright.geometry.pose_sets import patch, random_scalp_points
from coilwright.geometry.surface import Surface, sphere_surface
from coilwright.geometry.tables import floats, read_tsv, to_tsv
from coilwright.geometry.targets import read_target_table
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import kstest


class Inner(Model):
    length_mm: float
    name: str


class Outer(Model):
    title: str
    count: int
    at_mm: Vector3
    inner: Inner


GOOD = "title: a\ncount: 3\nat_mm: [1, 2, 3.5]\ninner: {length_mm: 2, name: b}\n"


def problems(text: str | bytes) -> list[str]:
    with pytest.raises(InputError) as refused:
        validate(read_yaml(text if isinstance(text, bytes) else text.encode(), "f.yaml"), Outer)
    return list(refused.value.lines)


def test_a_good_file() -> None:
    assert validate(read_yaml(GOOD.encode(), "f.yaml"), Outer).inner.length_mm == 2.0


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        ("count: 3", "count: 1:30", "2:8: count: 1:30 is a base-60 number to YAML; write plain seconds, or quote text"),
        (
            "count: 3",
            "count: 010",
            "2:8: count: 010 is an octal number to YAML; take out the leading zero, or quote text",
        ),
        ("count: 3", "count: .nan", "2:8: count: expected a finite number, got .nan"),
        ("count: 3", "count: 3.5", "2:1: count: expected a whole number, got the number 3.5"),
        ("count: 3", "count: true", "2:1: count: expected a whole number, got true, which is true or false to YAML"),
        ("count: 3", "count:", "2:1: count: expected a whole number, got nothing"),
        ("count: 3", "count: {a: 1}", "2:1: count: expected a whole number, got keys and values"),
        ("count: 3", "count: [1, 2]", "2:1: count: expected a whole number, got a list of 2 values"),
        (
            "title: a",
            "title: yes",
            "1:1: title: expected text, got yes, which is true or false to YAML; put text in quotes",
        ),
        ("title: a", "title: 12", "1:1: title: expected text, got the number 12; put text in quotes"),
        ("title: a", "titel: a", "1:1: titel: unknown key; did you mean 'title'?"),
        ("title: a", "title: a\ntitle: b", "2:1: title: this key stands here twice; keep one"),
        (
            "title: a",
            "title: !!binary aGk=",
            "1:8: title: the tag 'tag:yaml.org,2002:binary' is not used here; write a plain value",
        ),
        ("title: a", "title: a\n[1]: b", "2:1: expected a word as key"),
        (
            "length_mm: 2",
            "length_mm: 1e-5",
            "4:9: inner.length_mm: expected a number, got the text '1e-5': to YAML this is text; write it as 1.0e-05",
        ),
        ("length_mm: 2", "length_mm: -.inf", "4:20: inner.length_mm: expected a finite number, got -.inf"),
        ("length_mm: 2", "length_mm: 1.0e+999", "4:20: inner.length_mm: expected a number below 1e+300, got 1.0e+999"),
        ("[1, 2, 3.5]", "[1, 2]", "3:1: at_mm: expected three numbers [x, y, z], got [1, 2]"),
        ("[1, 2, 3.5]", "[1, 2, x]", "3:1: at_mm: expected three numbers [x, y, z], got [1, 2, 'x']"),
    ],
)
def test_each_trap_of_yaml_is_one_line_with_its_place(old: str, new: str, line: str) -> None:
    found = problems(GOOD.replace(old, new))
    assert any(text.startswith(f"f.yaml:{line}") for text in found), found
    if line.endswith("unknown key; did you mean 'title'?"):
        assert found[0] == "f.yaml:1:1: title: missing; this key is required"
    else:
        assert found == [f"f.yaml:{line}"]


def test_all_errors_come_at_once_in_the_order_of_the_file() -> None:
    text = "title: 1:30\ncount: x\nat_mm: [1, 2, 3]\ninner: {length_mm: .inf, nmae: b}\n"
    assert problems(text) == [
        "f.yaml:1:8: title: 1:30 is a base-60 number to YAML; write plain seconds, or quote text",
        "f.yaml:2:1: count: expected a whole number, got the text 'x'",
        "f.yaml:4:1: inner.name: missing; this key is required",
        "f.yaml:4:20: inner.length_mm: expected a finite number, got .inf",
        "f.yaml:4:26: inner.nmae: unknown key; did you mean 'name'?",
    ]


@pytest.mark.parametrize(
    ("text", "line"),
    [
        (b"a:\n\t- 1", "f.yaml:2:1: a tab where YAML wants spaces; indent with spaces"),
        (b"a: &x 1\nb: *x", "f.yaml:2:4: an alias (*x) is not used here; write the value out"),
        (b"- 1", "f.yaml:1:1: expected keys and values (`key: value`), got something else or nothing"),
        (b"", "f.yaml:1:1: expected keys and values (`key: value`), got something else or nothing"),
        (b"a: \xff", "f.yaml:1:1: not UTF-8 text (byte 3); save the file as UTF-8"),
        (b"a: [" * 60, "f.yaml:1:81: nested deeper than 40 levels; no file of this kind needs that"),
        (b"a: 1\n---\nb: 2", "f.yaml:2:1: but found another document"),
        (b"a: [1, 2", "f.yaml:1:9: expected ',' or ']', but got '<stream end>'"),
    ],
)
def test_text_that_is_no_file_of_ours(text: bytes, line: str) -> None:
    assert problems(text) == [line]


@given(st.binary(max_size=200))
def test_any_bytes_give_a_document_or_one_clear_refusal(data: bytes) -> None:
    try:
        validate(read_yaml(data, "f.yaml"), Outer)
    except InputError as error:
        assert all(line.startswith("f.yaml:") for line in error.lines)  # noqa: PT017 - not raising is fine as well


# Files -------------------------------------------------------------------------------------------------------------


def test_outputs_that_would_change_are_refused_and_identical_ones_are_not(tmp_path: Path) -> None:
    out = tmp_path / "out"
    write_files(out, {"a": b"1", "b": b"2"})
    write_files(out, {"a": b"1", "b": b"2"})
    with pytest.raises(InputError) as refused:
        write_files(out, {"a": b"1", "b": b"3", "c": b"4"})
    assert refused.value.lines == (f"{out}/b: exists and would change; name another place or say --force",)
    assert sorted(p.name for p in out.iterdir()) == ["a", "b"]
    write_files(out, {"b": b"3"}, force=True)
    assert (out / "b").read_bytes() == b"3"


@pytest.mark.parametrize("fail_at", range(4))
def test_a_disk_that_fills_up_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, fail_at: int) -> None:
    calls = iter(range(100))

    def full(handle: int) -> None:  # noqa: ARG001 - os.fsync's face
        if next(calls) == fail_at:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(files.os, "fsync", full)
    with pytest.raises(InputError, match=r"cannot be written \(No space left on device\); nothing was left there"):
        write_files(tmp_path / "new" / "deep", dict.fromkeys("abcd", b"x"))
    assert list(tmp_path.iterdir()) == []


def test_a_stream_that_breaks_leaves_nothing_and_the_old_file_stands(tmp_path: Path) -> None:
    target = tmp_path / "field.tsv"
    stream_file(target, [b"one", b"two"])
    with pytest.raises(InputError, match="would change"):
        stream_file(target, [b"other"])

    def broken() -> object:
        yield b"part"
        raise OSError(errno.EIO, "Input/output error")

    with pytest.raises(InputError, match="Input/output error"):
        stream_file(target, broken(), force=True)  # type: ignore[arg-type]
    assert target.read_bytes() == b"onetwo"
    assert [p.name for p in tmp_path.iterdir()] == ["field.tsv"]


def test_inputs_are_read_once(tmp_path: Path) -> None:
    (tmp_path / "a").write_bytes(b"1")
    inputs = Inputs()
    inputs.open("a", tmp_path / "protocol.yaml")
    (tmp_path / "a").write_bytes(b"2")
    assert inputs.open("a", tmp_path / "protocol.yaml")[1] == b"1"
    with pytest.raises(InputError, match="the plan holds no copy of this file"):
        Inputs(frozen={}).open("a", tmp_path / "protocol.yaml")


# Tables ------------------------------------------------------------------------------------------------------------


@given(st.lists(st.floats(allow_nan=False, allow_infinity=False), min_size=1, max_size=20))
def test_numbers_keep_all_their_digits(values: list[float]) -> None:
    from coilwright.geometry.tables import column_texts

    data = to_tsv({"x": column_texts(np.array(values))})
    np.testing.assert_array_equal(floats(read_tsv(data, "t", ["x"])["x"], "t", "x"), np.array(values))


def test_tables_refuse_what_would_break_them() -> None:
    with pytest.raises(InputError, match="the column 'b' is missing; expected a b"):
        read_tsv(b"a\tc\n", "t.tsv", ["a", "b"])
    with pytest.raises(InputError, match="unknown column 'c'"):
        read_tsv(b"a\tb\tc\n", "t.tsv", ["a", "b"], exact=True)
    with pytest.raises(InputError, match="'a' stands there twice"):
        read_tsv(b"a\ta\n", "t.tsv", ["a"])
    with pytest.raises(InputError, match=r"t.tsv:3:1: expected 2 cells split by tabs, got 1"):
        read_tsv(b"a\tb\n1\t2\n3\n", "t.tsv", ["a"])
    with pytest.raises(InputError, match=r"t.tsv:3: a: expected a finite number, got 'inf'"):
        floats(["1", "inf"], "t.tsv", "a")
    with pytest.raises(InputError, match=r"t.tsv:2: a: expected a number, got 'n/a'"):
        floats(["n/a"], "t.tsv", "a")
    assert np.isnan(floats(["n/a"], "t.tsv", "a", missing=True)[0])


def test_target_tables_take_directions_as_protocols_write_them() -> None:
    rows = ["midline_deg: 45", "{midline_deg: 45}", "45", "vector: [0.7, 0.7, 0]", '{"vector": [0.7, 0.7, 0]}']
    text = "name\tx_mm\ty_mm\tz_mm\tdirection\n" + "".join(f"t{i}\t1\t2\t3\t{r}\n" for i, r in enumerate(rows))
    targets, wheres = read_target_table(text.encode(), "t.tsv")
    assert [t.direction.midline_deg for t in targets[:3]] == [45.0] * 3
    assert targets[3].direction == targets[4].direction
    assert wheres[4] == "t.tsv:6:1"
    bad = text + "t9\t1\t2\t3\tforwards\n" + "t10\t1\tx\t3\t45\n"
    with pytest.raises(InputError, match=r"t.tsv:8: y_mm: expected a number, got 'x'"):
        read_target_table(bad.encode(), "t.tsv")
    with pytest.raises(InputError, match=r"t.tsv:7:1: direction: expected keys and values, got the text 'forwards'"):
        read_target_table(bad.replace("\tx\t", "\t2\t").encode(), "t.tsv")


# Draws -------------------------------------------------------------------------------------------------------------


@given(st.integers(1, 2**31 - 1), st.integers(0, 2**40))
def test_draws_below_a_bound_are_the_high_half_of_the_product(bound: int, seed: int) -> None:
    words = [int(w) for w in Draws(seed, "order").words(50)]
    assert Draws(seed, "order").below(bound, 50).tolist() == [w * bound >> 64 for w in words]


def test_shuffles_are_uniform_over_all_orders_of_five() -> None:
    from scipy.stats import chisquare

    counts: dict[tuple[int, ...], int] = {}
    draws = Draws(20261201, "order")
    for _ in range(24_000):
        order = tuple(draws.shuffled(5).tolist())
        counts[order] = counts.get(order, 0) + 1
    assert len(counts) == 120
    assert chisquare(list(counts.values())).pvalue > 1e-3


def test_purposes_are_independent_streams() -> None:
    assert Draws(1, "order").words(1)[0] != Draws(1, "interval").words(1)[0]
    with pytest.raises(InputError, match="expected zero or more"):
        Draws(-1, "order")


def test_region_points_are_uniform_by_area_whatever_the_mesh() -> None:
    # A cap of a ball: the height of a uniform point is uniform (Archimedes). One half of the mesh is refined, so that
    # draws by triangle or by vertex would crowd there.
    ball = sphere_surface(90.0, subdivisions=3)
    import trimesh

    fine = trimesh.Trimesh(ball.vertices, ball.faces, process=False)
    half = np.flatnonzero(fine.triangles_center[:, 0] > 0)
    for _ in range(2):
        half = np.flatnonzero(fine.triangles_center[:, 0] > 0)
        fine = fine.subdivide(half)
    mesh = Surface(fine.vertices, fine.faces)
    where = patch(mesh, np.array([0, 0, 95.0]), 40.0)
    points = random_scalp_points(mesh, where, 4000, Draws(3, "region"))
    assert np.linalg.norm(points - where.centre, axis=1).max() <= 40.0
    height = points[:, 2] / np.linalg.norm(points, axis=1)
    lowest = 1 - 40.0**2 / (2 * 90.0**2)
    assert kstest((height - lowest) / (1 - lowest), "uniform").pvalue > 1e-3
    share = (points[:, 0] > 0).mean()
    assert abs(share - 0.5) < 4 * 0.5 / np.sqrt(4000)
    assert len(half) > 0


def test_a_region_without_scalp_is_refused() -> None:
    with pytest.raises(InputError, match=r"the region holds no scalp: the nearest is 110\.0 mm"):
        patch(sphere_surface(90.0, subdivisions=3), np.array([0, 0, 200.0]), 25.0)
