"""One picture, from file to rows: what a worker does."""

from __future__ import annotations

import contextlib
import time
import traceback
from dataclasses import dataclass, field
from datetime import datetime
from typing import TYPE_CHECKING, Any, Literal

from printmetrics.errors import PictureError, PrintmetricsError
from printmetrics.inspect import Inspection, failed_inspection, inspect_picture
from printmetrics.io.pictures import file_sha256, read_picture
from printmetrics.recipe import moment

if TYPE_CHECKING:
    from collections.abc import Mapping

    from printmetrics.io.pictures import Found, Picture
    from printmetrics.recipe import Recipe

Drawn = Literal["flagged", "all", "none"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Task:
    """One picture to measure.

    Parameters
    ----------
    found : Found
        Where it is.
    recipe : Recipe
        What to measure in it.
    columns : mapping
        What the command line says about all pictures, by column.
    drawn : {"flagged", "all", "none"}
        Whether to draw it.
    """

    found: Found
    recipe: Recipe
    columns: Mapping[str, str | float]
    drawn: Drawn = "none"


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What became of one picture.

    Parameters
    ----------
    image : str
        Its name.
    columns : dict
        What is the same in all its rows: name, hash, context, time.
    inspection : Inspection
        What was measured.
    size : dict
        Width, height and bits, as far as known.
    seconds : float
        How long it took.
    drawing : (str, bytes) or None
        Suffix and content of the marked-up picture.
    log : str
        Traceback of a bug, else empty.
    paged : bool
        Whether it is a page of a file with several.
    notes : tuple of str
        What was done, or left undone, with tags of the file.
    """

    image: str
    columns: dict[str, Any]
    inspection: Inspection
    size: dict[str, int] = field(default_factory=dict)
    seconds: float = 0.0
    drawing: tuple[str, bytes] | None = None
    log: str = ""
    paged: bool = False
    notes: tuple[str, ...] = ()


def measure_one(task: Task) -> Outcome:
    """Measure one picture; whatever goes wrong with it stays with it.

    Parameters
    ----------
    task : Task
        The picture.

    Returns
    -------
    Outcome
        Its rows, or why there are none.
    """
    began = time.perf_counter()
    columns = _columns(task)
    picture: Picture | None = None
    drawing, log = None, ""
    try:
        columns |= _named(task)
        picture = read_picture(task.found)
        columns["image_sha256"] = picture.sha256
        columns.setdefault("captured_at", _taken(picture, task.recipe))
        inspection = inspect_picture(picture, task.recipe, columns["captured_at"])
        if task.drawn == "all" or (task.drawn == "flagged" and inspection.calls_attention):
            drawing = _drawing(picture, inspection, task.recipe, task.found.name)
    except PrintmetricsError as error:
        inspection = failed_inspection(task.recipe, str(error))
    except Exception as error:  # noqa: BLE001  (a bug fails its picture, with a traceback in the log, and the run goes on)
        inspection = failed_inspection(task.recipe, f"bug: {type(error).__name__}: {error}; see run.log")
        log = traceback.format_exc()
    if picture is None:
        with contextlib.suppress(PictureError):
            columns["image_sha256"] = file_sha256(task.found.path)
        size = {}
    else:
        height, width = picture.pixels.shape[:2]
        size = {"width_px": width, "height_px": height, "bits": picture.bits}
    return Outcome(
        image=task.found.name,
        columns=columns,
        inspection=inspection,
        size=size,
        seconds=time.perf_counter() - began,
        drawing=drawing,
        log=log,
        paged=task.found.page is not None,
        notes=picture.notes if picture else (),
    )


def lost_one(task: Task) -> Outcome:
    """Return what is recorded of a picture whose worker died, twice.

    Parameters
    ----------
    task : Task
        The picture.

    Returns
    -------
    Outcome
        Failed.
    """
    reason = (
        "the worker process measuring it died, twice; if the machine is short of memory, "
        "use fewer workers, or measure this picture alone"
    )
    columns = _columns(task)
    with contextlib.suppress(PictureError):
        columns |= _named(task)
        columns["image_sha256"] = file_sha256(task.found.path)
    return Outcome(image=task.found.name, columns=columns, inspection=failed_inspection(task.recipe, reason))


def _columns(task: Task) -> dict[str, Any]:
    now = datetime.now().astimezone().isoformat(timespec="milliseconds")
    return {"image": task.found.name, "image_sha256": "", "measured_at": now, **task.columns}


def _named(task: Task) -> dict[str, str | float]:
    """Return what the file's name, the command line and the recipe say of a picture."""
    context = task.recipe.context_of(task.found.path.stem, task.columns)
    return {column: value for column, value in context.items() if value != ""}


def _taken(picture: Picture, recipe: Recipe) -> str:
    """Return when the picture was taken by its tags; a camera whose clock was never set says nothing."""
    try:
        return moment(picture.captured_at or "", recipe.images.time_zone)
    except ValueError:
        return ""


def _drawing(picture: Picture, inspection: Inspection, recipe: Recipe, name: str) -> tuple[str, bytes]:
    from printmetrics.batch.draw import draw_picture, encode  # noqa: PLC0415  (not needed where nothing is drawn)

    title = f"{name} - {recipe.title}"
    pixels = picture.pixels if picture.pixels.ndim == 2 else picture.pixels.mean(axis=2, dtype="float32")  # noqa: PLR2004
    return encode(draw_picture(pixels, inspection, title))
