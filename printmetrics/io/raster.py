"""PNG, JPEG and BMP: checked from the outside, then decoded by OpenCV."""

# ruff: noqa: PLR2004  (offsets, lengths and markers of file formats stand where they are read)

from __future__ import annotations

import os
import re
import struct
import sys
import tempfile
import threading
import zlib
from contextlib import contextmanager, suppress
from typing import TYPE_CHECKING, Any

import numpy as np

from printmetrics.errors import PictureError
from printmetrics.io.decoded import MAX_PIXELS_PER_BYTE, Decoded, check_size, drop_alpha
from printmetrics.io.depth import find_depth
from printmetrics.io.tags import read_exif

if TYPE_CHECKING:
    from collections.abc import Iterator

    from numpy.typing import NDArray

PNG_START = b"\x89PNG\r\n\x1a\n"
JPEG_START = b"\xff\xd8\xff"
BMP_START = b"BM"

_PNG_GREY, _PNG_PALETTE, _PNG_GREY_ALPHA = 0, 3, 4

_DAMAGE = re.compile(r"Corrupt JPEG data|Premature end of JPEG|Inconsistent progression|Invalid SOS|libpng error")
_stderr_lock = threading.Lock()


def decode_png(data: bytes) -> Decoded:
    """Decode a PNG file whose every byte is held by its checksums.

    Parameters
    ----------
    data : bytes
        The file.

    Returns
    -------
    Decoded
        Grey or colour; a palette becomes colour, depths below 8 are spread over 0 to 255.

    Raises
    ------
    PictureError
        When it is truncated, damaged, animated, not opaque, or claims an absurd size.

    References
    ----------
    .. [1] W3C, Portable Network Graphics (PNG) Specification.
    """
    chunks = _png_chunks(data)
    width, height, depth, colour = struct.unpack(">IIBB", chunks[b"IHDR"][:10])
    _check_claim(width, height, len(data))
    if b"acTL" in chunks:
        msg = "it is an animated PNG; save each frame as a picture of its own"
        raise PictureError(msg)
    pixels = _rgb(_decode(data))
    if pixels.dtype != (np.uint16 if depth == 16 else np.uint8):
        msg = f"its {depth} bit data would be read as {pixels.dtype}, with loss; save it as TIFF"
        raise PictureError(msg)
    if colour == _PNG_GREY and b"tRNS" in chunks:
        _check_transparent_grey(pixels, chunks[b"tRNS"], depth)
    if pixels.ndim == 3 and pixels.shape[2] == 4:
        pixels = drop_alpha(pixels, np.iinfo(pixels.dtype).max)
        if colour == _PNG_GREY_ALPHA:  # comes as three equal channels
            pixels = np.ascontiguousarray(pixels[..., 0])
    bits, full_scale = 8 if colour == _PNG_PALETTE else depth, 255
    if depth == 16:
        bits, full_scale = find_depth(pixels, max(chunks.get(b"sBIT") or b"\x10"))
    captured_at, notes = read_exif(chunks.get(b"eXIf", b""))
    return Decoded(pixels=pixels, bits=bits, full_scale=full_scale, captured_at=captured_at, notes=notes)


def decode_jpeg(data: bytes) -> Decoded:
    """Decode a JPEG file, refusing what libjpeg would only warn about.

    Parameters
    ----------
    data : bytes
        The file.

    Returns
    -------
    Decoded
        8 bit grey or colour.

    Raises
    ------
    PictureError
        When it is truncated, damaged, not 8 bit, not grey or RGB, or claims an absurd size.

    Notes
    -----
    JPEG has no checksum: a flipped bit that still decodes without complaint cannot be seen.
    """
    exif = b""
    scan = 0
    frame: tuple[int, int, int, int] | None = None
    for marker, start, body in _jpeg_segments(data):
        if marker == 0xE1 and bytes(body[:6]) == b"Exif\0\0" and not exif:
            exif = bytes(body[6:])
        elif 0xC0 <= marker <= 0xCF and marker not in (0xC4, 0xC8, 0xCC):
            if len(body) < 6:
                break
            frame = struct.unpack(">BHHB", body[:6])
        elif marker == 0xDA:
            scan = start
    if frame is None or not scan:
        msg = "it ends before its pixels begin; the file is truncated or damaged; copy it again from the camera"
        raise PictureError(msg)
    precision, height, width, components = frame
    _check_claim(width, height, len(data))
    if precision != 8 or components not in (1, 3):
        msg = f"it is a JPEG of {components} channels of {precision} bit; save it as PNG or TIFF, grey or RGB"
        raise PictureError(msg)
    # Within a scan 0xFF is followed by 0, so an end mark after its start is the picture's own, not a thumbnail's.
    if data.rfind(b"\xff\xd9", scan) < 0:
        msg = "it is truncated: the end mark is missing; copy it again from the camera"
        raise PictureError(msg)
    captured_at, notes = read_exif(exif)
    return Decoded(pixels=_rgb(_decode(data)), bits=8, full_scale=255, captured_at=captured_at, notes=notes)


def decode_bmp(data: bytes) -> Decoded:
    """Decode an uncompressed BMP file.

    Parameters
    ----------
    data : bytes
        The file.

    Returns
    -------
    Decoded
        8 bit grey or colour.

    Raises
    ------
    PictureError
        When it is truncated, compressed, of a rare kind, or claims an absurd size.
    """
    if len(data) < 54:
        msg = "it is truncated: the header is cut short; copy it again from the camera"
        raise PictureError(msg)
    offset, header_size, width, height, _, depth, compression = struct.unpack_from("<IIiiHHI", data, 10)
    height = abs(height)  # negative: rows run from the top
    plain = compression == 0 or (compression == 3 and depth == 32)
    if header_size < 40 or not plain or depth not in (1, 4, 8, 24, 32):
        msg = f"it is a rare kind of BMP (depth {depth}, compression {compression}); save it as PNG or TIFF"
        raise PictureError(msg)
    _check_claim(width, height, len(data))
    if offset + (width * depth + 31) // 32 * 4 * height > len(data):
        msg = f"it is truncated: {len(data)} bytes cannot hold {width} x {height} px; copy it again from the camera"
        raise PictureError(msg)
    pixels = _rgb(_decode(data))
    if pixels.ndim == 3 and pixels.shape[2] == 4:
        pixels = drop_alpha(pixels, 255)
    return Decoded(pixels=pixels, bits=8, full_scale=255)


def _check_claim(width: int, height: int, size: int) -> None:
    check_size(width, height)
    if width * height > MAX_PIXELS_PER_BYTE * size:
        msg = f"its header claims {width} x {height} px, which a file of {size} bytes cannot hold; it is damaged"
        raise PictureError(msg)


def _png_chunks(data: bytes) -> dict[bytes, bytes]:
    """Return what the file holds beside its pixels, with every checksum verified."""
    view = memoryview(data)
    chunks: dict[bytes, bytes] = {}
    at = len(PNG_START)
    while at + 12 <= len(data):
        (length,) = struct.unpack_from(">I", data, at)
        kind = data[at + 4 : at + 8]
        if not chunks and (kind != b"IHDR" or length != 13):
            msg = "its header is damaged; copy it again from the camera"
            raise PictureError(msg)
        end = at + 8 + length
        if end + 4 > len(data):
            break
        if zlib.crc32(view[at + 4 : end]) != int.from_bytes(view[end : end + 4], "big"):
            msg = f"it is damaged: the checksum of the part at byte {at} does not fit; copy it again from the camera"
            raise PictureError(msg)
        if kind != b"IDAT":
            chunks[kind] = bytes(view[at + 8 : end])
        if kind == b"IEND":
            return chunks
        at = end + 4
    msg = f"it is truncated: {len(data)} bytes, and the end mark is missing; copy it again from the camera"
    raise PictureError(msg)


def _check_transparent_grey(pixels: NDArray[Any], key: bytes, depth: int) -> None:
    """Refuse what OpenCV passes over: the one grey value that means transparent."""
    step = 255 // (2**depth - 1) if depth < 8 else 1
    see_through = np.count_nonzero(pixels == int.from_bytes(key, "big") * step)
    if see_through:
        msg = f"{see_through} of its pixels are transparent; save the picture without transparency"
        raise PictureError(msg)


def _jpeg_segments(data: bytes) -> Iterator[tuple[int, int, memoryview]]:
    """Yield marker, position and content of the segments up to the first scan; stop where they end."""
    view = memoryview(data)
    at = 2
    while at + 4 <= len(data) and data[at] == 0xFF:
        marker = data[at + 1]
        if marker == 0xFF:
            at += 1
            continue
        (length,) = struct.unpack_from(">H", data, at + 2)
        yield marker, at, view[at + 4 : at + 2 + length]
        if marker == 0xDA:
            return
        at += 2 + length


def _decode(data: bytes) -> NDArray[Any]:
    import cv2  # noqa: PLC0415  (slow to import)

    pixels: NDArray[Any] | None = None
    with _libraries_heard() as said, suppress(cv2.error):
        pixels = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
    if pixels is None or _DAMAGE.search(said[0]):
        msg = "its pixel data are damaged or truncated; copy it again from the camera"
        raise PictureError(msg)
    return pixels


def _rgb(pixels: NDArray[Any]) -> NDArray[Any]:
    import cv2  # noqa: PLC0415  (slow to import)

    if pixels.ndim == 2:
        return pixels
    order = cv2.COLOR_BGR2RGB if pixels.shape[2] == 3 else cv2.COLOR_BGRA2RGBA
    colours: NDArray[Any] = cv2.cvtColor(pixels, order)
    return colours


@contextmanager
def _libraries_heard() -> Iterator[list[str]]:
    """Collect what C libraries write to standard error meanwhile: libjpeg tells of damage only there."""
    said = [""]
    with _stderr_lock, tempfile.TemporaryFile() as sink:
        if sys.stderr is not None:
            sys.stderr.flush()
        try:
            kept = os.dup(2)
        except OSError:  # no standard error to listen to
            yield said
            return
        os.dup2(sink.fileno(), 2)
        try:
            yield said
        finally:
            os.dup2(kept, 2)
            os.close(kept)
            sink.seek(0)
            said[0] = sink.read().decode(errors="replace")
