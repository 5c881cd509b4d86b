"""The command line as people use it: four exit codes, bad input in one clear line each, nothing half-written."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import trimesh
import yaml
from coilwright.geometry.surface import sphere_surface

from tests.conftest import PROTOCOL, Cli, Study, changed

HEAT = {"start_c": 22, "rise_per_full_pulse_c": 0.02, "cooling_s": 900}


# Exit codes of the dry run: 0, 2, 10, 11 ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("protocol", "lab", "code", "verdict"),
    [
        ({}, {}, 0, "within_checked_limits"),
        ({}, {"highest_output_percent": 49}, 10, "exceeded"),
        ({}, {"highest_output_percent": None}, 11, "incomplete"),
        ({"limits": None}, {}, 11, "incomplete"),
        ({"standoff_mm": -1}, {}, 2, None),
    ],
)
def test_dry_run_exit_codes(study: Study, cli: Cli, protocol: Any, lab: Any, code: int, verdict: str | None) -> None:
    study.write(protocol, lab)
    done = cli("dry-run", study.protocol, "--json")
    assert done.code == code
    if verdict is None:
        assert done.out == ""
        assert done.errors == [f"{study.protocol}:8:1: standoff_mm: expected at least 0, got the number -1"]
        return
    content = json.loads(done.out)
    assert content["verdict"] == verdict
    assert content["totals"] == {"pulses": 6, "duration_s": content["totals"]["duration_s"], "poses": 2}
    keys = {"rule", "verdict", "limit", "worst", "margin", "unit", "pulse", "source", "from_memory", "approval"}
    assert all(keys <= set(check) for check in content["checks"])
    assert len(content["not_checked"]) >= 5


def test_dry_run_for_people_fits_80_columns_and_carries_the_cautions(study: Study, cli: Cli) -> None:
    done = cli("dry-run", study.protocol)
    assert max(map(len, done.out.splitlines())) <= 80
    assert "the user's institution decides" in " ".join(done.out.split())
    assert "safe " not in done.out.replace("safety", "")
    assert done.out.splitlines()[-1] == "verdict: within the checked limits"


# From a protocol to an export, from another folder ------------------------------------------------------------------


@pytest.mark.usefixtures("study")
def test_the_whole_way(cli: Cli, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    import pandas as pd

    elsewhere = tmp_path / "elsewhere"
    elsewhere.mkdir()
    monkeypatch.chdir(elsewhere)
    assert cli("place", "../protocol.yaml", "-o", "poses").code == 0
    assert cli("schedule", "../protocol.yaml", "-o", "plan").code == 0
    assert cli("dry-run", "plan").code == 0
    assert cli("export", "plan/poses.tsv", "--to", "tsv", "-o", "out/rig.tsv").code == 0
    assert cli("export", "plan/poses.tsv", "--to", "matrices", "-o", "out/rig.matrices").code == 0
    columns = [
        "pose",
        "target",
        "x_mm",
        "y_mm",
        "z_mm",
        "qw",
        "qx",
        "qy",
        "qz",
        "scalp_mm",
        "clearance_mm",
        "target_depth_mm",
        "projection_deg",
        "direction_error_deg",
        "field_per_slope",
        "tilt_clear_deg",
        "reachable",
        "reason",
    ]
    for table, expected in (
        ("poses/poses.tsv", columns),
        ("plan/poses.tsv", columns),
        ("out/rig.tsv", columns),
        ("poses/tilt.tsv", ["pose", "azimuth_deg", "dips_towards_deg", "tilt_deg", "blocked_by"]),
        ("plan/schedule.tsv", ["pulse", "onset_s", "pose", "output_percent", "threshold_percent", "kind", "train"]),
    ):
        frame = pd.read_csv(table, sep="\t", na_values=["n/a"])
        assert list(frame.columns) == expected
        sidecar = json.loads(Path(table).with_suffix(".json").read_text())
        assert all(sidecar[column]["Description"] for column in expected)
    tilt = pd.read_csv("plan/tilt.tsv", sep="\t")
    poses = pd.read_csv("plan/poses.tsv", sep="\t", na_values=["n/a"])
    assert len(tilt) == 2 * 24
    assert (tilt["dips_towards_deg"] == (tilt["azimuth_deg"] + 90) % 360).all()
    smallest = tilt.groupby("pose")["tilt_deg"].min()
    assert poses.set_index("pose")["tilt_clear_deg"].to_dict() == smallest.to_dict()
    matrices = json.loads(Path("plan/matrices.json").read_text())
    assert (matrices["frame"], matrices["unit"]) == ("head", "mm")
    assert np.array(matrices["head_from_coil"]["index"]).shape == (4, 4)
    receipt = json.loads(Path("out/rig.tsv.receipt.json").read_text())
    tip = np.array(matrices["head_from_coil"]["index"]) @ [50, 0, 0, 1]
    np.testing.assert_allclose(
        receipt["worked_example"]["head_ras_mm"]["tip of +x (50 mm)"], tip[:3], rtol=0, atol=1e-9
    )
    assert "the user's institution decides" in Path("out/rig.tsv.receipt.txt").read_text()
    # and back: what comes back is what went out
    assert cli("import", "out/rig.matrices", "--from", "matrices", "-o", "back.tsv").code == 0
    assert cli("compare", "plan/poses.tsv", "back.tsv").code == 0
    refused = cli("export", "back.tsv", "--to", "tsv", "-o", "again.tsv")
    assert refused.code == 2
    assert "say --unchecked" in refused.err
    assert cli("export", "back.tsv", "--to", "tsv", "-o", "again.tsv", "--unchecked").code == 0


def test_same_plan_same_bytes_and_a_changed_one_is_refused(study: Study, cli: Cli, tmp_path: Path) -> None:
    plan = tmp_path / "plan"
    assert cli("schedule", study.protocol, "-o", plan).code == 0
    first = {p.relative_to(plan): p.read_bytes() for p in plan.rglob("*") if p.is_file()}
    assert cli("schedule", study.protocol, "-o", plan).code == 0
    assert {p.relative_to(plan): p.read_bytes() for p in plan.rglob("*") if p.is_file()} == first
    study.write({"order.seed": 8})
    refused = cli("schedule", study.protocol, "-o", plan)
    assert refused.code == 2
    assert f"{plan}/schedule.tsv: exists and would change; name another place or say --force" in refused.errors
    assert {p.relative_to(plan): p.read_bytes() for p in plan.rglob("*") if p.is_file()} == first
    assert cli("schedule", study.protocol, "-o", plan, "--force").code == 0


@pytest.mark.parametrize(
    "name", ["schedule.tsv", "poses.tsv", "inputs/protocol.yaml", "inputs/scalp.ply", "inputs/lab.yaml"]
)
def test_a_plan_changed_by_one_byte_is_refused(study: Study, cli: Cli, tmp_path: Path, name: str) -> None:
    plan = tmp_path / "plan"
    cli("schedule", study.protocol, "-o", plan)
    data = bytearray((plan / name).read_bytes())
    data[-2] ^= 1
    (plan / name).write_bytes(bytes(data))
    done = cli("dry-run", plan)
    assert done.code == 2
    assert done.errors[0].startswith(f"{plan / name}: changed since the plan was made")
    (plan / name).unlink()
    assert "the plan is not whole" in cli("dry-run", plan).errors[0]


def test_a_plan_stands_on_its_own(study: Study, cli: Cli, tmp_path: Path) -> None:
    plan = tmp_path / "plan"
    cli("schedule", study.protocol, "-o", plan)
    before = json.loads(cli("dry-run", plan, "--json").out)
    moved = tmp_path / "far" / "plan"
    shutil.move(plan, moved)
    for name in ("protocol.yaml", "scalp.ply", "lab.yaml"):
        (tmp_path / name).unlink()
    assert json.loads(cli("dry-run", moved, "--json").out) == before


def test_the_ledger_counts_in_a_dry_run(study: Study, cli: Cli, tmp_path: Path) -> None:
    import datetime as dt

    from coilwright.runner import ledger

    now = dt.datetime.now().astimezone()
    ledger.append(tmp_path / "ledger", "p01", ledger.Entry(now, 2999, "session"))
    content = json.loads(cli("dry-run", study.protocol, "--json").out)
    day = next(check for check in content["checks"] if check["rule"] == "day_pulses")
    assert (day["verdict"], day["worst"]) == ("exceeded", 3005)


def test_a_hand_written_schedule_is_checked_the_same_way(study: Study, cli: Cli, tmp_path: Path) -> None:
    header = "pulse\tonset_s\tpose\toutput_percent\tthreshold_percent\tkind\ttrain\n"
    by_hand = tmp_path / "by_hand.tsv"
    by_hand.write_text(header + "1\t0\tindex\t50\tn/a\tactive\tn/a\n2\t3.9\tvertex\t50\tn/a\tactive\tn/a\n")
    content = json.loads(cli("dry-run", study.protocol, "--schedule", by_hand, "--json").out)
    interval = next(check for check in content["checks"] if check["rule"] == "interval")
    assert (interval["verdict"], interval["worst"], interval["pulse"]) == ("exceeded", 3.9, 2)


# Bad input, each in one clear line ---------------------------------------------------------------------------------


def placed(study: Study, cli: Cli, changes: dict[str, Any], out: Path) -> list[str]:
    study.write(changes)
    done = cli("place", study.protocol, "-o", out)
    assert done.code == 2
    assert done.out == ""
    assert not out.exists()
    return [line.replace(f"{study.protocol}", "protocol.yaml").replace(f"{study.folder}/", "") for line in done.errors]


TARGET = {"name": "index", "at_mm": [-42.0, 0.0, 56.0], "direction": {"midline_deg": 45}}


def test_bad_input_is_one_line_each(study: Study, cli: Cli, tmp_path: Path) -> None:
    out = tmp_path / "out"
    assert placed(study, cli, {"head.scalp": "gone.ply"}, out) == [
        "protocol.yaml:5:3: head.scalp: gone.ply: no such file; paths are relative to the file that names them"
    ]
    assert placed(study, cli, {"targets": [TARGET | {"at_mm": [0, 0, 97]}]}, out)[0].startswith(
        "protocol.yaml:10:3: targets[0]: index: lies 7"
    )
    assert (
        "under the scalp, deeper than 60 mm"
        in placed(study, cli, {"targets": [TARGET | {"at_mm": [0, 0, 10]}]}, out)[0]
    )
    assert placed(study, cli, {"targets": [TARGET, TARGET]}, out) == [
        "protocol.yaml:17:3: targets[1].name: 'index' is the name of two targets; rename one"
    ]
    assert placed(study, cli, {"targets": [TARGET | {"direction": {"vector": [0, 0, 0]}}]}, out) == [
        "protocol.yaml:15:3: targets[0].direction: a vector of zero length has no direction; give one with a length"
    ]
    assert (
        "degrees out of the plane that touches the scalp"
        in placed(study, cli, {"targets": [TARGET | {"direction": {"vector": [-0.6, 0, 0.8]}}]}, out)[0]
    )
    region = {"centre_mm": [0, 0, 300], "radius_mm": 20, "poses": 3, "seed": 1}
    assert "region: the region holds no scalp: the nearest is 210" in placed(study, cli, {"region": region}, out)[0]
    assert "neither a built-in coil" in placed(study, cli, {"coil": "figure9"}, out)[0]
    assert (
        "head.sphere: sphere"
        not in placed(study, cli, {"head.sphere": {"centre_mm": [0, 0, 0], "radius_mm": 300}}, out)[0]
    )


def test_metres_declared_as_millimetres(study: Study, cli: Cli, tmp_path: Path) -> None:
    small = sphere_surface(0.09, subdivisions=3)
    (tmp_path / "small.ply").write_bytes(
        trimesh.Trimesh(small.vertices, small.faces, process=False).export(file_type="ply")
    )
    lines = placed(study, cli, {"head.scalp": "small.ply"}, tmp_path / "out")
    assert lines == [
        "protocol.yaml:5:3: head.scalp: small.ply: in the declared unit (mm) its largest side is 0.18 mm; expected a"
        " head of 100 to 450 mm; it would be a head in m: say `unit: m`"
    ]
    study.write({"head.scalp": "small.ply", "head.unit": "m"})
    assert cli("place", study.protocol, "-o", tmp_path / "out").code == 0


def test_every_trap_of_yaml_at_once(study: Study, cli: Cli) -> None:
    text = study.protocol.read_text()
    for old, new in (
        ("title: Two fingers", "title: yes"),
        ("standoff_mm: 6", "standoff_mm: 1e-5"),
        ("midline_deg: 45", "midline_deg: 1:30"),
        ("output_percent: 46", "output_percent: .nan"),
        ("seed: 7", "seed: 7\n  seed: 8"),
    ):
        assert old in text
        text = text.replace(old, new)
    study.protocol.write_text(text)
    done = cli("dry-run", study.protocol)
    assert done.code == 2
    places = [line.removeprefix(f"{study.protocol}:").split(": ")[1] for line in done.errors]
    assert places == [
        "title",
        "standoff_mm",
        "targets[0].direction.midline_deg",
        "threshold.output_percent",
        "order.seed",
    ]
    study.protocol.write_text(study.protocol.read_text().replace("  seed", "\tseed"))
    assert "a tab where YAML wants spaces" in cli("dry-run", study.protocol).errors[0]


def test_an_output_folder_that_holds_something_else(study: Study, cli: Cli, tmp_path: Path) -> None:
    out = tmp_path / "out"
    out.mkdir()
    (out / "poses.tsv").write_text("mine")
    done = cli("place", study.protocol, "-o", out)
    assert done.code == 2
    assert done.errors == [f"{out}/poses.tsv: exists and would change; name another place or say --force"]
    assert (out / "poses.tsv").read_text() == "mine"
    (tmp_path / "file").write_text("")
    assert "cannot be written" in cli("place", study.protocol, "-o", tmp_path / "file" / "out").errors[0]


def test_usage_errors_are_exit_2_with_a_suggestion(cli: Cli) -> None:
    done = cli("plce")
    assert done.code == 2
    assert "did you mean 'place'?" in done.err
    assert cli("place").code == 2


def test_not_a_plan(cli: Cli, tmp_path: Path) -> None:
    assert "not a plan (no plan.json in it)" in cli("dry-run", tmp_path).errors[0]
    (tmp_path / "plan.json").write_text("{")
    assert "not the record of a plan" in cli("dry-run", tmp_path).errors[0]
    (tmp_path / "plan.json").write_text('{"coilwright_plan": 9}')
    assert "a plan of version 9" in cli("dry-run", tmp_path).errors[0]
    (tmp_path / "plan.json").write_text(
        '{"coilwright_plan": 1, "files": {"../x": "0"}, "inputs": {}, "links": [], "protocol": "p.yaml"}'
    )
    assert "names a file outside the plan" in cli("dry-run", tmp_path).errors[0]


# Reach and the second phase ----------------------------------------------------------------------------------------


def test_a_pose_that_cannot_be_reached_stays_in_the_table_and_nowhere_else(
    study: Study, cli: Cli, tmp_path: Path
) -> None:
    study.write({"reach": {"keep_out": [{"name": "left ear", "centre_mm": [-100, 50, 40], "radius_mm": 20}]}})
    assert cli("schedule", study.protocol, "-o", tmp_path / "plan").code == 0
    rows = [line.split("\t") for line in (tmp_path / "plan" / "poses.tsv").read_text().splitlines()]
    assert [row[-2] for row in rows[1:]] == ["no", "yes"]
    assert "left ear entered by" in rows[1][-1]
    assert "index" not in (tmp_path / "plan" / "schedule.tsv").read_text()
    done = cli("export", tmp_path / "plan" / "poses.tsv", "--to", "matrices", "-o", tmp_path / "rig.json")
    assert "1 poses written, 1 left out because they cannot be reached" in done.out
    assert "left ear entered by" in (tmp_path / "rig.json.receipt.txt").read_text()
    check = next(
        c
        for c in json.loads(cli("dry-run", tmp_path / "plan", "--json").out)["checks"]
        if c["rule"] == "pose_reachable"
    )
    assert (check["verdict"], check["note"][:25]) == ("caution", "left out: 1 of 2 poses (i")


def test_nothing_to_reach_is_a_finding_and_no_plan(study: Study, cli: Cli, tmp_path: Path) -> None:
    study.write({"reach": {"keep_out": [{"name": "mask", "centre_mm": [0, 0, 0], "radius_mm": 120}]}})
    assert cli("dry-run", study.protocol).code == 10
    assert cli("schedule", study.protocol, "-o", tmp_path / "plan").code == 2
    assert not (tmp_path / "plan").exists()


def test_a_second_phase_coil_stands_turned_and_everything_says_so(study: Study, cli: Cli, tmp_path: Path) -> None:
    coil = yaml.safe_load((Path(__file__).parents[2] / "protocols/coils/figure8-generic.yaml").read_text())
    coil["waveform"] = {"kind": "biphasic", "effective_phase": "second"}
    (tmp_path / "coil.yaml").write_text(yaml.safe_dump(coil))
    cli("place", study.protocol, "-o", tmp_path / "first")
    study.write({"coil": "coil.yaml"})
    done = cli("place", study.protocol, "-o", tmp_path / "second")
    assert "turned by 180 degrees" in done.out
    m = [json.loads((tmp_path / d / "matrices.json").read_text()) for d in ("first", "second")]
    for name in ("index", "vertex"):
        a, b = (np.array(x["head_from_coil"][name]) for x in m)
        np.testing.assert_allclose(b[:3, :2], -a[:3, :2], rtol=0, atol=1e-12)
    assert m[1]["half_turn_for_second_phase"] is True
    assert json.loads((tmp_path / "second" / "poses.json").read_text())["Coil"]["half_turn_for_second_phase"] is True
    rows = [
        [dict(zip(t[0], r, strict=True)) for r in t[1:]]
        for t in (
            [line.split("\t") for line in (tmp_path / d / "poses.tsv").read_text().splitlines()]
            for d in ("first", "second")
        )
    ]
    # the wanted direction means the phase that stimulates: its field is the same for both
    for a, b in zip(*rows, strict=True):
        assert float(a["field_per_slope"]) > 0
        assert float(b["field_per_slope"]) == pytest.approx(float(a["field_per_slope"]), rel=0.02)
        assert float(b["direction_error_deg"]) < 5
    cli("export", tmp_path / "second" / "poses.tsv", "--to", "tsv", "-o", tmp_path / "rig.tsv")
    assert "turned by 180 degrees" in (tmp_path / "rig.tsv.receipt.txt").read_text()


# Small commands ----------------------------------------------------------------------------------------------------


def test_demo_and_init_work_in_a_new_folder(cli: Cli, tmp_path: Path) -> None:
    done = cli("demo", tmp_path / "demo")
    assert done.code == 0
    assert "cannot be reached: behind the ear: left ear entered by" in done.out
    assert "verdict: within the checked limits; smallest margin: " in done.out
    assert (tmp_path / "demo" / "plan" / "plan.json").exists()
    assert cli("demo", tmp_path / "demo").code == 0
    assert cli("init", tmp_path / "mine").code == 0
    assert cli("dry-run", tmp_path / "mine" / "protocol.yaml").code == 0
    (tmp_path / "mine" / "protocol.yaml").write_text("mine")
    assert cli("init", tmp_path / "mine").code == 2


def test_lists(cli: Cli, study: Study) -> None:
    assert json.loads(cli("coils", "--json").out)[0]["name"] == "figure8-generic"
    assert "generic" in cli("coils").out
    limits = cli("limits").out
    assert "from memory: verify it against the source" in " ".join(limits.split())
    assert ">1800" in limits
    assert json.loads(cli("limits", "--json").out)["train_rate"]["most"] == 25
    listed = json.loads(cli("targets", study.protocol, "--json").out)
    assert [t["side"] for t in listed] == ["left", "midline"]
    assert listed[0]["depth_mm"] == pytest.approx(20, abs=0.2)
    assert "left" in cli("targets", study.protocol).out


@pytest.mark.parametrize("kind", ["protocol", "lab", "coil"])
def test_schemas_in_docs_are_those_of_the_program(cli: Cli, kind: str) -> None:
    shown = json.loads(cli("schema", kind).out)
    kept = Path(__file__).parents[2] / "docs" / "schemas" / f"{kind}.json"
    assert json.loads(kept.read_text()) == shown


def test_schema_accepts_the_examples_and_refuses_an_unknown_key(cli: Cli, tmp_path: Path) -> None:
    import jsonschema

    protocols = Path(__file__).parents[2] / "protocols"
    for kind, names in {
        "protocol": ["demo/protocol.yaml", "template/protocol.yaml"],
        "lab": ["demo/lab.yaml", "template/lab.yaml"],
        "coil": ["coils/figure8-generic.yaml", "coils/round-generic.yaml", "template/coil.yaml"],
    }.items():
        schema = json.loads(cli("schema", kind).out)
        for name in names:
            value = yaml.safe_load((protocols / name).read_text())
            jsonschema.validate(value, schema)
            with pytest.raises(jsonschema.ValidationError):
                jsonschema.validate(value | {"colour": "red"}, schema)
    assert tmp_path.exists()


def test_compare_names_what_differs(study: Study, cli: Cli, tmp_path: Path) -> None:
    cli("place", study.protocol, "-o", tmp_path / "a")
    study.write({"targets": [*PROTOCOL["targets"][:1], TARGET | {"name": "other"}], "standoff_mm": 7})
    cli("place", study.protocol, "-o", tmp_path / "b")
    done = cli("compare", tmp_path / "a/poses.tsv", tmp_path / "b/poses.tsv", "--position-mm", 0.5, "--json")
    content = json.loads(done.out)
    assert done.code == 10
    assert content["beyond"] == ["index"]
    assert (content["only_first"], content["only_second"]) == (["vertex"], ["other"])
    assert content["poses"]["index"]["position_mm"] == pytest.approx(1.0, abs=0.05)
    assert cli("compare", tmp_path / "a/poses.tsv", tmp_path / "a/poses.tsv").code == 0
    study.write({"head.origin": "template"})
    cli("place", study.protocol, "-o", tmp_path / "c")
    assert "head frames of different origins" in cli("compare", tmp_path / "a/poses.tsv", tmp_path / "c/poses.tsv").err


def test_field_agrees_with_the_pose_table(study: Study, cli: Cli, tmp_path: Path) -> None:
    cli("place", study.protocol, "-o", tmp_path / "a")
    points = tmp_path / "points.tsv"
    points.write_text("point\tx_mm\ty_mm\tz_mm\nhand\t-42\t0\t56\ntop\t0\t0\t60\n")
    done = cli(
        "field", tmp_path / "a/poses.tsv", "--protocol", study.protocol, "--at", points, "-o", tmp_path / "f.tsv"
    )
    assert done.code == 0
    rows = [line.split("\t") for line in (tmp_path / "f.tsv").read_text().splitlines()]
    assert rows[0] == ["pose", "point", "ex", "ey", "ez"]
    e = {(r[0], r[1]): np.array(r[2:], dtype=float) for r in rows[1:]}
    poses = [line.split("\t") for line in (tmp_path / "a/poses.tsv").read_text().splitlines()]
    table = {r[0]: dict(zip(poses[0], r, strict=True)) for r in poses[1:]}
    # At the vertex the wanted direction is anterior, and the field agrees with it.
    assert e["vertex", "top"][1] == pytest.approx(float(table["vertex"]["field_per_slope"]), rel=1e-3)
    points.write_text("point\tx_mm\ty_mm\tz_mm\nout\t0\t0\t95\n")
    done = cli(
        "field", tmp_path / "a/poses.tsv", "--protocol", study.protocol, "--at", points, "-o", tmp_path / "g.tsv"
    )
    assert done.code == 2
    assert done.errors[0].startswith(f"{points}:2: out: lies outside the conducting sphere (95.0 mm")
    assert not (tmp_path / "g.tsv").exists()


def test_ctrl_c_is_130_and_leaves_nothing(study: Study, tmp_path: Path) -> None:
    region = {"centre_mm": [0, 0, 90], "radius_mm": 60, "poses": 20_000, "seed": 1}
    study.write({"region": region})
    code = "from coilwright.runner.cli import main; main()"
    process = subprocess.Popen(
        [sys.executable, "-c", code, "place", str(study.protocol), "-o", str(tmp_path / "out")],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        env=os.environ | {"PYTHONUNBUFFERED": "1"},
    )
    try:
        process.wait(timeout=4)
    except subprocess.TimeoutExpired:
        process.send_signal(signal.SIGINT)
    _, err = process.communicate(timeout=60)
    assert process.returncode == 130, err
    assert err.decode().strip().splitlines()[-1] == "interrupted"
    assert not (tmp_path / "out").exists()


def test_a_reader_that_goes_away_is_no_fault(study: Study) -> None:
    code = "from coilwright.runner.cli import main; main()"
    shell = f'"{sys.executable}" -c "{code}" limits | head -1'
    done = subprocess.run(["bash", "-c", shell], capture_output=True, text=True, check=False)
    assert "Traceback" not in done.stderr
    assert study.protocol.exists()


def test_outputs_of_different_protocols_do_not_mix(study: Study, cli: Cli, tmp_path: Path) -> None:
    assert changed(PROTOCOL, {"title": "x"})["title"] == "x"
    coil = yaml.safe_load((Path(__file__).parents[2] / "protocols/coils/figure8-generic.yaml").read_text())
    (tmp_path / "coil.yaml").write_text(yaml.safe_dump(coil | {"name": "other", "heat": HEAT}))
    cli("place", study.protocol, "-o", tmp_path / "a")
    study.write({"coil": "coil.yaml"})
    points = tmp_path / "points.tsv"
    points.write_text("point\tx_mm\ty_mm\tz_mm\nhand\t-42\t0\t56\n")
    done = cli(
        "field", tmp_path / "a/poses.tsv", "--protocol", study.protocol, "--at", points, "-o", tmp_path / "f.tsv"
    )
    assert "made for the coil figure8-generic, the protocol names other" in done.err


def test_a_protocol_that_only_places(study: Study, cli: Cli, tmp_path: Path) -> None:
    study.write({"pulses": None, "order": None, "gate": None, "threshold": None, "limits": None, "title": None})
    assert cli("place", study.protocol, "-o", tmp_path / "poses").code == 0
    for command in (["dry-run", study.protocol], ["schedule", study.protocol, "-o", tmp_path / "plan"]):
        assert cli(*command).errors == [
            f"{study.protocol}:1:1: pulses: missing; a schedule needs to know what is fired (placing does not)"
        ]


@pytest.mark.parametrize(
    ("gate", "message"),
    [
        ("some", "gate: expected one of 'none', got the text 'some'"),
        ({"position_mm": 2}, "gate.angle_deg: missing; this key is required"),
        (3, "gate: expected keys and values, got the number 3"),
    ],
)
def test_gates(study: Study, cli: Cli, gate: Any, message: str) -> None:
    study.write({"gate": gate})
    assert message in "\n".join(cli("dry-run", study.protocol).errors)
