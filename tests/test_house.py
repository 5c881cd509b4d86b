"""The rules of the house that a machine can hold: rooms, imports, layout, examples in docstrings."""

from __future__ import annotations

import ast
import doctest
import importlib
import pkgutil
import subprocess
import sys
from pathlib import Path

import coilwright.geometry
import coilwright.runner
import numpy as np
import pytest

ROOT = Path(__file__).resolve().parent.parent
# What geometry's modules may import from exchange's side: the pose list and the plumbing, never another room.
EXCHANGE_MAY_IMPORT = {"errors", "frames", "pose_list", "tables"}


def module_files(room: str) -> list[Path]:
    return sorted((ROOT / room).rglob("*.py"))


def imports(path: Path) -> list[str]:
    """Absolute names of everything that a module imports."""
    package = ["coilwright", *path.relative_to(ROOT).parent.parts]
    found = []
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            found += [alias.name for alias in node.names]
        elif isinstance(node, ast.ImportFrom):
            base = package[: len(package) - node.level + 1] if node.level else []
            module = ".".join([*base, *([node.module] if node.module else [])])
            found += [f"{module}.{alias.name}" for alias in node.names]
    return found


@pytest.mark.parametrize("path", module_files("geometry"), ids=lambda p: p.name)
def test_geometry_never_imports_runner(path: Path) -> None:
    assert not [name for name in imports(path) if name.startswith("coilwright.runner")]


@pytest.mark.parametrize(
    "path", [p for room in ("geometry", "runner") for p in module_files(room)], ids=lambda p: p.name
)
def test_nothing_but_the_command_line_imports_the_command_line(path: Path) -> None:
    if path.parent.name != "cli":
        assert not [name for name in imports(path) if "coilwright.runner.cli" in name]


@pytest.mark.parametrize("path", module_files("geometry/exchange"), ids=lambda p: p.name)
def test_exchange_imports_frames_and_plumbing_only(path: Path) -> None:
    inside = [name.split(".") for name in imports(path) if name.startswith("coilwright.")]
    strangers = [".".join(name) for name in inside if name[2] != "exchange" and name[2] not in EXCHANGE_MAY_IMPORT]
    assert not strangers


@pytest.mark.parametrize(
    "path", [p for room in ("geometry", "runner") for p in module_files(room)], ids=lambda p: p.name
)
def test_imports_are_relative_inside_a_package_and_absolute_across(path: Path) -> None:
    room = path.relative_to(ROOT).parts[0]
    for node in ast.walk(ast.parse(path.read_text())):
        if not isinstance(node, ast.ImportFrom) or (room, path.parent.name) == ("runner", "cli"):
            continue
        if not node.level:
            assert not (node.module or "").startswith(f"coilwright.{room}"), ast.unparse(node)


def test_top_level_layout() -> None:
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False).stdout.split(
        "\n"
    )
    top = {name.split("/")[0] for name in listed if name}
    if not top:
        pytest.skip("not a git checkout")
    allowed = {
        "README.md",
        "DEVELOPERS.md",
        "LICENSE",
        "pyproject.toml",
        "runner",
        "geometry",
        "tests",
        "protocols",
        "docs",
    }
    assert {name for name in top if not name.startswith(".")} == allowed


def all_modules() -> list[str]:
    packages = (coilwright.geometry, coilwright.runner)
    return [m.name for p in packages for m in pkgutil.walk_packages(p.__path__, f"{p.__name__}.")]


@pytest.mark.parametrize("name", all_modules())
def test_examples_in_docstrings_run(name: str) -> None:
    module = importlib.import_module(name)
    result = doctest.testmod(module, extraglobs={"np": np}, optionflags=doctest.ELLIPSIS)
    assert result.failed == 0


def test_help_imports_nothing_heavy() -> None:
    code = (
        "import sys; sys.argv = ['coilwright', '--help']\n"
        "from coilwright.runner.cli import main\n"
        "try: main()\nexcept SystemExit: pass\n"
        "heavy = {'numpy', 'scipy', 'trimesh', 'nibabel', 'pydantic', 'yaml', 'rich', 'serial'} & set(sys.modules)\n"
        "assert not heavy, heavy\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    assert "dry-run" in done.stdout
