"""The code's own habits: checked by the tools that know them."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parent.parent


@pytest.mark.parametrize(
    "words",
    [["ruff", "check", "."], ["ruff", "format", "--check", "."], ["mypy"]],
    ids=" ".join,
)
def test_the_checkers_are_content(words):
    done = subprocess.run([sys.executable, "-m", *words], cwd=ROOT, capture_output=True, encoding="utf-8")
    assert done.returncode == 0, done.stdout + done.stderr


def test_files_are_short():
    lengths = {path.name: len(path.read_text("utf-8").splitlines()) for path in (ROOT / "patternscore").rglob("*.py")}
    assert {name: length for name, length in lengths.items() if length > 400} == {}
