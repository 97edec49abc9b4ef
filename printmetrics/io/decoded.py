"""What every decoder gives, and the rules that hold for all formats."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from printmetrics.errors import PictureError

if TYPE_CHECKING:
    from numpy.typing import NDArray

MAX_PIXELS = 2**29
"""Larger pictures are refused by their header, before memory is taken: 16384 x 32768, a long line-scan frame."""

MAX_PIXELS_PER_BYTE = 1100
"""More pixels a byte than this no PNG, JPEG or BMP can hold: deflate ends at 1032 (RFC 1951), JPEG at 512."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Decoded:
    """One picture as its file stores it.

    Parameters
    ----------
    pixels : ndarray of uint8, uint16 or float32, shape (M, N) or (M, N, 3)
        Stored values, not linearised, not rotated; colour in the order red, green, blue.
    bits : int
        True depth, as far as the file gives evidence of it.
    full_scale : float
        Largest code the camera can give; infinite where there is none (float pictures). [counts]
    hint_um_per_px : (float, float) or None
        Length per pixel in x and y as the file's tags say. [um/px]
    hint_origin : str
        Where the hint comes from, or why there is none.
    captured_at : str or None
        Date and time as the file's tags say, ``YYYY:MM:DD HH:MM:SS``, with offset where it is given.
    notes : tuple of str
        What was done, or left undone, with tags of the file.
    """

    pixels: NDArray[Any]
    bits: int
    full_scale: float
    hint_um_per_px: tuple[float, float] | None = None
    hint_origin: str = "only OME-TIFF and TIFF resolution tags are read as a scale"
    captured_at: str | None = None
    notes: tuple[str, ...] = ()


def check_size(width: int, height: int) -> None:
    """Refuse a header that claims no pixels or far too many.

    Parameters
    ----------
    width, height : int
        As the header says. [px]

    Raises
    ------
    PictureError
        When the size is zero, or above `MAX_PIXELS`.
    """
    if width < 1 or height < 1:
        msg = f"its header claims {width} x {height} px; the file is damaged, or its writing was cut short"
        raise PictureError(msg)
    if width * height > MAX_PIXELS:
        msg = f"its header claims {width} x {height} px, more than the {MAX_PIXELS} px allowed; split the picture"
        raise PictureError(msg)


def drop_alpha(pixels: NDArray[Any], opaque: int) -> NDArray[Any]:
    """Return the colours of a picture whose last channel is opacity.

    Parameters
    ----------
    pixels : ndarray, shape (M, N, 2) or (M, N, 4)
        Picture with opacity.
    opaque : int
        The opacity's largest code.

    Returns
    -------
    ndarray, shape (M, N) or (M, N, 3)
        Picture without it.

    Raises
    ------
    PictureError
        When a pixel is not opaque: what lies behind it is unknown.
    """
    see_through = np.count_nonzero(pixels[..., -1] != opaque)
    if see_through:
        msg = f"{see_through} of its pixels are transparent; save the picture without an alpha channel"
        raise PictureError(msg)
    colours = pixels[..., :-1]
    return np.ascontiguousarray(colours[..., 0] if colours.shape[-1] == 1 else colours)
