"""The public names, and which way imports run."""

import subprocess
import sys
from pathlib import Path

import pytest

import printmetrics

BIN = Path(sys.executable).parent
CONFIG = Path(__file__).parents[1] / "pyproject.toml"


@pytest.mark.parametrize("name", printmetrics.__all__)
def test_every_public_name_is_there(name: str) -> None:
    assert getattr(printmetrics, name) is not None


def test_an_unknown_name_is_an_attribute_error() -> None:
    with pytest.raises(AttributeError, match="'printmetrics' has no attribute 'load_recipes'"):
        _ = printmetrics.load_recipes


def test_importing_the_package_imports_nothing_heavy() -> None:
    code = "import sys, printmetrics; print(*sys.modules)"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert not set(done.stdout.split()) & {"numpy", "scipy", "cv2", "pydantic", "click"}


# Guards the guard: in a copy with one import upwards the linter must complain.
def test_a_wrong_import_would_be_seen(tmp_path: Path) -> None:
    package = tmp_path / "printmetrics"
    for path in Path(printmetrics.__path__[0]).rglob("*.py"):
        copy = package / path.relative_to(printmetrics.__path__[0])
        copy.parent.mkdir(parents=True, exist_ok=True)
        copy.write_bytes(path.read_bytes())
    flags = package / "flags.py"
    flags.write_text(flags.read_text() + "\nfrom printmetrics.recipe import load_recipe\n")
    done = subprocess.run(
        [BIN / "lint-imports", "--config", CONFIG, "--no-cache"],
        capture_output=True, text=True, check=False, cwd=tmp_path, env={"PYTHONPATH": str(tmp_path)},
    )  # fmt: skip
    assert done.returncode == 1
    assert "printmetrics.flags -> printmetrics.recipe" in done.stdout
