"""Fixtures: heads that nobody invented for these tests, protocols small enough to read, the command line in-process."""

from __future__ import annotations

import copy
import os
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import yaml
from coilwright.geometry.coil import Coil, load_coil
from coilwright.geometry.files import Inputs
from coilwright.geometry.surface import Surface, sphere_surface

# MNE writes a configuration file on import unless told where not to.
os.environ.setdefault("MNE_DONTWRITE_HOME", "true")


def mne_folder() -> Path:
    """Where MNE keeps the data that its package ships."""
    mne = pytest.importorskip("mne")
    return Path(mne.__file__).parent / "data" / "fsaverage"


def real_scalp_m() -> tuple[np.ndarray, np.ndarray]:
    """Vertices in metres and faces of the average scalp that MNE ships (fsaverage-head.fif)."""
    import mne

    surface = mne.read_bem_surfaces(mne_folder() / "fsaverage-head.fif", verbose="error")[0]
    return np.asarray(surface["rr"]), np.asarray(surface["tris"])


@pytest.fixture(scope="session")
def real_scalp() -> Surface:
    vertices, faces = real_scalp_m()
    return Surface(vertices * 1000, faces, "fsaverage scalp")


@pytest.fixture(scope="session")
def ball() -> Surface:
    """A sphere of 90 mm with facets small enough that its flatness costs 0.01 mm."""
    return sphere_surface(90.0, subdivisions=5)


@pytest.fixture(scope="session")
def figure8() -> Coil:
    return load_coil("figure8-generic", Inputs())


LAB: dict[str, Any] = {
    "coilwright_lab": 1,
    "lab": "Lantern Lane Lab",
    "highest_output_percent": 90,
    "shortest_interval_s": 4,
    "longest_session_min": 120,
    "pulses": {"session": 1500, "day": 3000, "week": 6000},
    "contact_temperature_c": {"caution": 39, "stop": 41},
    "ledger": "ledger",
    "sham": "none",
    "checklist": ["hearing protection worn by everyone in the room"],
}

PROTOCOL: dict[str, Any] = {
    "coilwright": 1,
    "title": "Two fingers",
    "person": "p01",
    "head": {"scalp": "scalp.ply", "origin": "scanner"},
    "coil": "figure8-generic",
    "standoff_mm": 6,
    "targets": [
        {"name": "index", "at_mm": [-42.0, 0.0, 56.0], "direction": {"midline_deg": 45}},
        {"name": "vertex", "at_mm": [0.0, 0.0, 60.0], "direction": {"midline_deg": 0}},
    ],
    "threshold": {"output_percent": 46, "kind": "resting", "method": "emg"},
    "pulses": {"threshold_percent": [110], "per_pose": 3, "interval_s": [5, 7]},
    "order": {"kind": "shuffled", "seed": 7},
    "gate": "none",
    "limits": "lab.yaml",
}


def changed(base: dict[str, Any], changes: dict[str, Any]) -> dict[str, Any]:
    """A copy with dotted keys changed; None takes a key out."""
    result = copy.deepcopy(base)
    for dotted, value in changes.items():
        *parents, key = dotted.split(".")
        inner = result
        for parent in parents:
            inner = inner.setdefault(parent, {})
        if value is None:
            inner.pop(key, None)
        else:
            inner[key] = value
    return result


class _Plain(yaml.SafeDumper):
    """Writes every value out: an alias is refused by the product, as it should be."""

    def ignore_aliases(self, data: Any) -> bool:  # noqa: ARG002 - PyYAML's face
        return True


@dataclass
class Study:
    """A folder with a scalp (a sphere of 90 mm), a protocol and a lab file."""

    folder: Path

    @property
    def protocol(self) -> Path:
        return self.folder / "protocol.yaml"

    def write(self, protocol: dict[str, Any] | None = None, lab: dict[str, Any] | None = None) -> Path:
        self.protocol.write_text(yaml.dump(changed(PROTOCOL, protocol or {}), Dumper=_Plain, sort_keys=False))
        (self.folder / "lab.yaml").write_text(yaml.dump(changed(LAB, lab or {}), Dumper=_Plain, sort_keys=False))
        return self.protocol


@pytest.fixture(scope="session")
def ball_ply() -> bytes:
    import trimesh

    mesh = sphere_surface(90.0, subdivisions=4)
    return bytes(trimesh.Trimesh(mesh.vertices, mesh.faces, process=False).export(file_type="ply"))


@pytest.fixture
def study(tmp_path: Path, ball_ply: bytes) -> Study:
    (tmp_path / "scalp.ply").write_bytes(ball_ply)
    made = Study(tmp_path)
    made.write()
    return made


@dataclass(frozen=True)
class Outcome:
    code: int
    out: str
    err: str

    @property
    def errors(self) -> list[str]:
        assert all(line.startswith("error: ") for line in self.err.splitlines()), self.err
        return [line.removeprefix("error: ") for line in self.err.splitlines()]


Cli = Callable[..., Outcome]


@pytest.fixture
def cli(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> Cli:
    """The command line in this process: exit code, standard output, standard error."""
    from coilwright.runner.cli import main

    def run(*args: object) -> Outcome:
        monkeypatch.setattr(sys, "argv", ["coilwright", *map(str, args)])
        capsys.readouterr()
        with pytest.raises(SystemExit) as stop:
            main()
        captured = capsys.readouterr()
        return Outcome(int(stop.value.code or 0), captured.out, captured.err)

    return run
