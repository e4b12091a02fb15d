"""Style and types of the whole tree, by the tools and settings named in pyproject.toml."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

TOP = Path(__file__).parents[1]


def run(*command: str) -> str:
    """Run a Python tool on the tree; its output if it complains, nothing if it is content."""
    done = subprocess.run([sys.executable, "-m", *command], cwd=TOP, capture_output=True, text=True, check=False)
    return "" if done.returncode == 0 else done.stdout + done.stderr


@pytest.mark.slow
def test_ruff_finds_nothing() -> None:
    """Names, imports, docstrings, unused code, prints outside commands, swallowed errors."""
    assert run("ruff", "check", ".") == ""


@pytest.mark.slow
def test_the_code_is_formatted() -> None:
    """One layout for all, so that a change shows nothing but the change."""
    assert run("ruff", "format", "--check", ".") == ""


@pytest.mark.slow
def test_the_types_hold() -> None:
    """Strict: every public and private function says what it takes and gives."""
    assert run("mypy") == ""
