"""``printmetrics measure``: a folder of pictures, one recipe, one folder of results."""

from __future__ import annotations

import os
import sys
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from printmetrics.cli import INTERRUPTED

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from printmetrics.batch.folder import RunSummary
    from printmetrics.batch.work import Drawn, Outcome

SOME_FAILED = 1
NOT_CONFORMING = 3
MOST_FAILURES = 10
WIDE = 160  # columns of the summary off a terminal
# The signs of the drawings; blue, yellow and magenta stay apart for colour-blind eyes.
SIGNS = {"ok": "blue", "?": "yellow", "X": "bold magenta"}


@click.command()
@click.argument("folder", metavar="FOLDER", type=click.Path(path_type=Path))
@click.option("--recipe", "recipe_path", type=click.Path(path_type=Path), required=True, help="What to measure, TOML.")
@click.option("--out", type=click.Path(path_type=Path), required=True, help="Folder for the results; made if need be.")
@click.option(
    "--workers", type=click.IntRange(min=1), help="Number of processes; by default one for each processor core."
)
@click.option(
    "--set", "settings", multiple=True, metavar="COLUMN=VALUE",
    help="Fill a column of the tables, such as lot=L7; may be repeated.",
)  # fmt: skip
@click.option("--strict", is_flag=True, help="Exit with 3 when a limited reading is not conforming.")
@click.option(
    "--pictures", type=click.Choice(["flagged", "all", "none"]), default="flagged", show_default=True,
    help="Which marked-up pictures to draw; flagged: those a person should look at, "
    "or all if the recipe limits nothing but the number of lines.",
)  # fmt: skip
@click.option("--dry-run", is_flag=True, help="List what would be measured; write nothing.")
@click.option("--quiet", is_flag=True, help="No progress, no summary; errors only.")
@click.pass_context
def measure(  # noqa: PLR0913  # numpydoc ignore=PR01
    ctx: click.Context,
    *,
    folder: Path,
    recipe_path: Path,
    out: Path,
    workers: int | None,
    settings: tuple[str, ...],
    strict: bool,
    pictures: Drawn,
    dry_run: bool,
    quiet: bool,
) -> None:
    """Measure every picture in FOLDER (or one picture) as the recipe says.

    Exit code: 0 all measured; 1 some pictures failed, see images.csv; 2 nothing measured;
    3 with --strict, a limited reading is not conforming; 130 interrupted.
    """
    from printmetrics.batch.engine import ONE_THREAD  # noqa: PLC0415  (keeps --help fast)

    for name, number in ONE_THREAD.items():
        os.environ.setdefault(name, number)  # read once, when numpy is imported just below
    from printmetrics.batch.folder import measure_folder, plan_run  # noqa: PLC0415  (keeps --help fast)

    plan = plan_run(folder, recipe_path, out, settings)
    for note in () if quiet else plan.recipe.notes:
        click.echo(f"note: {note}", err=True)
    if dry_run:
        for found in plan.pictures:
            click.echo(_printable(found.name))
        click.echo(f"{len(plan.pictures)} pictures would be measured into {out}; nothing was written.", err=True)
        return
    try:
        with _progress(len(plan.pictures), shown=not quiet) as progress:
            summary = measure_folder(plan, workers=workers or _cores(), drawn=pictures, progress=progress)
    except KeyboardInterrupt as interrupt:
        click.echo(f"printmetrics: {interrupt}; the same command measures all of them anew", err=True)
        ctx.exit(INTERRUPTED)
    if not quiet:
        _print_summary(summary)
        _print_notes(summary)
    _print_failures(summary)
    if summary.failed:
        ctx.exit(SOME_FAILED)
    if strict and not summary.all_conform:
        ctx.exit(NOT_CONFORMING)


def _cores() -> int:
    """Return how many cores this process may use, which in a container may be fewer than there are."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


def _printable(name: str) -> str:
    """Return a file's name on one line, whatever characters it holds."""
    return "".join(c if c.isprintable() else ascii(c)[1:-1] for c in name)


@contextmanager
def _progress(total: int, *, shown: bool) -> Iterator[Callable[[Outcome], None] | None]:
    """Show a bar on a terminal, nothing elsewhere."""
    if not (shown and sys.stderr.isatty() and os.environ.get("TERM") != "dumb"):
        yield None
        return
    from rich.console import Console  # noqa: PLC0415  (not needed off a terminal)
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn  # noqa: PLC0415

    columns = (BarColumn(), MofNCompleteColumn(), TimeRemainingColumn(), TextColumn("{task.description}", markup=False))
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("", total=total)
        yield lambda outcome: bar.update(task, advance=1, description=_printable(outcome.image))


def _print_summary(summary: RunSummary) -> None:
    from rich.console import Console  # noqa: PLC0415
    from rich.table import Table  # noqa: PLC0415
    from rich.text import Text  # noqa: PLC0415

    from printmetrics.batch.draw import value_words  # noqa: PLC0415

    console = Console(highlight=False)
    if not console.is_terminal:
        console.width = WIDE
    if summary.tallies:
        table = Table(box=None, pad_edge=False, header_style="bold")
        for heading in ("feature", "quantity", *SIGNS, "worst", "limits"):
            table.add_column(heading, justify="right" if heading in SIGNS else "left", no_wrap=True)
        table.add_column("where", overflow="fold")
        for (feature, quantity), tally in summary.tallies.items():
            worst, counts = tally.worst, (tally.conforming, tally.undecided, tally.nonconforming)
            table.add_row(
                Text(_printable(feature)),
                quantity,
                *(Text(str(n), style if n else "dim") for n, style in zip(counts, SIGNS.values(), strict=True)),
                value_words(worst["value"], worst["expanded_u"], worst["unit"]) if worst else "withheld",
                _limits(worst) if worst else "",
                Text(_where(worst) if worst else ""),
            )
        console.print(table)
        click.echo("ok conforming, ? undecided, X nonconforming; worst: farthest beyond a limit, or nearest to it\n")
    if summary.spans:
        table = Table(box=None, pad_edge=False, header_style="bold")
        for heading in ("feature", "quantity", "readings", "mean"):
            table.add_column(heading, justify="right" if heading == "readings" else "left", no_wrap=True)
        for heading in ("smallest", "largest"):
            table.add_column(heading, overflow="fold")
        for (feature, quantity), span in summary.spans.items():
            ends = [end for end in (span.smallest, span.largest) if end is not None]
            table.add_row(
                Text(_printable(feature)),
                quantity,
                str(span.number),
                value_words(span.total / span.number, None, ends[0]["unit"]),
                *(Text(f"{value_words(end['value'], end['expanded_u'], end['unit'])}, {_where(end)}") for end in ends),
            )
        console.print(table)
        click.echo("these are not judged: they have no limits, or the scale is unknown\n")
    drawn = f"{summary.drawn} marked-up pictures in {summary.out / 'pictures'}; " if summary.drawn else ""
    click.echo(
        f"{summary.measured} of {summary.found} pictures measured, {summary.failed} failed; "
        f"{drawn}tables in {summary.out}"
    )


def _where(row: dict[str, Any]) -> str:
    return f"{row['item']} in {_printable(row['image'])}"


def _limits(row: dict[str, Any]) -> str:
    ends = ("" if row[end] is None else f"{row[end]:g}" for end in ("lower", "upper"))
    return " .. ".join(ends).strip()


def _print_notes(summary: RunSummary) -> None:
    for note, images in summary.notes.items():
        where = (
            _printable(images[0]) if len(images) == 1 else f"{len(images)} pictures, such as {_printable(images[0])}"
        )
        click.echo(f"note: {note} ({where})", err=True)


def _print_failures(summary: RunSummary) -> None:
    alike: dict[str, list[str]] = {}
    for image, reason in summary.reasons.items():
        alike.setdefault(reason, []).append(image)
    groups = list(alike.items())
    for reason, (first, *others) in groups[:MOST_FAILURES]:
        more = f" and {len(others)} more" if others else ""
        click.echo(f"{_printable(first)}{more}: {_printable(reason)}", err=True)
    left = sum(len(images) for _, images in groups[MOST_FAILURES:])
    if left:
        click.echo(f"and {left} more: see {summary.out / 'images.csv'}", err=True)
