"""The map in DEVELOPERS.md shows every module, and no other."""

import re
from pathlib import Path

import printmetrics

ROOT = Path(__file__).parents[1]


def test_every_module_is_on_the_map() -> None:
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8").split("## Map")[1].split("\n## ")[0]
    told = re.findall(r"`([\w/]+\.py)`", text)
    package = Path(printmetrics.__path__[0])
    modules = {path.relative_to(package).as_posix() for path in package.rglob("*.py")}
    assert len(told) == len(set(told))
    assert set(told) == {name for name in modules if name == "__init__.py" or not name.endswith("/__init__.py")}


def test_decisions_are_ten_lines_at_most() -> None:
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8").split("## Decisions")[1].split("\n## ")[0]
    for decision in text.split("\n### ")[1:]:
        title, *lines = decision.strip().splitlines()
        assert len(lines) <= 10, title
        assert all(word in decision for word in ("Context:", "Decision:", "Consequence:")), title
