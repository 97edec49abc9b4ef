"""TIFF: its pages, checked, then decoded by tifffile."""

from __future__ import annotations

import math
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, BinaryIO

import numpy as np

from printmetrics.errors import PictureError
from printmetrics.io.decoded import MAX_PIXELS, Decoded, check_size, drop_alpha
from printmetrics.io.depth import find_depth
from printmetrics.io.tags import captured_at, heard, orientation_note, read_ome, resolution_hint

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray
    from tifffile import TiffFile, TiffPage

TIFF_STARTS = (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")

_MIN_IS_WHITE, _MIN_IS_BLACK, _RGB, _PALETTE, _YCBCR = 0, 1, 2, 3, 6
_UNCOMPRESSED, _JPEG = 1, 7
_MAX_SAMPLE_VALUE, _S_MAX_SAMPLE_VALUE = 281, 341


def page_numbers(file: BinaryIO) -> list[int]:
    """Return which directories of a TIFF file are pictures, without decoding any.

    Parameters
    ----------
    file : binary file
        Open at any position.

    Returns
    -------
    list of int
        Positions in the chain of directories, reduced versions and masks left out.

    Raises
    ------
    PictureError
        When the chain is damaged, or there is no picture.
    """
    with _opened(file) as tif:
        return _pictures(tif)


def decode_page(file: BinaryIO, page: int | None) -> Decoded:
    """Decode one page of a TIFF file.

    Parameters
    ----------
    file : binary file
        Open at any position.
    page : int or None
        Position in the chain of directories; None where the file must hold one picture only.

    Returns
    -------
    Decoded
        Bilevel becomes 0 and 255, min-is-white is turned, a palette becomes colour, other integers and
        floats become float32 where no value changes (float64 is rounded).

    Raises
    ------
    PictureError
        When it is truncated, damaged, of a kind that cannot be read without loss, or claims an absurd size.

    References
    ----------
    .. [1] TIFF 6.0. MaxSampleValue and SMaxSampleValue are believed as a depth where they are 2^k - 1.
    """
    with _opened(file) as tif:
        if page is None:
            pictures = _pictures(tif)
            if len(pictures) > 1:
                msg = f"it holds {len(pictures)} pictures; a file of several pages must be named .tif or .tiff"
                raise PictureError(msg)
            page = pictures[0]
        with _refusing("its header is damaged"):
            directory: TiffPage = tif.pages[page].aspage()
            header = _header(directory)
            first = tif.pages.first.description
            stacked = int((tif.imagej_metadata or {}).get("images", 1)) if len(tif.pages) == 1 else 1
        if stacked > 1:
            msg = f"it holds {stacked} pictures behind one header; save each as a page or picture of its own"
            raise PictureError(msg)
        _check_kind(header)
        _check_segments(header, directory, tif.filehandle.size)
        with _refusing("its pixel data are damaged or truncated"):
            stored = directory.asarray(maxworkers=1)
        with _refusing("its tags are damaged"):
            tags = directory.tags
            hint, origin = resolution_hint(tags)
            declared = _declared_bits(tags.valueof(_S_MAX_SAMPLE_VALUE, tags.valueof(_MAX_SAMPLE_VALUE)))
            notes = orientation_note(tags)
            taken = captured_at(tags)
            colours = directory.colormap
    if "<OME" in first:
        ome = read_ome(first)
        declared = ome.significant_bits or declared
        if ome.um_per_px is not None or hint is None:
            hint, origin = ome.um_per_px, ome.origin
    pixels, bits, full_scale = _picture(stored, header, declared, colours)
    return Decoded(
        pixels=pixels,
        bits=bits,
        full_scale=full_scale,
        hint_um_per_px=hint,
        hint_origin=origin,
        captured_at=taken,
        notes=notes,
    )


@contextmanager
def _refusing(what: str) -> Iterator[None]:
    """Turn whatever the decoders raise or log on bad bytes into one plain reason."""
    with heard() as errors:
        try:
            yield
        except PictureError:
            raise
        except Exception as error:  # the decoders raise nearly anything on bad bytes
            msg = f"{what}; copy it again from the camera ({type(error).__name__})"
            raise PictureError(msg) from error
    if errors:
        msg = f"{what}; copy it again from the camera ({errors[0]})"
        raise PictureError(msg)


@contextmanager
def _opened(file: BinaryIO) -> Iterator[TiffFile]:
    import tifffile  # noqa: PLC0415  (slow to import)

    file.seek(0)
    with _refusing("its header is damaged"):
        tif = tifffile.TiffFile(file)
    with tif:
        yield tif


def _pictures(tif: TiffFile) -> list[int]:
    with _refusing("its chain of pages is damaged or truncated"):
        pictures = [at for at, page in enumerate(tif.pages) if not (page.is_reduced or page.is_mask)]
    if not pictures:
        msg = "it holds no picture of full size; copy it again from the camera"
        raise PictureError(msg)
    return pictures


@dataclass(frozen=True, slots=True, kw_only=True)
class _Header:
    """What decides how to read a page, as plain whole numbers: a damaged tag may hold anything."""

    width: int
    height: int
    depth: int
    tile: tuple[int, int]
    samples: int
    extra: int
    bits: int
    photometric: int
    compression: int
    axes: str


def _header(page: TiffPage) -> _Header:
    return _Header(
        width=int(page.imagewidth),
        height=int(page.imagelength),
        depth=int(page.imagedepth),
        tile=(int(page.tilewidth), int(page.tilelength)),
        samples=int(page.samplesperpixel),
        extra=len(page.extrasamples),
        bits=int(page.bitspersample),
        photometric=int(page.tags[262].value),  # no guess whether 0 is black or white
        compression=int(page.compression),
        axes=page.axes,
    )


def _check_kind(header: _Header) -> None:
    check_size(header.width, header.height)
    if math.prod(header.tile) > MAX_PIXELS:
        msg = f"its header claims tiles of {header.tile[0]} x {header.tile[1]} px; it is damaged"
        raise PictureError(msg)
    expected = {_MIN_IS_WHITE: 1, _MIN_IS_BLACK: 1, _RGB: 3, _PALETTE: 1}
    if header.compression == _JPEG:
        expected[_YCBCR] = 3
    colours = expected.get(header.photometric, 0)
    if header.depth != 1 or not colours or header.samples - colours != header.extra or header.extra > 1:
        msg = (
            f"it is a TIFF of {header.samples} channels and photometric kind {header.photometric}; "
            "save it as grey, RGB or palette (a mosaic from the sensor must be turned into colour first)"
        )
        raise PictureError(msg)


def _check_segments(header: _Header, page: TiffPage, size: int) -> None:
    """Refuse data that end too early: tifffile would fill a missing strip or tile with zeros."""
    with _refusing("its header is damaged"):
        counts = [int(count) for count in page.databytecounts]
        ends = [int(offset) + count for offset, count in zip(page.dataoffsets, counts, strict=True)]
        whole = len(counts) == math.prod(page.chunked) and min(counts) > 0
    needed = header.height * -(-header.width * header.samples * header.bits // 8)
    if not whole or max(ends) > size or (header.compression == _UNCOMPRESSED and sum(counts) < needed):
        msg = (
            f"it is truncated: its pixel data end at byte {max(ends)}, or have gaps, in a file of {size}; copy it again"
        )
        raise PictureError(msg)


def _declared_bits(largest: Any) -> int | None:  # noqa: ANN401  (a tag may hold anything)
    largest = largest[0] if isinstance(largest, tuple) else largest
    if isinstance(largest, int) and largest > 1 and (largest & (largest + 1)) == 0:
        return largest.bit_length()
    return None


def _picture(
    stored: NDArray[Any], header: _Header, declared: int | None, colours: NDArray[np.uint16] | None
) -> tuple[NDArray[Any], int, float]:
    if header.axes[:1] == "S":
        stored = np.moveaxis(stored, 0, -1)
    pixels = np.ascontiguousarray(stored, dtype=stored.dtype.newbyteorder("="))
    bits = header.bits
    if pixels.dtype == np.bool_:
        pixels = pixels.view(np.uint8)
    if header.photometric == _PALETTE:
        return _with_palette(pixels, bits, colours)
    if bits == 1:
        pixels, full_scale = pixels * np.uint8(255), 255
    elif pixels.dtype == np.uint16 and bits == 16:  # noqa: PLR2004
        bits, full_scale = find_depth(pixels, declared)
    elif pixels.dtype in (np.uint8, np.uint16):
        full_scale = 2**bits - 1
    else:
        if header.extra or header.photometric == _MIN_IS_WHITE:
            msg = f"it has an alpha channel, or says that 0 is white, and {pixels.dtype} values; save it as plain grey"
            raise PictureError(msg)
        largest = np.iinfo(pixels.dtype).max if pixels.dtype in (np.int8, np.int16) else math.inf
        return _as_float32(pixels), bits, largest
    if header.extra:
        pixels = drop_alpha(pixels, 2**header.bits - 1)
    if header.photometric == _MIN_IS_WHITE:
        pixels = pixels.dtype.type(full_scale) - pixels
    return pixels, bits, full_scale


def _with_palette(
    indices: NDArray[Any], bits: int, colours: NDArray[np.uint16] | None
) -> tuple[NDArray[Any], int, float]:
    if colours is None or colours.shape != (3, 2**bits) or indices.dtype.kind != "u":
        msg = "its palette is missing or damaged; save it as RGB"
        raise PictureError(msg)
    high = (colours >> 8).astype(np.uint8)
    # Colours of 8 bits are written either times 257 or times 256.
    if np.array_equal(high * np.uint16(257), colours) or np.array_equal(high * np.uint16(256), colours):
        return high.T[indices], 8, 255.0
    return np.asarray(colours, np.uint16).T[indices], 16, 65535.0


def _as_float32(pixels: NDArray[Any]) -> NDArray[np.float32]:
    if pixels.dtype.kind not in "fiu" or (pixels.dtype.kind in "iu" and pixels.dtype.itemsize > 4):  # noqa: PLR2004
        msg = f"its pixels are {pixels.dtype}, which cannot be read without loss; save it as 16 bit or float32"
        raise PictureError(msg)
    with np.errstate(over="ignore"):
        small = pixels.astype(np.float32, copy=False)
    if pixels.dtype.kind == "f":
        bad = small.size - np.count_nonzero(np.isfinite(small))
        if bad:
            msg = f"{bad} of its pixels are not a finite number (NaN or infinite); replace them before measuring"
            raise PictureError(msg)
    elif not np.array_equal(small, pixels):
        msg = f"its {pixels.dtype} values need more than the 24 bits of float32; save it as 16 bit or float32"
        raise PictureError(msg)
    return small
