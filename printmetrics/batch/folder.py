"""A folder of pictures, a recipe, and a folder of results."""

from __future__ import annotations

import json
import math
import os
import platform
import shutil
import sys
from contextlib import ExitStack
from dataclasses import dataclass, field
from datetime import datetime
from hashlib import sha256
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Self

from printmetrics._version import __version__
from printmetrics.batch.engine import in_order, interrupts_held
from printmetrics.batch.work import Drawn, Outcome, Task, lost_one, measure_one
from printmetrics.errors import FolderError
from printmetrics.flags import Flag
from printmetrics.inspect import corrections
from printmetrics.io.pictures import Found, find_pictures
from printmetrics.io.tables import EVENTS, IMAGES, MEASUREMENTS, PROFILES, TABLES, Table, TableWriter, describe_table
from printmetrics.measure.kinds import KINDS
from printmetrics.recipe import Recipe, load_recipe
from printmetrics.verdict import DECISION_RULE, GUARD

if TYPE_CHECKING:
    from collections.abc import Callable, Iterable, Iterator

    from printmetrics.inspect import Row

LONGEST_NAME = 200  # bytes of a drawing's name without suffix; file systems end at 255
PACKAGES = {
    "numpy": "numpy",
    "scipy": "scipy",
    "opencv": "opencv-python-headless",
    "scikit-image": "scikit-image",
    "tifffile": "tifffile",
}


@dataclass(slots=True)
class Tally:
    """Verdicts on one quantity of one feature.

    Parameters
    ----------
    conforming, undecided, nonconforming : int
        How many readings.
    worst : dict or None
        Row of the reading farthest beyond, or nearest to, its limit, with its picture.
    """

    conforming: int = 0
    undecided: int = 0
    nonconforming: int = 0
    worst: Row | None = None

    def add(self, row: Row, image: str) -> None:
        """Count a limited reading.

        Parameters
        ----------
        row : dict
            Its row.
        image : str
            Its picture's name.
        """
        setattr(self, row["verdict"], getattr(self, row["verdict"]) + 1)
        if row["value"] is not None and (self.worst is None or _room(row) < _room(self.worst)):
            self.worst = {**row, "image": image}


@dataclass(slots=True)
class Span:
    """Readings of one quantity of one feature that have no limits.

    Parameters
    ----------
    number : int
        How many readings.
    total : float
        Their sum.
    smallest, largest : dict or None
        Their rows, each with its picture.
    """

    number: int = 0
    total: float = 0.0
    smallest: Row | None = None
    largest: Row | None = None

    def add(self, row: Row, image: str) -> None:
        """Count a reading.

        Parameters
        ----------
        row : dict
            Its row.
        image : str
            Its picture's name.
        """
        self.number += 1
        self.total += row["value"]
        if self.smallest is None or row["value"] < self.smallest["value"]:
            self.smallest = {**row, "image": image}
        if self.largest is None or row["value"] > self.largest["value"]:
            self.largest = {**row, "image": image}


def _room(row: Row) -> float:
    """Return how far a reading is inside its limits."""
    lower, upper = row["lower"], row["upper"]
    return min(
        math.inf if lower is None else row["value"] - lower,
        math.inf if upper is None else upper - row["value"],
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """A run, checked, before anything is measured or written.

    Parameters
    ----------
    folder, out : Path
        Pictures and results.
    recipe : Recipe
        What to measure.
    pictures : list of Found
        In the order of the tables.
    columns : dict
        Columns that are the same for all pictures.
    """

    folder: Path
    out: Path
    recipe: Recipe
    pictures: list[Found]
    columns: dict[str, str | float]


@dataclass(slots=True, kw_only=True)
class RunSummary:
    """What a run did.

    Parameters
    ----------
    out : Path
        Where the tables are.
    found, measured, failed, drawn : int
        Pictures.
    reasons : dict of str to str
        By picture, why it, or a feature in it, could not be measured.
    tallies : dict
        Verdicts by feature and quantity.
    spans : dict
        Likewise, of the main quantities without limits, what was read.
    notes : dict
        What was done, or left undone, with tags of the files: the names of the pictures concerned, by note.
    """

    out: Path
    found: int
    measured: int = 0
    failed: int = 0
    drawn: int = 0
    reasons: dict[str, str] = field(default_factory=dict)
    tallies: dict[tuple[str, str], Tally] = field(default_factory=dict)
    spans: dict[tuple[str, str], Span] = field(default_factory=dict)
    notes: dict[str, list[str]] = field(default_factory=dict)

    @property
    def all_conform(self) -> bool:
        """Whether every limited reading conforms."""
        return not any(tally.undecided or tally.nonconforming for tally in self.tallies.values())


def plan_run(folder: str | Path, recipe: str | Path, out: str | Path, settings: Iterable[str] = ()) -> Plan:
    """Check everything that can be checked before a run; write nothing.

    Parameters
    ----------
    folder : str or Path
        Folder of pictures, or one picture.
    recipe : str or Path
        The recipe's file.
    out : str or Path
        Folder for the results.
    settings : iterable of str, optional
        ``column=value`` for columns that are the same for all pictures.

    Returns
    -------
    Plan
        What `measure_folder` would do.

    Raises
    ------
    RecipeError
        When the recipe, a file it refers to, or a setting is wrong.
    FolderError
        When there are no pictures, or `out` cannot take the results.
    """
    folder, out = Path(folder), Path(out)
    loaded = load_recipe(recipe)
    source = folder.resolve() if folder.is_dir() else folder.resolve().parent
    columns = {"source": source.name, **loaded.apply_set(settings)}
    pictures = find_pictures(folder, loaded.images.include)
    if not pictures:
        wanted = ", ".join(loaded.images.include or ("every format that can be read",))
        msg = f"no picture in {folder} matches {wanted}; check the folder, or include in the recipe's [images]"
        raise FolderError(msg)
    corrections(loaded)
    _check_out(out, loaded)
    return Plan(folder=folder, out=out, recipe=loaded, pictures=pictures, columns=columns)


def measure_folder(
    plan: Plan,
    *,
    workers: int = 1,
    drawn: Drawn = "flagged",
    progress: Callable[[Outcome], None] | None = None,
) -> RunSummary:
    """Measure the pictures of a folder, and write the tables, drawings and the record of the run.

    Pictures stand in the tables in the order they were found, each with all its rows or none. The tables
    replace those of an earlier run of the same recipe when this one ends, also when it is interrupted.

    Parameters
    ----------
    plan : Plan
        From `plan_run`.
    workers : int, optional
        Number of processes. With more than one, a script must call this under ``if __name__ == "__main__":``.
    drawn : {"flagged", "all", "none"}, optional
        Which marked-up pictures to write; flagged: those with an event, a flag, or a verdict that is not
        conforming, and all where the recipe limits nothing but the number of items.
    progress : callable, optional
        Called after each picture.

    Returns
    -------
    RunSummary
        What was done.

    Raises
    ------
    FolderError
        When the results cannot be written.
    KeyboardInterrupt
        When interrupted; its message says what was finished.
    """
    summary = RunSummary(out=plan.out, found=len(plan.pictures))
    if drawn == "flagged" and not plan.recipe.judges_items:
        drawn = "all"
    try:
        _prepare_out(plan)
        with _Record(plan, summary) as record:
            tasks = (Task(found=f, recipe=plan.recipe, columns=plan.columns, drawn=drawn) for f in plan.pictures)
            for outcome in in_order(measure_one, tasks, min(workers, len(plan.pictures)), lost_one):
                with interrupts_held():  # all of a picture's rows, or none
                    record.add(outcome)
                if progress is not None:
                    progress(outcome)
    except OSError as error:
        msg = (
            f"the results cannot be written to {plan.out}: {error.strerror or error}; make room, or name another --out"
        )
        raise FolderError(msg) from error
    except KeyboardInterrupt as error:
        done = summary.measured + summary.failed
        msg = f"interrupted after {done} of {summary.found} pictures; their readings are in {plan.out}"
        raise KeyboardInterrupt(msg) from error
    return summary


def _check_out(out: Path, recipe: Recipe) -> None:
    """Refuse an output folder that holds something else."""
    remedy = "name another folder with --out"
    if out.exists() and not out.is_dir():
        msg = f"{out} is a file, not a folder for results; {remedy}"
        raise FolderError(msg)
    nearest = next((folder for folder in (out, *out.absolute().parents) if folder.exists()), out)
    if not (nearest.is_dir() and os.access(nearest, os.W_OK)):
        msg = f"results cannot be written to {out}: {nearest} is not a folder that may be written to; {remedy}"
        raise FolderError(msg)
    try:
        earlier = json.loads((out / "run.json").read_text(encoding="utf-8"))
        same = (earlier["recipe_id"], earlier["scale_id"]) == (recipe.recipe_id, recipe.scale_id)
        name = earlier["recipe"]
    except FileNotFoundError:
        if (out / "measurements.csv").exists():
            msg = f"{out} holds a measurements.csv but no run.json that says which recipe it is from; {remedy}"
            raise FolderError(msg) from None
        return
    except (OSError, ValueError, KeyError, TypeError) as error:
        msg = f"{out / 'run.json'} is damaged, so nothing tells whose results stand there; {remedy}"
        raise FolderError(msg) from error
    if not same:
        msg = (
            f"{out} holds the results of another recipe or scale ({name!r}, recipe_id {earlier['recipe_id']}; "
            f"this one is {recipe.title!r}, {recipe.recipe_id}); {remedy}"
        )
        raise FolderError(msg)


def _prepare_out(plan: Plan) -> None:
    """Make the folder and copy what the run depends on, so that it can be repeated."""
    copies = plan.out / "recipe"
    copies.mkdir(parents=True, exist_ok=True)
    home = plan.recipe.path.parent
    for file in (plan.recipe.path, *plan.recipe.files.values()):
        target = copies / file.relative_to(home)
        target.parent.mkdir(parents=True, exist_ok=True)
        if not (target.exists() and target.samefile(file)):  # the copied recipe may itself be what is run
            shutil.copyfile(file, target)


class _Record:
    """Writes what becomes of each picture: into part files, which become the tables at the end."""

    def __init__(self, plan: Plan, summary: RunSummary) -> None:
        self._plan = plan
        self._summary = summary
        self._seen: dict[tuple[str, str], str] = {}
        self._started = _now()
        self._files = ExitStack()
        recipe = plan.recipe
        self._common = {
            "revision": 0,
            "recipe": recipe.title,
            "recipe_id": recipe.recipe_id,
            "scale_id": recipe.scale_id,
            "software": f"printmetrics {__version__}",
        }

    def __enter__(self) -> Self:
        self._write_run("running")
        self._writers = {}
        for table in TABLES:
            part = self._part(table)
            part.unlink(missing_ok=True)
            self._writers[table] = self._files.enter_context(TableWriter(part, table))
        return self

    def __exit__(self, kind: type[BaseException] | None, *_: object) -> None:
        self._files.close()
        with interrupts_held():
            for table in TABLES:
                path = self._plan.out / f"{table.name}.csv"
                self._part(table).replace(path)
                describe_table(path, table)
            self._write_run("finished" if kind is None else "interrupted")

    def _part(self, table: Table) -> Path:
        return self._plan.out / f"{table.name}.csv.part"

    def add(self, outcome: Outcome) -> None:
        """Write one picture's rows, its row among the pictures last, so that what stands there is complete."""
        found, summary = outcome.inspection, self._summary
        # A picture that failed, say by its name, was not measured: its twin is no repetition.
        doubt = Flag.REPEATED_PICTURE if found.status == "measured" and self._repeated(outcome) else Flag.NONE
        columns = {**outcome.columns, **self._common}
        rows = [{**columns, **row, "flags": (row["flags"] | doubt).words()} for row in found.rows]
        self._write(MEASUREMENTS, rows)
        self._write(EVENTS, [_fitting(EVENTS, columns) | row for row in found.events])
        self._write(PROFILES, _profile_rows(outcome))
        image = {"status": found.status, "reason": found.reason, "seconds": outcome.seconds, **outcome.size}
        self._write(IMAGES, [_fitting(IMAGES, columns) | image])
        self._draw(outcome)
        if outcome.log:
            with (self._plan.out / "run.log").open("a", encoding="utf-8", errors="backslashreplace") as log:
                log.write(f"{_now()} {outcome.image!r}\n{outcome.log}\n")
        if found.status == "failed":
            summary.failed += 1
        else:
            summary.measured += 1
        for note in outcome.notes:
            summary.notes.setdefault(note, []).append(outcome.image)
        if found.reason:
            summary.reasons[outcome.image] = found.reason
        for row in found.rows:
            what = row["feature"], row["quantity"]
            if row["verdict"]:
                summary.tallies.setdefault(what, Tally()).add(row, outcome.image)
            elif row["value"] is not None and row["quantity"] in KINDS[row["kind"]].main:
                summary.spans.setdefault(what, Span()).add(row, outcome.image)

    def _write(self, table: Table, rows: Iterable[Row]) -> None:
        self._writers[table].write(rows)

    def _repeated(self, outcome: Outcome) -> bool:
        """Tell whether the same content came under another name; pages of one file share a hash, not a picture."""
        digest, page = outcome.columns["image_sha256"], outcome.image.rpartition("#")[2] if outcome.paged else ""
        return bool(digest) and self._seen.setdefault((digest, page), outcome.image) != outcome.image

    def _draw(self, outcome: Outcome) -> None:
        """Write a drawing in place of an earlier run's."""
        folder, name = self._plan.out / "pictures", outcome.image
        if len(os.fsencode(name)) > LONGEST_NAME:
            name = f"{name[: LONGEST_NAME // 8]}-{sha256(os.fsencode(name)).hexdigest()[:16]}"
        for suffix in (".png", ".jpg"):
            (folder / f"{name}{suffix}").unlink(missing_ok=True)
        if outcome.drawing is not None:
            suffix, data = outcome.drawing
            folder.mkdir(exist_ok=True)
            (folder / f"{name}{suffix}").write_bytes(data)
            self._summary.drawn += 1

    def _write_run(self, status: str) -> None:
        plan, summary = self._plan, self._summary
        about = {
            "status": status,
            "command": sys.argv,
            "source": os.fspath(plan.folder.absolute()),
            "recipe": self._common["recipe"],
            "recipe_id": plan.recipe.recipe_id,
            "scale_id": plan.recipe.scale_id,
            "columns": plan.columns,
            "pictures": {"found": summary.found, "measured": summary.measured, "failed": summary.failed},
            "notes": [{"note": note, "pictures": len(n), "such_as": n[0]} for note, n in summary.notes.items()],
            "started_at": self._started,
            "ended_at": None if status == "running" else _now(),
            "decision_rule": {"guard_band": f"{GUARD} u", "text": DECISION_RULE},
            "versions": {
                "printmetrics": __version__,
                "python": platform.python_version(),
                **{name: version(package) for name, package in PACKAGES.items()},
            },
        }
        part = plan.out / "run.json.part"
        part.write_text(json.dumps(about, indent=1) + "\n", encoding="utf-8")
        part.replace(plan.out / "run.json")


def _now() -> str:
    return datetime.now().astimezone().isoformat(timespec="milliseconds")


def _fitting(table: Table, columns: Row) -> Row:
    """Return those columns that a table has."""
    return {name: value for name, value in columns.items() if name in table.header}


def _profile_rows(outcome: Outcome) -> Iterator[Row]:
    columns = _fitting(PROFILES, outcome.columns)
    for feature, profile in outcome.inspection.profiles:
        same = {**columns, "feature": feature, "item": profile.item, "profile": profile.profile, "unit": profile.unit}
        for distance, value, u in zip(profile.distance, profile.value, profile.u, strict=True):
            yield {**same, "distance": distance, "value": value, "u": u}
