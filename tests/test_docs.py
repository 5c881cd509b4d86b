"""What the docs say is what the program does: the tutorial runs, the README's numbers are the demo's."""

from __future__ import annotations

import re
import shlex
from pathlib import Path

import pytest

from tests.conftest import Cli

DOCS = Path(__file__).resolve().parent.parent / "docs"
README = DOCS.parent / "README.md"


def blocks(path: Path, language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", path.read_text(), flags=re.DOTALL)


def test_the_tutorial_runs(cli: Cli, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    pytest.importorskip("mne")
    pytest.importorskip("nilearn")
    monkeypatch.chdir(tmp_path)
    for code in blocks(DOCS / "first-session.md", "python"):
        exec(compile(code, "first-session.md", "exec"), {})  # noqa: S102 - the tutorial's own code
    for line in blocks(DOCS / "first-session.md", "sh")[0].splitlines():
        assert cli(*shlex.split(line)[1:]).code == 0, line
    assert "worked example" in (tmp_path / "average-head" / "rig.json.receipt.txt").read_text()


def test_the_readme_shows_what_the_demo_prints(cli: Cli, tmp_path: Path) -> None:
    printed = cli("demo", tmp_path / "demo").out
    for line in blocks(README, "text")[0].splitlines():
        assert line in printed


def test_the_readmes_own_session_runs(cli: Cli, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    lines = [line for block in blocks(README, "sh") for line in block.splitlines() if line.startswith("coilwright")]
    assert len(lines) == 5
    for line in lines:
        assert cli(*shlex.split(line, comments=True)[1:]).code == 0, line


@pytest.mark.parametrize("page", [README, *sorted(DOCS.glob("*.md"))], ids=lambda p: p.name)
def test_links_between_pages_lead_somewhere(page: Path) -> None:
    for link in re.findall(r"\]\(([^)#:]+)\)", page.read_text()):
        assert (page.parent / link).exists(), link
