"""The same protocol and seed give the same schedule bytes under other Pythons and other NumPy versions."""

from __future__ import annotations

import os
import subprocess
from pathlib import Path

import pytest

from tests.conftest import Cli


@pytest.mark.tools
def test_the_demo_schedule_has_the_same_bytes_everywhere(cli: Cli, tmp_path: Path) -> None:
    interpreters = [p for p in os.environ.get("COILWRIGHT_INTERPRETERS", "").split(os.pathsep) if p]
    if not interpreters:
        pytest.skip("tool: other interpreters with coilwright installed (COILWRIGHT_INTERPRETERS, set by .ci/run)")
    assert cli("demo", tmp_path / "here").code == 0
    expected = (tmp_path / "here" / "plan" / "schedule.tsv").read_bytes()
    for i, python in enumerate(interpreters):
        command = [python, "-c", "from coilwright.runner.cli import main; main()", "demo", str(tmp_path / f"{i}")]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
        assert done.returncode == 0, done.stderr
        assert (tmp_path / f"{i}" / "plan" / "schedule.tsv").read_bytes() == expected
