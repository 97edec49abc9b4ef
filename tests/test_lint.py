"""The linters, so that one command checks everything."""

import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
BIN = Path(sys.executable).parent
SOURCES = sorted(str(path.relative_to(ROOT)) for path in (ROOT / "printmetrics").rglob("*.py"))


@pytest.mark.parametrize(
    "command",
    [
        ["ruff", "check", "."],
        ["ruff", "format", "--check", "."],
        ["mypy"],
        ["lint-imports"],
        ["numpydoc", "lint", *SOURCES],
    ],
    ids=["style", "format", "types", "imports", "docstrings"],
)
def test_linter_is_content(command: list[str]) -> None:
    tool, *arguments = command
    done = subprocess.run([BIN / tool, *arguments], cwd=ROOT, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout + done.stderr
