"""Holes that a reviewer found by trying, each closed and held closed."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import trimesh
import yaml
from coilwright.geometry.surface import sphere_surface

from tests.conftest import PROTOCOL, Cli, Study

COIL = Path(__file__).parents[2] / "protocols" / "coils" / "figure8-generic.yaml"
TABLE = "name\tx_mm\ty_mm\tz_mm\tdirection\n"


@pytest.mark.parametrize(
    ("cell", "message"),
    [
        ("045", "045 is an octal number to YAML"),
        ("midline_deg: 1:30", "1:30 is a base-60 number to YAML"),
        ("{midline_deg: 45, midline_deg: 90}", "this key stands here twice"),
        ("vector: [010, 1, 0]", "010 is an octal number to YAML"),
        (".nan", "expected a finite number, got .nan"),
        ("2020-13-45", "expected keys and values"),
        ("&a [*a]", "an alias (*a) is not used here"),
        ("midline_deg: 4_5", "take out the underscore"),
    ],
)
def test_a_direction_in_a_table_is_read_as_strictly_as_in_a_protocol(
    study: Study, cli: Cli, cell: str, message: str
) -> None:
    (study.folder / "t.tsv").write_text(TABLE + f"a\t0\t0\t60\t{cell}\n")
    study.write({"targets": "t.tsv"})
    done = cli("targets", study.protocol)
    assert done.code == 2
    assert message in done.errors[0]
    assert done.errors[0].startswith(f"{study.folder}/t.tsv:2:")


@pytest.mark.parametrize("number", ["6_0", " 60", "६०", "0x3c", "1e999"])
def test_numbers_in_tables_are_plain(study: Study, cli: Cli, number: str) -> None:
    (study.folder / "t.tsv").write_text(TABLE + f"a\t0\t0\t{number}\t45\n")
    study.write({"targets": "t.tsv"})
    assert "z_mm: expected a" in cli("place", study.protocol, "-o", study.folder / "o").errors[0]


def test_an_empty_table_holds_no_target(study: Study, cli: Cli) -> None:
    (study.folder / "t.tsv").write_text(TABLE)
    study.write({"targets": "t.tsv"})
    assert cli("dry-run", study.protocol).errors == [f"{study.folder}/t.tsv:2:1: holds no target"]


def test_an_active_threshold_above_the_resting_one_is_a_mistake(study: Study, cli: Cli) -> None:
    both = [
        {"output_percent": 46, "kind": "resting", "method": "emg"},
        {"output_percent": 60, "kind": "active", "method": "emg"},
    ]
    study.write({"threshold": both})
    assert "the active threshold 60 is above the resting one 46" in cli("dry-run", study.protocol).errors[0]
    for wrong in (0.0001, 49.9996):
        study.write({"threshold": [both[0] | {"output_percent": wrong}]})
        assert cli("dry-run", study.protocol).code == 2


@pytest.mark.parametrize("spoil", ["reversed", "turned", "centred"])
def test_windings_that_do_not_point_along_x_are_refused(study: Study, cli: Cli, spoil: str) -> None:
    coil = yaml.safe_load(COIL.read_text())
    for winding in coil["windings"]:
        spiral = winding["spiral"]
        if spoil == "reversed":
            spiral["sense"] *= -1
        elif spoil == "turned":
            x, y, z = spiral["centre_mm"]
            spiral["centre_mm"] = [y, x, z]
    if spoil == "centred":
        coil["windings"] = [{"spiral": coil["windings"][0]["spiral"] | {"centre_mm": [0, 0, -7]}}]
    (study.folder / "coil.yaml").write_text(yaml.safe_dump(coil))
    study.write({"coil": "coil.yaml"})
    line = cli("place", study.protocol, "-o", study.folder / "o").errors[0]
    wanted = {
        "reversed": "180 degrees off +x",
        "turned": "90 degrees off +x",
        "centred": "hardly a field below the origin",
    }
    assert wanted[spoil] in line


def test_a_ledger_that_is_not_there_is_said(study: Study, cli: Cli) -> None:
    day = next(
        c for c in json.loads(cli("dry-run", study.protocol, "--json").out)["checks"] if c["rule"] == "day_pulses"
    )
    assert day["verdict"] == "within"
    assert day["note"] == (
        f"no earlier pulses counted: the folder {study.folder.resolve()}/ledger does not exist (the first run makes it)"
    )


def theta(starts_s: list[float], bursts: int) -> str:
    rows, pulse = [], 0
    for train, start in enumerate(starts_s, 1):
        for burst in range(bursts):
            for k in range(3):
                pulse += 1
                onset = f"{start + burst * 0.2 + k * 0.02:.6f}"
                rows.append(f"{pulse}\t{onset}\tindex\t40\t80\tactive\t{train}")
    return "pulse\tonset_s\tpose\toutput_percent\tthreshold_percent\tkind\ttrain\n" + "\n".join(rows) + "\n"


@pytest.mark.parametrize(
    ("pattern", "every", "code"),
    [("intermittent_theta_burst", 10.0, 0), ("intermittent_theta_burst", 7.0, 10), ("continuous_theta_burst", 7.0, 10)],
)
def test_theta_burst_trains_come_no_sooner_than_described(
    study: Study, cli: Cli, pattern: str, every: float, code: int
) -> None:
    study.write(
        {
            "threshold": {"output_percent": 50, "kind": "active", "method": "emg"},
            "pulses": {"threshold_percent": [80], "pattern": pattern},
        }
    )
    by_hand = study.folder / "s.tsv"
    by_hand.write_text(theta([i * every for i in range(20)], 10))
    assert cli("dry-run", study.protocol, "--schedule", by_hand).code == code


def test_an_approval_of_intensity_does_not_excuse_the_rhythm(study: Study, cli: Cli) -> None:
    approval = {"rule": "theta_burst", "pattern": "intermittent_theta_burst", "threshold_percent": 90, "up_to": 1200}
    signed = {"reference": "EC 1", "approved_by": "physician", "until": "2099-12-31"}
    study.write(
        {
            "threshold": {"output_percent": 50, "kind": "active", "method": "emg"},
            "pulses": {"threshold_percent": [80], "pattern": "intermittent_theta_burst"},
        },
        {"approvals": [approval | signed]},
    )
    by_hand = study.folder / "s.tsv"
    for every, code in ((10.0, 0), (7.0, 10)):
        by_hand.write_text(theta([i * every for i in range(20)], 10))
        assert cli("dry-run", study.protocol, "--schedule", by_hand).code == code


def test_a_plan_that_records_no_hashes_is_no_plan(study: Study, cli: Cli) -> None:
    plan = study.folder / "plan"
    cli("schedule", study.protocol, "-o", plan)
    content = json.loads((plan / "plan.json").read_text())
    (plan / "plan.json").write_text(json.dumps(content | {"files": {}}))
    assert "records no hash of poses.tsv, poses.json, schedule.tsv" in cli("dry-run", plan).errors[0]


def test_the_record_of_a_plan_stands_for_its_folder(study: Study, cli: Cli) -> None:
    cli("schedule", study.protocol, "-o", study.folder / "plan")
    assert cli("dry-run", study.folder / "plan" / "plan.json").code == 0


@pytest.mark.parametrize("command", ["limits", "dry-run protocol.yaml"])
def test_a_reader_that_goes_away_gives_no_fault_and_no_verdict(study: Study, command: str) -> None:
    code = "from coilwright.runner.cli import main; main()"
    shell = f'"{sys.executable}" -c "{code}" {command} | true; echo ${{PIPESTATUS[0]}}'
    done = subprocess.run(["bash", "-c", shell], cwd=study.folder, capture_output=True, text=True, check=False)
    assert done.stdout.strip() in ("0", "130")  # 0 where it was quicker than the reader
    assert done.stderr == ""


@pytest.mark.parametrize("text", ["<<: {foo: 1}", "title: !!int x", "title: 6_0", "coilwright: true"])
def test_odd_yaml_is_one_clear_line(study: Study, cli: Cli, text: str) -> None:
    key = text.split(":", maxsplit=1)[0]
    kept = [line for line in study.protocol.read_text().splitlines() if not line.startswith(f"{key}:")]
    study.protocol.write_text("\n".join([text, *kept]) + "\n")
    done = cli("dry-run", study.protocol)
    assert done.code == 2
    assert done.errors[0].startswith(f"{study.protocol}:1:")


@pytest.mark.parametrize("entry", [int("9" * 400), "1", True])
def test_matrices_hold_plain_numbers(study: Study, cli: Cli, entry: Any) -> None:
    cli("place", study.protocol, "-o", study.folder / "o")
    content = json.loads((study.folder / "o" / "matrices.json").read_text())
    content["head_from_coil"]["index"][0][0] = entry
    (study.folder / "m.json").write_text(json.dumps(content))
    done = cli("import", study.folder / "m.json", "--from", "matrices", "-o", study.folder / "back.tsv")
    assert done.code == 2
    assert len(done.errors) == 1


def test_files_that_are_no_files(study: Study, cli: Cli) -> None:
    os.mkfifo(study.folder / "pipe.ply")
    study.write({"head.scalp": "pipe.ply"})
    assert "expected a file, got a folder or a device" in cli("dry-run", study.protocol).errors[0]


@pytest.mark.parametrize("change", [{"turns": 1.0e300}, {"centre_mm": [0, 1.0e200, -7]}])
def test_sizes_beyond_any_coil(study: Study, cli: Cli, change: dict[str, Any]) -> None:
    coil = yaml.safe_load(COIL.read_text())
    coil["windings"][0]["spiral"] |= change
    (study.folder / "coil.yaml").write_text(yaml.safe_dump(coil))
    study.write({"coil": "coil.yaml"})
    assert cli("place", study.protocol, "-o", study.folder / "o").code == 2


def test_faces_that_wind_against_each_other_are_named(study: Study, cli: Cli) -> None:
    ball = sphere_surface(90.0, subdivisions=3)
    faces = np.where(np.arange(len(ball.faces))[:, None] % 2, ball.faces, ball.faces[:, ::-1])
    (study.folder / "mix.ply").write_bytes(trimesh.Trimesh(ball.vertices, faces, process=False).export(file_type="ply"))
    study.write({"head.scalp": "mix.ply"})
    assert "edges join faces that wind against each other" in cli("dry-run", study.protocol).errors[0]


def test_damaged_stl_is_called_damaged(study: Study, cli: Cli) -> None:
    (study.folder / "x.stl").write_bytes(bytes(range(256)) * 3)
    study.write({"head.scalp": "x.stl"})
    done = cli("dry-run", study.protocol)
    assert done.code == 2
    assert "x.stl: " in done.errors[0]
    assert "module" not in done.errors[0]


def test_a_sphere_whose_centre_is_outside_the_head(study: Study, cli: Cli) -> None:
    study.write({"head.sphere": {"centre_mm": [0, 0, 200], "radius_mm": 200}, "placement": {"aim": "over_target"}})
    assert "its centre lies -110 mm inside the scalp, expected at least 30" in cli("dry-run", study.protocol).errors[0]


def test_messages_of_late_refusals_carry_their_place(study: Study, cli: Cli) -> None:
    study.write({"pulses.threshold_percent": [1]})
    assert (
        cli("dry-run", study.protocol).errors[0].startswith(f"{study.protocol}:28:1: pulses: an intensity rounds down")
    )
    study.write({"pulses.interval_s": 5.0000001})
    assert "pulses.interval_s: at most 6 decimals (microseconds)" in cli("dry-run", study.protocol).errors[0]
    study.write({"region": {"centre_mm": [0, 90, 0], "radius_mm": 30, "poses": 5, "seed": 1}, "targets": None})
    assert (
        "random poses cannot stand: the scalp there faces within 30 degrees" in cli("dry-run", study.protocol).errors[0]
    )


def test_commands_that_are_planned_say_so(cli: Cli) -> None:
    assert "'run' is not in this version yet" in cli("run", "plan").err


def test_a_dangling_link_is_not_replaced(study: Study, cli: Cli) -> None:
    (study.folder / "o").mkdir()
    (study.folder / "o" / "poses.tsv").symlink_to(study.folder / "elsewhere")
    assert "exists and would change" in cli("place", study.protocol, "-o", study.folder / "o").errors[0]
    assert PROTOCOL["title"] == "Two fingers"
