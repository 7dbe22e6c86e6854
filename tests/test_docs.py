"""What the documents promise: set-up commands, terms, examples that run."""

from __future__ import annotations

import runpy
import sys
from pathlib import Path

import pytest

from caval import cli
from caval.vocabulary import WAVES

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
EXAMPLES = sorted((ROOT / "examples").glob("[0-9]*.py"))


def command(name: str) -> str:
    """The line below ``# name`` in the README: what a fresh machine is told to run."""
    lines = README.splitlines()
    return lines[lines.index(f"# {name}") + 1]


def test_each_set_up_command_does_everything_by_itself() -> None:
    for name, end in (("demo", "caval demo"), ("tests", "python -m pytest")):
        line = command(name)
        assert line.startswith("python3 -m venv .venv && .venv/bin/pip install")
        assert line.endswith(f".venv/bin/{end}")


def test_the_check_runs_the_readmes_own_command() -> None:
    assert "/^# tests$/" in (ROOT / ".ci" / "run").read_text(encoding="utf-8")


def test_readme_has_every_mark_command_and_the_caution() -> None:
    for wave in WAVES:
        assert f"\n| {wave} | " in README
    for name in ("mark", "look", "convert", "simulate", "demo", "stages"):
        assert f"caval {name}" in README
        assert name in {c.name or c.callback.__name__ for c in cli.app.registered_commands if c.callback}
    assert "not a medical device" in README
    assert "Local protocols and licensed practice come first" in README


@pytest.mark.parametrize("path", EXAMPLES, ids=lambda p: p.stem)
def test_an_example_ends_in_a_picture_or_a_file(path: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(sys, "argv", [path.name, "made"])
    runpy.run_path(str(path), run_name="__main__")
    assert list((tmp_path / "made").glob("*.png"))
