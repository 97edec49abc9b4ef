"""The demo set: an invented roll of soil-moisture tags, to try the whole job on."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import cv2
import numpy as np
import tifffile
from scipy.ndimage import gaussian_filter

from printmetrics.errors import FolderError
from printmetrics.synth import camera
from printmetrics.synth.scene import Defect, Line, Scene, Truth, render

if TYPE_CHECKING:
    from collections.abc import Iterator
    from pathlib import Path

    from numpy.typing import NDArray

SEED = 20

UM_PER_PX = 0.5
SHAPE = (540, 720)
NA = 0.28
WAVELENGTH_UM = 0.55
BLUR_UM = 0.235 * WAVELENGTH_UM / NA  # slope-equivalent sigma of an aberration-free incoherent edge
NECK_UM = 4.0
PITCH_UM = 60.0
COUNT = 5
REGION_UM = (20.0, 10.0, 320.0, 250.0)
WEB, INK = 58.0, 186.0
ELECTRONS_PER_COUNT = 50.0

RECIPE = """\
# Invented example: antenna of a soil-moisture tag, silver ink on a dark web.
# All lengths are in micrometres.

schema = 1                          # version of this file's format
name = "soil-moisture tag, antenna"
version = "1"                       # raise it when you change a limit
layer = "M1"                        # which printed layer this is

[images]
include = ["*.png", "*.tif"]        # which files of the folder are pictures
# What a file name says: roll, metres along the roll, lane across the web.
context = '(?P<roll>[^_]+)_(?P<position_m>[\\d.]+)m_lane(?P<lane>\\d+)'

[scale]
um_per_px = 0.5                     # from a ruler picture with the same objective
u_um_per_px = 0.0005                # its standard uncertainty

[optics]                            # tells which widths the optics can resolve
na = 0.28
wavelength_um = 0.55
illumination = "reflected"

[web]
machine_direction = "+y"            # the picture's axis that runs downstream
cross_direction = "+x"

[[feature]]
name = "antenna"
kind = "lines"
region = [20, 10, 320, 250]         # x, y, width, height
ink = "bright"                      # the silver is brighter than the web
direction = "vertical"              # or horizontal, auto, or degrees
centres = [60, 120, 180, 240, 300]  # where the drawing has the lines: L3 stays L3 when L2 is missing
count = 5                           # a missing line is reported, never passed over
edge_level = 0.5                    # the edge lies half-way between dark and bright
neck_length = 4.0                   # width_min and width_max average over this length

[feature.limits]
width_mean = { lower = 18.0, target = 20.0, upper = 22.0 }
width_min = { lower = 14.0 }        # a neck thinner than this heats up
lwr_3sigma = { upper = 1.5 }        # roughness of the width
space_min = { lower = 30.0 }        # nearer lines may short in damp soil
open_count = { upper = 0 }
bridge_count = { upper = 0 }
"""

README = """\
INVENTED DATA. These pictures were computed, not taken; the roll, the tag and the line do not exist.

A roll of soil-moisture tags is printed on a dark web. Each tag has a meander antenna of silver ink; the inspection
camera looks at five straight runs of it, 20 um wide, 60 um apart, at 0.5 um per pixel, every few metres, in two lanes.

recipe.toml       what to measure, and the limits
truth.csv         what the lines measure, exactly: "process" is what the endless line has, of which the picture
                  shows a piece; "piece" what the piece in the recipe's region has. Mean widths and
                  spaces, lwr and ler leave the defects out; extremes and the harmonic width count them
truth_events.csv  where the defects are. The size of a neck is its length at half depth; events.csv gives the whole
                  length over which the edge departs, which is more. A free drop stands under the line it was
                  put beside; events.csv names both lines it lies between
R07_*             the pictures: roll, metres along it, lane

What was put in:

{stories}

The data may be used for any purpose (CC0 1.0).
"""


@dataclass(frozen=True, slots=True, kw_only=True)
class _Shot:
    """One picture of the roll."""

    name: str
    story: str
    width_um: float = 20.0
    defects: tuple[Defect, ...] = ()
    blur_um: float = BLUR_UM
    unprinted: int | None = None
    across: float = 0.04
    vignette: float = 0.03
    bits: int = 8


_SHOTS = (
    _Shot(name="R07_0002.5m_lane1.png", story="good"),
    _Shot(name="R07_0002.5m_lane2.png", story="good", width_um=20.2),
    _Shot(name="R07_0007.5m_lane1.png", story="good", width_um=19.9),
    _Shot(
        name="R07_0007.5m_lane2.png",
        story="a free drop of ink between two lines",
        width_um=20.2,
        defects=(Defect(event="satellite", line=2, at=-96.0, size=21.0, offset=58.0),),
    ),
    _Shot(name="R07_0012.5m_lane1.png", story="good, but uneven light", across=0.35, vignette=0.2),
    _Shot(name="R07_0012.5m_lane2.png", story="good", width_um=20.4),
    _Shot(
        name="R07_0017.5m_lane1.png",
        story="a neck in one line",
        width_um=20.1,
        defects=(Defect(event="neck", line=1, at=72.0, size=18.0, depth=19.0, side="right"),),
    ),
    _Shot(
        name="R07_0017.5m_lane2.png",
        story="one line open",
        width_um=20.3,
        defects=(Defect(event="open", line=3, at=38.0, size=16.0),),
    ),
    _Shot(
        name="R07_0022.5m_lane1.png",
        story="a bridge between two lines",
        width_um=20.1,
        defects=(Defect(event="bridge", line=0, at=-60.0, size=17.0, depth=13.0),),
    ),
    _Shot(name="R07_0022.5m_lane2.png", story="width begins to drift upwards", width_um=20.9),
    _Shot(name="R07_0027.5m_lane1.png", story="out of focus", blur_um=3.0),
    _Shot(
        name="R07_0027.5m_lane2.tif",
        story="width near the upper limit; 12 bits in a 16-bit file",
        width_um=21.9,
        bits=12,
    ),
    _Shot(name="R07_0032.5m_lane1.png", story="one line not printed", width_um=20.2, unprinted=3),
    _Shot(name="R07_0032.5m_lane2.png", story="width above the upper limit", width_um=22.5),
)


def write_demo(folder: Path, seed: int = SEED) -> list[Path]:
    """Write the demo set: pictures, recipe, truth and a text that says what it is.

    Parameters
    ----------
    folder : pathlib.Path
        Where to; made if it does not exist, and must be empty.
    seed : int, optional
        Seed of all chance in it.

    Returns
    -------
    list of pathlib.Path
        The pictures.

    Raises
    ------
    FolderError
        When the folder is not empty or cannot be written.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
        if any(folder.iterdir()):
            msg = f"{str(folder)!r} is not empty; name a new folder"
            raise FolderError(msg)
        lines: list[tuple[object, ...]] = [("image", "item", "quantity", "of", "value", "unit")]
        events: list[tuple[object, ...]] = [("image", "item", "event", "x_px", "y_px", "size", "area", "unit")]
        for shot, rng in zip(_SHOTS, np.random.default_rng(seed).spawn(len(_SHOTS)), strict=True):
            codes, truth = _shoot(shot, rng)
            _write_picture(folder / shot.name, codes)
            lines += [(shot.name, *row) for row in _line_rows(shot, truth)]
            events += [(shot.name, *row) for row in _event_rows(truth)]
        _write_table(folder / "truth.csv", lines)
        _write_table(folder / "truth_events.csv", events)
        stories = "\n".join(f"{shot.name}  {shot.story}" for shot in _SHOTS)
        for name, text in (("recipe.toml", RECIPE), ("README.txt", README.format(stories=stories))):
            (folder / name).write_text(text, encoding="utf-8", newline="\n")
    except OSError as error:
        msg = f"cannot write the demo to {str(folder)!r}: {error.strerror}; name a folder you may write to"
        raise FolderError(msg) from error
    return [folder / shot.name for shot in _SHOTS]


def _items(shot: _Shot) -> list[str]:
    return [f"L{number + 1}" for number in range(COUNT) if number != shot.unprinted]


def _shoot(shot: _Shot, rng: np.random.Generator) -> tuple[NDArray[Any], Truth]:
    """Print one picture's lines and take it."""
    shift = rng.uniform(-3.0, 3.0)
    lines = [
        Line(
            offset=((number - (COUNT - 1) / 2) * PITCH_UM + shift) / UM_PER_PX,
            width=shot.width_um / UM_PER_PX,
            edge_sd=0.25 / UM_PER_PX,
            correlation_length=5.0 / UM_PER_PX,
            exponent=0.6,
            rho=0.2,
        )
        for number in range(COUNT)
    ]
    scene = Scene(
        shape=SHAPE,
        lines=tuple(line for number, line in enumerate(lines) if number != shot.unprinted),
        defects=shot.defects,
        substrate=WEB,
        ink=INK,
        blur=shot.blur_um / UM_PER_PX,
        tilt_deg=rng.uniform(-0.6, 0.6),
    )
    image, truth = render(scene, rng)
    cloud = gaussian_filter(rng.standard_normal(SHAPE), 15.0)
    image = image * (1.0 + 0.012 / cloud.std() * cloud)  # ink and web are never quite even
    image = image * camera.light(SHAPE, across=shot.across, along=0.02, vignette=shot.vignette)
    image = camera.expose(image, rng, electrons_per_count=ELECTRONS_PER_COUNT, read_noise=0.5)
    return camera.to_codes(image * 2 ** (shot.bits - 8), shot.bits), truth


def _write_picture(path: Path, codes: NDArray[Any]) -> None:
    if path.suffix == ".tif":
        # No date in the file: the same seed gives the same bytes.
        tifffile.imwrite(path, codes, compression="zlib", predictor=True, metadata=None, software=False)
    else:
        _, data = cv2.imencode(".png", codes, [cv2.IMWRITE_PNG_COMPRESSION, 9])
        path.write_bytes(data.tobytes())


def _write_table(path: Path, rows: list[tuple[object, ...]]) -> None:
    with path.open("w", encoding="utf-8", newline="") as file:
        csv.writer(file).writerows([f"{v:.6g}" if isinstance(v, float) else v for v in row] for row in rows)


def _line_rows(shot: _Shot, truth: Truth) -> Iterator[tuple[object, ...]]:
    """Item, quantity, what it is of, value and unit, for the recipe's region."""
    middle = (SHAPE[0] - 1) / 2
    top, bottom = REGION_UM[1] / UM_PER_PX, (REGION_UM[1] + REGION_UM[3]) / UM_PER_PX
    piece = top - middle, bottom - middle
    neck = NECK_UM / UM_PER_PX
    items = _items(shot)
    yield "all", "line_count", "piece", len(items), "1"
    for item, line in zip(items, truth.lines, strict=True):
        stats = line.statistics(neck, piece)
        yield item, "width_mean", "process", line.line.width * UM_PER_PX, "um"
        yield item, "lwr_3sigma_long", "process", 3 * line.line.width_sd * UM_PER_PX, "um"
        yield item, "correlation_length", "process", line.line.correlation_length * UM_PER_PX, "um"
        yield item, "width_mean", "piece", stats.width_mean * UM_PER_PX, "um"
        yield item, "width_min", "piece", stats.width_min * UM_PER_PX, "um"
        yield item, "width_max", "piece", stats.width_max * UM_PER_PX, "um"
        yield item, "width_harmonic", "piece", stats.width_harmonic * UM_PER_PX, "um"
        yield item, "lwr_3sigma", "piece", 3 * stats.width_sd * UM_PER_PX, "um"
        yield item, "ler_left_3sigma", "piece", 3 * stats.left_sd * UM_PER_PX, "um"
        yield item, "ler_right_3sigma", "piece", 3 * stats.right_sd * UM_PER_PX, "um"
        yield item, "open_count", "piece", sum(d.item == item and d.event == "open" for d in truth.defects), "1"
        yield item, "tilt", "process", float(truth.scene.tilt_deg), "deg"
    for number, (one, two) in enumerate(pairwise(items)):
        if int(two[1:]) - int(one[1:]) == 1:
            between = f"{one}..{two}"
            mean, smallest = truth.spaces(number, neck, piece)
            bridges = sum(d.item == between and d.event == "bridge" for d in truth.defects)
            yield between, "space_mean", "piece", mean * UM_PER_PX, "um"
            yield between, "space_min", "piece", smallest * UM_PER_PX, "um"
            yield between, "bridge_count", "piece", bridges, "1"


def _event_rows(truth: Truth) -> Iterator[tuple[object, ...]]:
    """Item, event, place, size and area."""
    for defect in truth.defects:
        size, area = defect.size * UM_PER_PX, defect.area * UM_PER_PX**2
        yield defect.item, defect.event, defect.x, defect.y, size, area, "um"
