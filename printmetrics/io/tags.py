"""What the tags of a file say about a picture: when, which way up, and its scale."""

from __future__ import annotations

import io
import logging
import math
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING
from xml.parsers import expat

if TYPE_CHECKING:
    from collections.abc import Iterator

    from tifffile import TiffTags

ORIENTATION, DATE_TIME, EXIF = 274, 306, 34665
X_RESOLUTION, Y_RESOLUTION, RESOLUTION_UNIT = 282, 283, 296

DEFAULT_DPI = (72.0, 96.0, 300.0)
"""Resolutions that programs write when they know none."""

_UM_PER_RESOLUTION_UNIT = {2: ("inch", 25400.0), 3: ("centimetre", 10000.0)}
_UM_PER_OME_UNIT = {
    "pm": 1e-6,
    "Å": 1e-4,
    "nm": 1e-3,
    "µm": 1.0,
    "μm": 1.0,
    "mm": 1e3,
    "cm": 1e4,
    "m": 1e6,
    "in": 25400.0,
}  # fmt: skip  (micro sign and Greek mu look alike)


@dataclass(frozen=True, slots=True, kw_only=True)
class Ome:
    """What OME-XML says about the pixels.

    Parameters
    ----------
    um_per_px : (float, float) or None
        Length per pixel in x and y. [um/px]
    origin : str
        Where it comes from, or why there is none.
    significant_bits : int or None
        True depth, where it is given.
    """

    um_per_px: tuple[float, float] | None
    origin: str
    significant_bits: int | None = None


@contextmanager
def heard() -> Iterator[list[str]]:
    """Collect the errors tifffile logs, so that none reaches a user raw and none is passed over.

    Yields
    ------
    list of str
        Grows with each error.
    """
    errors: list[str] = []

    class _Ear(logging.Handler):
        def emit(self, record: logging.LogRecord) -> None:
            if record.levelno >= logging.ERROR:
                errors.append(record.getMessage())

    logger = logging.getLogger("tifffile")
    ear, propagate = _Ear(), logger.propagate
    logger.addHandler(ear)
    logger.propagate = False
    try:
        yield errors
    finally:
        logger.removeHandler(ear)
        logger.propagate = propagate


def read_exif(blob: bytes) -> tuple[str | None, tuple[str, ...]]:
    """Return when a picture was taken and what to note, from an EXIF block.

    Parameters
    ----------
    blob : bytes
        A TIFF structure; a damaged one gives a note, as the pixels do not depend on it.

    Returns
    -------
    captured_at : str or None
        Date and time, with offset where it is given.
    notes : tuple of str
        What was not applied or could not be read.
    """
    if not blob:
        return None, ()
    import tifffile  # noqa: PLC0415  (slow to import)

    with heard():
        try:
            with tifffile.TiffFile(io.BytesIO(blob)) as tif:
                tags = tif.pages.first.tags
                return captured_at(tags), orientation_note(tags)
        except Exception:  # noqa: BLE001  (whatever the parser raises on bad bytes, the pixels are good)
            return None, ("the EXIF block cannot be read: no time and no orientation is taken from it",)


def captured_at(tags: TiffTags) -> str | None:
    """Return when the picture was taken, as its tags say.

    Parameters
    ----------
    tags : TiffTags
        Tags of its first directory.

    Returns
    -------
    str or None
        ``YYYY:MM:DD HH:MM:SS``, followed by the offset from UTC where it is given.
    """
    exif = tags.valueof(EXIF)
    exif = exif if isinstance(exif, dict) else {}
    for date, offset in (
        (exif.get("DateTimeOriginal"), exif.get("OffsetTimeOriginal")),
        (tags.valueof(DATE_TIME), exif.get("OffsetTime")),
    ):
        if isinstance(date, str) and date.strip(" :"):
            return date.strip() + (offset.strip() if isinstance(offset, str) else "")
    return None


def orientation_note(tags: TiffTags) -> tuple[str, ...]:
    """Return what to say about an orientation tag, which is never applied.

    Pixels are taken as stored, in every format: the axes of the recipe's regions are those of the sensor,
    and a camera that guesses which way is up must not turn the web.

    Parameters
    ----------
    tags : TiffTags
        Tags of the picture's directory.

    Returns
    -------
    tuple of str
        One note, or none.
    """
    orientation = tags.valueof(ORIENTATION, 1)
    if orientation == 1:
        return ()
    return (f"orientation tag {int(orientation)} not applied: pixels are taken as stored",)


def resolution_hint(tags: TiffTags) -> tuple[tuple[float, float] | None, str]:
    """Return the scale that TIFF resolution tags give.

    Parameters
    ----------
    tags : TiffTags
        Tags of the picture's directory.

    Returns
    -------
    um_per_px : (float, float) or None
        Length per pixel in x and y. [um/px]
    origin : str
        Where it comes from, or why there is none.

    References
    ----------
    .. [1] TIFF 6.0, XResolution, YResolution, ResolutionUnit (inch where the tag is missing).
    """
    ratios = tags.valueof(X_RESOLUTION), tags.valueof(Y_RESOLUTION)
    if None in ratios:
        return None, "no resolution tags"
    unit = int(tags.valueof(RESOLUTION_UNIT, 2))
    if unit not in _UM_PER_RESOLUTION_UNIT:
        return None, "the resolution tags have no unit of length"
    name, um = _UM_PER_RESOLUTION_UNIT[unit]
    # A rational 0/0 or x/0 is how "unknown" is written.
    per_unit = [top / bottom if bottom else 0.0 for top, bottom in ratios]
    if min(per_unit) <= 0:
        return None, "the resolution tags are zero"
    for resolution in per_unit:
        dpi = resolution * 25400.0 / um
        for default in DEFAULT_DPI:
            if math.isclose(dpi, default, rel_tol=1e-3):  # 72 dpi is also written as 28.35 per centimetre
                return None, f"the resolution tags say {default:g} dpi, a program's default and no calibration"
    return (um / per_unit[0], um / per_unit[1]), f"TIFF resolution tags, {per_unit[0]:.9g} px per {name}"


def read_ome(xml: str) -> Ome:
    """Return what OME-XML says about scale and depth.

    Parameters
    ----------
    xml : str
        Image description of the file's first page.

    Returns
    -------
    Ome
        A size that is missing, not positive, in pixels, or not the same for all images gives no scale.

    Notes
    -----
    Document types and entities are refused: nothing outside the text is ever read, and none grows.

    References
    ----------
    .. [1] OME-XML schema 2016-06, Pixels: PhysicalSizeX, PhysicalSizeXUnit (default um), SignificantBits.
    """
    pixels: list[dict[str, str]] = []

    def _start(name: str, attributes: dict[str, str]) -> None:
        if name.rpartition(" ")[2] == "Pixels":
            pixels.append(attributes)

    def _refuse(*_: object) -> None:
        msg = "it holds a document type"
        raise ValueError(msg)

    parser = expat.ParserCreate(namespace_separator=" ")
    parser.StartElementHandler = _start
    parser.StartDoctypeDeclHandler = _refuse
    parser.EntityDeclHandler = _refuse
    try:
        parser.Parse(xml, True)  # noqa: FBT003  (expat takes it by position only)
    except (expat.ExpatError, ValueError) as error:
        return Ome(um_per_px=None, origin=f"its OME-XML is refused: {error}")

    bits = {p.get("SignificantBits", "") for p in pixels}
    depth = int(bits.pop()) if len(bits) == 1 and min(bits).isdecimal() else None
    sizes = {tuple(p.get(f"PhysicalSize{axis}{what}") for axis in "XY" for what in ("", "Unit")) for p in pixels}
    if len(sizes) != 1:
        return Ome(um_per_px=None, origin="its OME-XML has no one physical size", significant_bits=depth)
    x, x_unit, y, y_unit = sizes.pop()
    try:
        um = _ome_length(x, x_unit), _ome_length(y, y_unit)
    except ValueError as error:
        return Ome(um_per_px=None, origin=f"its OME-XML gives no scale: {error}", significant_bits=depth)
    return Ome(um_per_px=um, origin="OME-XML PhysicalSizeX and PhysicalSizeY", significant_bits=depth)


def _ome_length(size: str | None, unit: str | None) -> float:
    if size is None:
        msg = "a physical size is missing"
        raise ValueError(msg)
    factor = _UM_PER_OME_UNIT.get(unit or "µm")
    if factor is None:
        msg = f"{unit!r} is no unit of length it can be turned into um from"
        raise ValueError(msg)
    length = float(size) * factor
    if not (math.isfinite(length) and length > 0):
        msg = f"a physical size is {size}"
        raise ValueError(msg)
    return length
