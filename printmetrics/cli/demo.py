"""``printmetrics demo``: a folder to try everything on."""

from __future__ import annotations

import shlex
from pathlib import Path

import click


@click.command()
@click.argument("folder", metavar="DIR", type=click.Path(path_type=Path))
def demo(folder: Path) -> None:  # numpydoc ignore=PR01
    """Write a demo into DIR, a new folder: invented pictures, a recipe, and the truth about them."""
    from printmetrics.synth.demo import write_demo  # noqa: PLC0415  (keeps --help fast)

    pictures = write_demo(folder)
    name = shlex.quote(str(folder))
    click.echo(f"Wrote {len(pictures)} invented pictures, their recipe and their truth to {name}. Now try:")
    click.echo(f"  printmetrics measure {name} --recipe {name}/recipe.toml --out {name}/results")
