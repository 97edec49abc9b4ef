"""What README promises is what the program does."""

import re
import shutil
from pathlib import Path

import pytest
from click.testing import CliRunner

from printmetrics.cli import main
from printmetrics.flags import DECISIVE, Flag
from printmetrics.io.tables import EVENTS, IMAGES, MEASUREMENTS, PROFILES, Table
from printmetrics.measure.lines import line
from printmetrics.quantities import CATALOGUE

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def section(title: str) -> str:
    return README.split(f"\n## {title}\n")[1].split("\n## ")[0]


def table(title: str) -> dict[str, list[str]]:
    """Return the cells of a section's tables by the name that stands first in their row."""
    rows = re.findall(r"^\| `([^`]+)` \| (.*) \|$", section(title), re.MULTILINE)
    assert len(rows) == len({name for name, _ in rows})
    return {name: cells.split(" | ") for name, cells in rows}


def block(language: str, number: int = 0) -> str:
    return re.findall(rf"^```{language}\n(.*?)^```", README, re.MULTILINE | re.DOTALL)[number]


def test_quantities_are_those_of_the_catalogue_with_unit_and_definition() -> None:
    catalogue = [quantity for kind in CATALOGUE.values() for quantity in kind.values()]
    told = table("What is measured")
    assert told == {q.name: [q.unit(), q.definition] for q in catalogue}
    assert list(told) == [q.name for q in catalogue]


def test_flags_are_those_of_the_program_and_decisive_ones_are_said_to_be() -> None:
    told = {name: cells[0] for name, cells in table("Flags").items()}
    assert told == {str(f.name).lower(): "yes" if f in DECISIVE else "no" for f in Flag if f is not Flag.NONE}


@pytest.mark.parametrize(
    ("flag", "criterion"),
    [
        (Flag.SATURATED, f"more than {line._SATURATED:.0%}"),
        (Flag.NOT_RESOLVED, f"{line._RESOLVED_BLURS:g} blur sigmas"),
        (Flag.NOT_RESOLVED, f"{line._RESOLVED_RAYLEIGH:g} wavelength / NA"),
        (Flag.DEFOCUSED, f"{line._DEFOCUSED:g} times"),
        (Flag.LEVELS_UNRESOLVED, f"below {line._SPACE_BLURS:g} blur sigmas"),
        (Flag.OUTSIDE_VALIDITY, f"more than {line._GAPS:.0%}"),
        (Flag.OUTSIDE_VALIDITY, f"e^{line._MISMATCH:g}"),
        (Flag.OUTSIDE_VALIDITY, f"more than {line._MATTERS:.0%}"),
        (Flag.LOW_CONTRAST, f"below {line._LOW_CONTRAST:g} times"),
        (Flag.SHARPENED, f"more than {line._SHARPENED:.1%}"),
        (Flag.OUTSIDE_VALIDITY, f"skewed by more than {line._SKEWED:.1%}"),
        (Flag.UNEVEN_LIGHT, f"more than {line._UNEVEN:.0%}"),
    ],
)
def test_a_flag_is_set_by_the_number_that_is_told(flag: Flag, criterion: str) -> None:
    assert criterion.replace("%", " %") in table("Flags")[str(flag.name).lower()][1]


@pytest.mark.parametrize("kind", [EVENTS, PROFILES, IMAGES], ids=lambda kind: kind.name)
def test_columns_of_a_table_are_told_in_order(kind: Table) -> None:
    columns = table("What a run writes")[f"{kind.name}.csv"][1]
    assert re.findall(r"`(\w+)`", columns) == kind.header


def test_columns_of_measurements_are_told_in_order() -> None:
    groups = section("What a run writes").split("| group | columns |")[1].split("\n\n")[0]
    assert re.findall(r"`(\w+)`", groups) == MEASUREMENTS.header


def test_the_recipe_by_example_is_valid(tmp_path: Path) -> None:
    recipe = tmp_path / "recipe.toml"
    recipe.write_text(block("toml"), encoding="utf-8")
    done = CliRunner().invoke(main, ["recipe", "check", str(recipe)])
    assert done.exit_code == 0, done.output
    assert "line_count lower 3, upper 3" in done.output


@pytest.mark.parametrize("number", [0, 1])
def test_the_python_examples_run(
    number: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "sample_images").mkdir()
    for name in ("recipe.toml", "R07_0002.5m_lane1.png", "R07_0032.5m_lane1.png"):
        shutil.copy(ROOT / "sample_images" / name, tmp_path / "sample_images")
    monkeypatch.chdir(tmp_path)
    exec(compile(block("python", number), "README.md", "exec"), {})  # noqa: S102  (the text of the README is the test)
    told = capsys.readouterr().out
    # Two pictures of five lines, of which one is not printed.
    lines = re.findall(r"^R07_00\d\d\.5m_lane1\.png L\d \d\d\.\d{3} \+- 0\.\d{3} um conforming$", told, re.MULTILINE)
    assert len(lines) == 9 if number == 0 else told == "2 measured, 0 failed; all conform: False\n"


def test_pictures_and_files_that_are_named_are_there() -> None:
    for name in re.findall(r"\]\(([^)]+)\)", README):
        assert (ROOT / name).is_file()
    assert sum(path.stat().st_size for path in (ROOT / "docs").iterdir()) < 500_000
