"""From what the camera stored to linear light: gamma, colour, dark and flat field."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

from printmetrics.errors import PictureError

if TYPE_CHECKING:
    from collections.abc import Callable, Iterator

    from numpy.typing import NDArray

Channel = Literal["luminance", "red", "green", "blue"]
Gamma = float | Literal["srgb"]

LUMINANCE = (0.2126, 0.7152, 0.0722)
"""Weights of linear red, green and blue. Source: ITU-R BT.709; IEC 61966-2-1 uses the same primaries."""

_WEIGHTS = {"luminance": LUMINANCE, "red": (1.0, 0.0, 0.0), "green": (0.0, 1.0, 0.0), "blue": (0.0, 0.0, 1.0)}
_ROWS_AT_ONCE = 64


def linear_light(
    pixels: NDArray[Any],
    full_scale: float,
    *,
    gamma: Gamma = 1.0,
    channel: Channel = "luminance",
    dark: NDArray[Any] | None = None,
    flat: NDArray[Any] | None = None,
) -> tuple[NDArray[Any], NDArray[np.bool_] | None]:
    """Return a picture in linear light, and which of its pixels lie at an end of the camera's range.

    Parameters
    ----------
    pixels : ndarray of uint8, uint16 or float32, shape (M, N) or (M, N, 3)
        Stored values; colour in the order red, green, blue. Never written to. [counts]
    full_scale : float
        Largest code of the camera; infinite where there is none. [counts]
    gamma : float or "srgb", optional
        The camera's encoding: it stores light to the power 1 / gamma, or after the sRGB curve.
    channel : {"luminance", "red", "green", "blue"}, optional
        What to take of a colour picture; a grey one, or one whose channels are all equal, is the same in each.
    dark, flat : ndarray, shape (M, N) or (M, N, 3), optional
        Pictures taken with the light off, and of an even field, encoded like `pixels`. [counts]

    Returns
    -------
    image : ndarray, shape (M, N)
        Linear light, float32; a grey picture that needs nothing done is returned as it is, not copied. [counts]
    saturated : ndarray of bool, shape (M, N), or None
        Where any channel that is used reaches `full_scale`, or, for integers, is 0; with a flat field also where
        that reaches `full_scale`. None where there is no such pixel.

    Raises
    ------
    PictureError
        When dark or flat differ in size, when the flat field is nowhere brighter than the dark, or when the
        encoding has no meaning for the values.

    Notes
    -----
    Linear light is ``full_scale * (v / full_scale) ** gamma``; with a flat field
    ``(I - dark) / (flat - dark) * mean(flat - dark)``, each part linearised first. Work is done in bands of
    rows, so that little memory is taken beside the result.

    References
    ----------
    .. [1] IEC 61966-2-1:1999, sRGB (curve from memory: 0.04045, 12.92, 0.055, 1.055, 2.4).
    .. [2] ITU-R BT.709, luminance weights.
    """
    for name, field in (("dark", dark), ("flat field", flat)):
        if field is not None and field.shape[:2] != pixels.shape[:2]:
            msg = (
                f"the {name} has {field.shape[1]} x {field.shape[0]} px, the picture {pixels.shape[1]} x "
                f"{pixels.shape[0]} px; they must be taken with the same camera and region"
            )
            raise PictureError(msg)

    pixels = _grey_if_equal(pixels)
    saturated = _saturated(pixels, full_scale, channel)
    if pixels.ndim == 2 and gamma == 1.0 and dark is None and flat is None:  # noqa: PLR2004
        return pixels, saturated

    image = np.empty(pixels.shape[:2], np.float32)
    light = _light_of(pixels, pixels.dtype, full_scale, gamma, channel)
    offset = None if dark is None else _light_of(dark, pixels.dtype, full_scale, gamma, channel)
    for rows in _bands(image):
        image[rows] = light(rows) if offset is None else light(rows) - offset(rows)
    if flat is not None:
        even = _light_of(flat, pixels.dtype, full_scale, gamma, channel)
        _divide(image, even if offset is None else lambda rows: even(rows) - offset(rows))
        burnt = _saturated(flat, full_scale, channel)
        if burnt is not None:
            saturated = _either(saturated, burnt)
    return image, saturated


def _divide(image: NDArray[np.float32], field: Callable[[slice], NDArray[np.float32]]) -> None:
    """Divide by the flat field over its mean, in place."""
    total, unlit = 0.0, 0
    for rows in _bands(image):
        light = field(rows)
        unlit += int(np.count_nonzero(light <= 0))
        total += float(light.sum(dtype=np.float64))
        if not unlit:
            image[rows] /= light
    if unlit:
        msg = f"{unlit} pixels of the flat field are not brighter than the dark; take it again, evenly lit, not clipped"
        raise PictureError(msg)
    image *= np.float32(total / image.size)


def _bands(image: NDArray[Any]) -> Iterator[slice]:
    return (slice(row, row + _ROWS_AT_ONCE) for row in range(0, len(image), _ROWS_AT_ONCE))


def _grey_if_equal(pixels: NDArray[Any]) -> NDArray[Any]:
    if pixels.ndim == 2:  # noqa: PLR2004
        return pixels
    red = pixels[..., 0]
    for other in (pixels[..., 1], pixels[..., 2]):
        if not all(np.array_equal(red[rows], other[rows]) for rows in _bands(pixels)):
            return pixels
    return np.ascontiguousarray(red)


def _saturated(pixels: NDArray[Any], full_scale: float, channel: Channel) -> NDArray[np.bool_] | None:
    used = [pixels] if pixels.ndim == 2 else [pixels[..., c] for c, w in enumerate(_WEIGHTS[channel]) if w]  # noqa: PLR2004
    clipped: NDArray[np.bool_] | None = None
    for values in used:
        # Two looks without memory first: most pictures have no such pixel.
        if values.max() >= full_scale:
            clipped = _either(clipped, values >= full_scale)
        if values.dtype.kind == "u" and values.min() == 0:
            clipped = _either(clipped, values == 0)
    return clipped


def _either(so_far: NDArray[np.bool_] | None, more: NDArray[np.bool_]) -> NDArray[np.bool_]:
    return more if so_far is None else np.logical_or(so_far, more, out=more)


def _light_of(
    pixels: NDArray[Any], kind: np.dtype[Any], full_scale: float, gamma: Gamma, channel: Channel
) -> Callable[[slice], NDArray[np.float32]]:
    """Return what gives the linear light of some rows, for a picture or a field that must be encoded like it."""
    if pixels.dtype not in (kind, np.float32):  # a mean of pictures may be float
        msg = f"dark or flat field have {pixels.dtype} pixels, the picture {kind}; they must be saved the same way"
        raise PictureError(msg)
    curve = _curve(pixels.dtype, full_scale, gamma)
    if pixels.ndim == 2:  # noqa: PLR2004
        return lambda rows: curve(pixels[rows])
    parts = [(c, np.float32(weight)) for c, weight in enumerate(_WEIGHTS[channel]) if weight]

    def weighed(rows: slice) -> NDArray[np.float32]:
        light = np.zeros(pixels[rows].shape[:2], np.float32)
        for c, weight in parts:
            light += weight * curve(pixels[rows, :, c])
        return light

    return weighed


def _curve(kind: np.dtype[Any], full_scale: float, gamma: Gamma) -> Callable[[NDArray[Any]], NDArray[np.float32]]:
    """Return what turns stored values into linear light; a table for integers."""
    if gamma == 1.0:
        return lambda values: values.astype(np.float32)
    if gamma != "srgb" and not (math.isfinite(gamma) and gamma > 0):
        msg = f"gamma must be a positive number or 'srgb', got {gamma!r}; 1 means that the camera is linear"
        raise PictureError(msg)
    if not math.isfinite(full_scale):
        msg = f"gamma {gamma!r} needs a largest code, which a float picture does not have; give gamma 1 for it"
        raise PictureError(msg)
    if kind.kind == "f":
        return lambda values: _decoded(values, full_scale, gamma)
    table = _decoded(np.arange(np.iinfo(kind).max + 1), full_scale, gamma)
    return lambda values: table[values]


def _decoded(values: NDArray[Any], full_scale: float, gamma: Gamma) -> NDArray[np.float32]:
    share = values / full_scale
    if share.min() < 0:
        msg = f"gamma {gamma!r} has no meaning for values below 0, and there are some; give gamma 1 for this picture"
        raise PictureError(msg)
    if gamma == "srgb":
        light = np.where(share <= 0.04045, share / 12.92, ((share + 0.055) / 1.055) ** 2.4)  # noqa: PLR2004
    else:
        light = share**gamma
    return (light * full_scale).astype(np.float32)
