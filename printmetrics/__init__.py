"""Measure printed electronics in pictures, with uncertainty and verdict.

Names are loaded when they are used, so that ``import printmetrics`` is quick.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from printmetrics._version import __version__

if TYPE_CHECKING:
    from printmetrics.batch.folder import measure_folder, plan_run
    from printmetrics.inspect import inspect_picture
    from printmetrics.io.pictures import find_pictures, read_picture
    from printmetrics.recipe import Recipe, load_recipe
    from printmetrics.scale import Scale
    from printmetrics.verdict import judge

_HOME = {
    "Recipe": "printmetrics.recipe",
    "Scale": "printmetrics.scale",
    "find_pictures": "printmetrics.io.pictures",
    "inspect_picture": "printmetrics.inspect",
    "judge": "printmetrics.verdict",
    "load_recipe": "printmetrics.recipe",
    "measure_folder": "printmetrics.batch.folder",
    "plan_run": "printmetrics.batch.folder",
    "read_picture": "printmetrics.io.pictures",
}

__all__ = [
    "Recipe",
    "Scale",
    "__version__",
    "find_pictures",
    "inspect_picture",
    "judge",
    "load_recipe",
    "measure_folder",
    "plan_run",
    "read_picture",
]


def __getattr__(name: str) -> Any:  # noqa: ANN401  (whatever the name stands for)
    if name not in _HOME:
        msg = f"module {__name__!r} has no attribute {name!r}"
        raise AttributeError(msg)
    return getattr(import_module(_HOME[name]), name)
