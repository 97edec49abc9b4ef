"""``printmetrics recipe``: check a recipe, print its schema, start a new one."""

from __future__ import annotations

import json
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING

import click

from printmetrics.errors import RecipeError
from printmetrics.quantities import CATALOGUE
from printmetrics.recipe import Recipe, correction_sizes, load_recipe

if TYPE_CHECKING:
    from printmetrics.measure.options import FeatureOptions, Limits

_FILE = click.Path(path_type=Path)


@click.group()
def recipe() -> None:
    """Check a recipe, print its schema, or start a new one."""


@recipe.command()
@click.argument("file", metavar="R.toml", type=_FILE)
def check(file: Path) -> None:  # numpydoc ignore=PR01
    """Check a recipe and all it refers to, and say what it will do."""
    checked = load_recipe(file)
    sizes = correction_sizes(checked)
    click.echo(f"{file}: the recipe is valid")
    words = [checked.name, checked.version and f"version {checked.version}", checked.layer and f"layer {checked.layer}"]
    click.echo(f"  recipe   {', '.join(word for word in words if word)}; id {checked.recipe_id}")
    click.echo(f"  scale    {_scale(checked)}; id {checked.scale_id}")
    for role, (width, height) in sizes.items():
        click.echo(f"  correct  {role}: {width} x {height} px")
    for feature in checked.features:
        region = (
            "the whole picture" if feature.region is None else "x {:g}, y {:g}, {:g} x {:g}".format(*feature.region)
        )
        click.echo(f"  feature  {feature.name}: {feature.kind}, in {region}")
        for quantity, limits in feature.limits.items():
            click.echo(f"           {quantity} {_limits(checked, feature, quantity, limits)}")
    for note in checked.notes:
        click.echo(f"printmetrics: note: {note}", err=True)


def _scale(checked: Recipe) -> str:
    source = checked.scale
    if source.pixels:
        return "unknown, lengths in px"
    u = "" if source.u_um_per_px is None else ", u = {:g} x {:g} um per px".format(*source.u_um_per_px)
    if source.from_image:
        return f"from each picture{u}"
    if source.um_per_px is not None:
        return "{:g} x {:g} um per px".format(*source.um_per_px) + u
    return f"from {source.file}"


def _limits(checked: Recipe, feature: FeatureOptions, quantity: str, limits: Limits) -> str:
    unit = CATALOGUE[feature.kind][quantity].unit("um")
    parts = [f"{name} {value:g}" for name, value in limits if value is not None]
    judged = checked.limits_for(feature, quantity) is not None
    return f"{', '.join(parts)} {unit if unit != '1' else ''}".rstrip() + (
        "" if judged else " (no verdict: scale unknown)"
    )


@recipe.command()
def schema() -> None:
    """Print the JSON Schema of recipes, for your editor."""
    content = {"$schema": "https://json-schema.org/draft/2020-12/schema", **Recipe.model_json_schema()}
    click.echo(json.dumps(content, indent=2))


@recipe.command()
@click.argument("file", metavar="R.toml", type=_FILE)
def start(file: Path) -> None:  # numpydoc ignore=PR01
    """Write a recipe to start from, every key explained."""
    text = files("printmetrics.recipe").joinpath("start.toml").read_text(encoding="utf-8")
    try:
        with file.open("x", encoding="utf-8") as out:
            out.write(text)
    except FileExistsError as error:
        msg = f"{file} exists already and is left as it is; choose another name"
        raise RecipeError(msg) from error
    except OSError as error:
        msg = f"{file} cannot be written: {error.strerror}; choose another place"
        raise RecipeError(msg) from error
    click.echo(f"{file}: written; edit it, then run: printmetrics recipe check {file}")
