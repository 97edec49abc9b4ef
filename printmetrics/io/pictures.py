"""Pictures in: find them, and read one without losing depth, turning it, or guessing."""

from __future__ import annotations

import hashlib
import os
import re
import stat
from dataclasses import dataclass, fields
from fnmatch import fnmatchcase
from pathlib import Path
from typing import TYPE_CHECKING

from printmetrics.errors import FolderError, PictureError
from printmetrics.io.decoded import MAX_PIXELS, Decoded
from printmetrics.io.raster import BMP_START, JPEG_START, PNG_START, decode_bmp, decode_jpeg, decode_png
from printmetrics.io.tiff import TIFF_STARTS, decode_page, page_numbers

if TYPE_CHECKING:
    from collections.abc import Sequence
    from io import BufferedReader

SUFFIXES = (".png", ".tif", ".tiff", ".jpg", ".jpeg", ".bmp")
"""What is found where nothing is asked for by name, in upper or lower case."""


@dataclass(frozen=True, slots=True)
class Found:
    """One picture to read.

    Parameters
    ----------
    path : Path
        Its file.
    name : str
        The file's name; for a page of a multi-page file followed by ``#`` and its number, from 1.
    page : int or None
        Position in the file's chain of directories; None where the file holds one picture.
    """

    path: Path
    name: str
    page: int | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Picture(Decoded):
    """One picture as its file stores it, and the file's fingerprint.

    Parameters
    ----------
    sha256 : str
        Of the file's bytes, in hexadecimal digits; the same for all pages of a file.
    """

    sha256: str


def find_pictures(folder: str | Path, include: Sequence[str] | None = None) -> list[Found]:
    """Return the pictures of a folder, or of one file, in natural order of their names.

    Parameters
    ----------
    folder : str or Path
        Folder, not searched any deeper, or a single file, which is taken whatever its name.
    include : sequence of str, optional
        Patterns of file names such as ``*.tif``, upper and lower case alike. Default: every name with a
        suffix of `SUFFIXES`.

    Returns
    -------
    list of Found
        One for each page. Broken links and damaged files are found, and fail when read. Folders and
        names that begin with a dot are not pictures.

    Raises
    ------
    FolderError
        When the folder does not exist or cannot be listed.
    """
    folder = Path(folder)
    if not folder.is_dir():
        if not os.path.lexists(folder):
            msg = f"{str(folder)!r} does not exist; give a folder of pictures, or one picture"
            raise FolderError(msg)
        return _pages(folder)
    patterns = [p.casefold() for p in (include if include is not None else [f"*{suffix}" for suffix in SUFFIXES])]
    try:
        with os.scandir(folder) as entries:
            names = [entry.name for entry in entries if not entry.name.startswith(".") and not entry.is_dir()]
    except OSError as error:
        msg = f"folder {str(folder)!r} cannot be listed: {error.strerror}"
        raise FolderError(msg) from error
    wanted = [name for name in names if any(fnmatchcase(name.casefold(), pattern) for pattern in patterns)]
    return [found for name in sorted(wanted, key=_natural) for found in _pages(folder / name)]


def read_picture(found: Found) -> Picture:
    """Read one picture.

    Parameters
    ----------
    found : Found
        Which one, as `find_pictures` gives it.

    Returns
    -------
    Picture
        Its pixels as stored, in every format: never turned by an orientation tag, never cut in depth.

    Raises
    ------
    PictureError
        With a plain reason, for whatever cannot be read whole and without loss. The kind of file is told
        by its first bytes, not by its name.
    """
    with _opened(found.path) as file:
        start = _reading(file, 8)
        if start.startswith(TIFF_STARTS):
            # Pages are read one by one from a file that may be large: its digest is kept, its bytes are not.
            digest = _digest(file)
            decoded = decode_page(file, found.page)
        else:
            size = os.fstat(file.fileno()).st_size
            if not size:
                msg = "it is empty (0 bytes); copy it again from the camera"
                raise PictureError(msg)
            decode = next((d for s, d in _DECODERS.items() if start.startswith(s)), None)
            if decode is None:
                msg = f"it is no PNG, TIFF, JPEG or BMP file, whatever its name says: it begins with {start!r}"
                raise PictureError(msg)
            if size > 8 * MAX_PIXELS:
                msg = f"it has {size} bytes, more than a picture of the largest size can have; split it"
                raise PictureError(msg)
            data = start + _reading(file)
            digest = hashlib.sha256(data).hexdigest()
            decoded = decode(data)
    return Picture(sha256=digest, **{field.name: getattr(decoded, field.name) for field in fields(decoded)})


def file_sha256(path: Path) -> str:
    """Return the fingerprint of a file, also of one that cannot be read as a picture.

    Parameters
    ----------
    path : Path
        The file.

    Returns
    -------
    str
        SHA-256 in hexadecimal digits.

    Raises
    ------
    PictureError
        When the file cannot be opened.
    """
    with _opened(path) as file:
        return _digest(file)


_DECODERS = {PNG_START: decode_png, JPEG_START: decode_jpeg, BMP_START: decode_bmp}


def _natural(name: str) -> tuple[list[str | int], str]:
    """Sort ``a2`` before ``a10``, and alike names in one order on every machine."""
    parts = re.split(r"([0-9]+)", name.casefold())
    return [int(part) if at % 2 else part for at, part in enumerate(parts)], name


def _pages(path: Path) -> list[Found]:
    whole = [Found(path, path.name)]
    if path.suffix.casefold() not in (".tif", ".tiff"):
        return whole
    try:
        with _opened(path) as file:
            pages = page_numbers(file)
    except PictureError:
        return whole  # it says why when it is read
    if len(pages) == 1:
        return whole
    return [Found(path, f"{path.name}#{number}", page) for number, page in enumerate(pages, 1)]


def _opened(path: Path) -> BufferedReader:
    try:
        if not stat.S_ISREG(path.stat().st_mode):  # opening a pipe would wait forever
            msg = "it is not a file; give a picture, or a folder of pictures"
            raise PictureError(msg)
        return path.open("rb")
    except OSError as error:
        if path.is_symlink() and not path.exists():
            msg = "it is a broken link: what it points to does not exist"
        else:
            msg = f"it cannot be opened: {error.strerror}; check that it exists and may be read"
        raise PictureError(msg) from error


def _reading(file: BufferedReader, size: int = -1) -> bytes:
    try:
        return file.read(size)
    except OSError as error:
        msg = f"it cannot be read: {error.strerror}; check the disk or the network"
        raise PictureError(msg) from error


_last_digest: tuple[tuple[int, ...], str] = ((), "")


def _digest(file: BufferedReader) -> str:
    """Hash a file, unless it is the one hashed last: the next page of the same file is the usual case."""
    global _last_digest  # noqa: PLW0603  (a cache of one)
    status = os.fstat(file.fileno())
    identity = (status.st_dev, status.st_ino, status.st_size, status.st_mtime_ns)
    known, digest = _last_digest
    if identity != known:
        try:
            file.seek(0)
            digest = hashlib.file_digest(file, "sha256").hexdigest()
        except OSError as error:
            msg = f"it cannot be read: {error.strerror}; check the disk or the network"
            raise PictureError(msg) from error
        _last_digest = identity, digest
    return digest
