"""Reading a recipe."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

from pydantic import ValidationError

from printmetrics.errors import PictureError, RecipeError
from printmetrics.recipe.model import Recipe
from printmetrics.recipe.problems import explain, line_numbers


def load_recipe(path: str | Path) -> Recipe:
    """Read a recipe and check it with everything it refers to.

    Parameters
    ----------
    path : str or Path
        The TOML file.

    Returns
    -------
    Recipe
        Checked and frozen.

    Raises
    ------
    RecipeError
        With all that is wrong: line, place, what, and the remedy.
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8-sig")
    except UnicodeDecodeError as error:
        msg = f"the recipe {path} is not text in UTF-8; save it as UTF-8, or name the right file"
        raise RecipeError(msg) from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        msg = (
            f"the recipe {path} cannot be read: {reason}; check the name, or write one with 'printmetrics recipe start'"
        )
        raise RecipeError(msg) from error
    try:
        raw = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise RecipeError(_syntax(str(error), path.name)) from error
    try:
        return Recipe.model_validate(
            _frozen(raw), strict=True, context={"folder": path.absolute().parent, "file": path.name}
        )
    except ValidationError as error:
        msg = explain(error, raw, line_numbers(text), Recipe.model_json_schema(), path.name)
        raise RecipeError(msg) from error
    except OSError as error:
        msg = f"{path.name}: {error.filename} cannot be read: {error.strerror}; check your access rights"
        raise RecipeError(msg) from error


def correction_sizes(recipe: Recipe) -> dict[str, tuple[int, int]]:
    """Read the flat field and the dark picture, and see that they fit each other and the scale file.

    Parameters
    ----------
    recipe : Recipe
        A checked recipe.

    Returns
    -------
    dict
        Width and height by role. [px]

    Raises
    ------
    RecipeError
        When one cannot be read as a picture, or their sizes differ.
    """
    from printmetrics.io.pictures import Found, read_picture  # noqa: PLC0415  (slow to load, seldom needed)

    sizes = {}
    for role, path in recipe.files.items():
        if role == "scale":
            continue
        try:
            height, width = read_picture(Found(path, path.name)).pixels.shape[:2]
        except PictureError as error:
            msg = f"{recipe.path.name}: {role} {path.name!r} cannot be used: {error}"
            raise RecipeError(msg) from error
        sizes[role] = (width, height)
    compared = sizes | ({"the scale file": recipe.scale_size} if recipe.scale_size else {})
    if len(set(compared.values())) > 1:
        listed = ", ".join(f"{role} has {width} x {height} px" for role, (width, height) in compared.items())
        msg = (
            f"{recipe.path.name}: {listed}; they must have one size: take them with the camera set as for the pictures"
        )
        raise RecipeError(msg)
    return sizes


def _frozen(value: object) -> object:
    """Turn lists into tuples: strict models take nothing else for a tuple."""
    if isinstance(value, dict):
        return {key: _frozen(item) for key, item in value.items()}
    return tuple(map(_frozen, value)) if isinstance(value, list) else value


# What the reader of TOML says, and what the usual culprit is.
_CURES = {
    "Unescaped": "write patterns and Windows paths between single quotes, where \\ stands for itself",
    "Invalid value": "text stands between quotes, a number has a decimal point and no unit",
    "Cannot overwrite a value": "the key is given twice; keep one of them",
    "Cannot declare": "the heading is given twice; keep one of them, or write [[feature]] for another feature",
}


def _syntax(message: str, file: str) -> str:
    what, _, place = message.partition(" (at ")
    line = re.search(r"line (\d+), column (\d+)", place)
    where = f"line {line[1]}, column {line[2]}" if line else place.rstrip(")") or "somewhere"
    remedy = next((cure for start, cure in _CURES.items() if what.startswith(start)), "correct the spelling there")
    return f"the recipe cannot be read as TOML:\n  {file}, {where}: {what}; {remedy}"
