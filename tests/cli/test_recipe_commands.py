"""The recipe commands as a user types them."""

import json
import os
import re
import subprocess
import sys
import time
import tomllib
from pathlib import Path

import click
import cv2
import numpy as np
import pytest
from click.testing import CliRunner, Result

from printmetrics import __version__
from printmetrics.cli import main
from printmetrics.recipe import Recipe, load_recipe

RECIPE = """schema = 1
name = "bus lines"
version = "3"
layer = "M2"
[scale]
um_per_px = [0.5, 0.25]
u_um_per_px = 0
[[feature]]
name = "bus"
kind = "lines"
ink = "bright"
region = [10, 20, 300, 400]
[feature.limits]
width_mean = { lower = 18, upper = 22.5 }
open_count = { upper = 0 }
"""


@pytest.fixture
def recipe(tmp_path: Path) -> Path:
    path = tmp_path / "R.toml"
    path.write_text(RECIPE)
    return path


def run(*words: object) -> Result:
    return CliRunner().invoke(main, [str(word) for word in words])


def test_check_says_what_the_recipe_will_do(recipe: Path) -> None:
    done = run("recipe", "check", recipe)
    assert done.exit_code == 0
    assert f"{recipe}: the recipe is valid" in done.stdout
    assert f"bus lines, version 3, layer M2; id {load_recipe(recipe).recipe_id}" in done.stdout
    assert "0.5 x 0.25 um per px, u = 0 x 0 um per px" in done.stdout
    assert "bus: lines, in x 10, y 20, 300 x 400" in done.stdout
    assert "width_mean lower 18, upper 22.5 um\n" in done.stdout
    assert "open_count upper 0\n" in done.stdout


def test_check_reads_the_corrections(recipe: Path) -> None:
    recipe.write_text(RECIPE.replace("[[feature]]", "[correct]\nflat_field = 'flat.png'\n[[feature]]"))
    cv2.imwrite(str(recipe.with_name("flat.png")), np.full((6, 8), 200, np.uint8))
    assert "flat_field: 8 x 6 px" in run("recipe", "check", recipe).stdout
    recipe.with_name("flat.png").write_text("no picture")
    done = run("recipe", "check", recipe)
    assert done.exit_code == 2
    assert "R.toml: flat_field 'flat.png' cannot be used" in done.stderr


def test_notes_go_to_stderr(recipe: Path) -> None:
    done = run("recipe", "check", recipe)
    assert "printmetrics: note: the scale's uncertainty u_um_per_px is zero" in done.stderr
    assert "zero" not in done.stdout


def test_check_says_which_limits_get_no_verdict(recipe: Path) -> None:
    recipe.write_text(RECIPE.replace("um_per_px = [0.5, 0.25]\nu_um_per_px = 0", "pixels = true"))
    done = run("recipe", "check", recipe)
    assert "width_mean lower 18, upper 22.5 um (no verdict: scale unknown)" in done.stdout
    assert "open_count upper 0\n" in done.stdout
    assert "no verdict while the scale is unknown: bus.width_mean" in done.stderr


def test_check_of_a_wrong_recipe_ends_with_2_and_the_problems_on_stderr(recipe: Path) -> None:
    recipe.write_text(RECIPE.replace("ink", "inc"))
    done = run("recipe", "check", recipe)
    assert done.exit_code == 2
    assert done.stdout == ""
    assert done.stderr.startswith("printmetrics: the recipe cannot be used, 2 problems:\n  R.toml, line ")
    assert "did you mean 'ink'?" in done.stderr
    assert "Traceback" not in done.stderr


def test_schema_is_the_json_schema_of_the_models() -> None:
    done = run("recipe", "schema")
    schema = json.loads(done.stdout)
    assert schema.pop("$schema") == "https://json-schema.org/draft/2020-12/schema"
    assert schema == Recipe.model_json_schema()


def test_start_writes_a_recipe_that_passes_check(tmp_path: Path) -> None:
    path = tmp_path / "new.toml"
    assert run("recipe", "start", path).exit_code == 0
    done = run("recipe", "check", path)
    assert done.exit_code == 0
    assert "pixels = true" in done.stderr


def test_start_never_overwrites(recipe: Path) -> None:
    done = run("recipe", "start", recipe)
    assert done.exit_code == 2
    assert "exists already and is left as it is; choose another name" in done.stderr
    assert recipe.read_text() == RECIPE


def test_start_into_a_missing_folder_says_so(tmp_path: Path) -> None:
    done = run("recipe", "start", tmp_path / "none" / "R.toml")
    assert done.exit_code == 2
    assert "cannot be written: No such file or directory; choose another place" in done.stderr


def test_start_names_every_key_there_is(tmp_path: Path) -> None:
    path = tmp_path / "new.toml"
    run("recipe", "start", path)
    text = path.read_text()
    schema = Recipe.model_json_schema()
    for name, table in {"": schema, **schema["$defs"]}.items():
        for key in table["properties"]:
            sign = f"[{key}]" if "$ref" in str(table["properties"][key]) and name == "" else f"{key} = "
            assert sign in text or f"[feature.{key}]" in text


def test_every_example_in_the_start_recipe_is_valid_once_uncommented(tmp_path: Path) -> None:
    path = tmp_path / "new.toml"
    run("recipe", "start", path)
    left = "um_per_px|u_um_per_px|file|from_image|flat_field|dark"  # what only the user can fill in
    path.write_text(re.sub(rf"(?m)^# (?=\[|(?!{left})\w+ = )", "", path.read_text()))
    recipe = load_recipe(path)
    assert recipe.context_of("R12_3.5m_lane2")["position_m"] == 3.5
    assert set(recipe.features[0].limits) >= {"width_mean", "lwr_3sigma", "open_count"}
    assert tomllib.loads(path.read_text())["web"]["machine_direction"] == "+y"


def test_version_and_help() -> None:
    assert __version__ in run("--version").stdout
    done = run("--help")
    for command in ("measure", "recipe", "demo"):
        assert f"  {command} " in done.stdout


def test_an_unknown_command_ends_with_2() -> None:
    assert run("recipes").exit_code == 2


@pytest.mark.parametrize(("environment", "colour"), [({"NO_COLOR": "1"}, False), ({"TERM": "dumb"}, False), ({}, None)])
def test_colour_is_left_out_where_it_is_not_wanted(
    monkeypatch: pytest.MonkeyPatch, environment: dict[str, str], colour: bool | None
) -> None:
    monkeypatch.delenv("NO_COLOR", raising=False)
    monkeypatch.setenv("TERM", "xterm")
    seen = []
    probe = click.Command("probe", callback=lambda: seen.append(click.get_current_context().color))
    monkeypatch.setattr(main, "get_command", lambda *_: probe)
    for name, value in environment.items():
        monkeypatch.setenv(name, value)
    assert run("probe").exit_code == 0
    assert seen == [colour]


def test_an_interruption_ends_with_130(monkeypatch: pytest.MonkeyPatch) -> None:
    def stop() -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(main, "get_command", lambda *_: click.Command("probe", callback=stop))
    done = run("probe")
    assert done.exit_code == 130
    assert "interrupted" in done.stderr


def test_a_bug_is_not_taken_for_bad_input(monkeypatch: pytest.MonkeyPatch) -> None:
    def fail() -> None:
        msg = "a bug"
        raise ZeroDivisionError(msg)

    monkeypatch.setattr(main, "get_command", lambda *_: click.Command("probe", callback=fail))
    assert isinstance(run("probe").exception, ZeroDivisionError)


def test_the_module_runs_as_the_command_does(recipe: Path) -> None:
    command = [sys.executable, "-m", "printmetrics", "recipe", "check", recipe]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    assert "the recipe is valid" in done.stdout
    assert done.stderr.startswith("printmetrics: note: ")


def test_help_is_quick_because_nothing_heavy_is_imported() -> None:
    code = "import sys; from printmetrics.cli import main; main(['--help'], standalone_mode=False); print(*sys.modules)"
    environment = os.environ | {"PYTHONDONTWRITEBYTECODE": "1"}
    began = time.perf_counter()
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, env=environment)
    seconds = time.perf_counter() - began
    modules = set(done.stdout.splitlines()[-1].split())
    assert not modules & {"numpy", "scipy", "cv2", "pydantic", "rich", "tifffile", "skimage", "printmetrics.recipe"}
    assert seconds < 5.0  # a hang, not the goal: that is held by what is not imported
