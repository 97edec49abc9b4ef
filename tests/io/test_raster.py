"""PNG, JPEG and BMP: whole, without loss, or refused."""

import struct
import zlib
from pathlib import Path

import cv2
import numpy as np
import pytest

from printmetrics.errors import PictureError
from printmetrics.io.pictures import Found, Picture, read_picture


def read(path: Path, data: bytes) -> Picture:
    path.write_bytes(data)
    return read_picture(Found(path, path.name))


def noise(kind: type = np.uint8, *, colour: bool = False) -> np.ndarray:
    shape = (40, 56, 3) if colour else (40, 56)
    return np.random.default_rng(1).integers(0, np.iinfo(kind).max + 1, shape, kind)


def smooth() -> np.ndarray:
    return (np.indices((40, 56)).sum(0) * 2).astype(np.uint8)


def encoded(suffix: str, pixels: np.ndarray, *options: int) -> bytes:
    """Encode by OpenCV; colour in the order red, green, blue."""
    if pixels.ndim == 3:
        pixels = cv2.cvtColor(pixels, cv2.COLOR_RGB2BGR)
    return cv2.imencode(suffix, pixels, options)[1].tobytes()


def chunk(kind: bytes, body: bytes) -> bytes:
    return struct.pack(">I", len(body)) + kind + body + struct.pack(">I", zlib.crc32(kind + body))


def png(size: tuple[int, int], depth: int, colour: int, rows: list[bytes], extra: bytes = b"") -> bytes:
    """PNG by hand, after the W3C specification."""
    head = chunk(b"IHDR", struct.pack(">IIBBBBB", *size, depth, colour, 0, 0, 0))
    pixels = chunk(b"IDAT", zlib.compress(b"".join(b"\0" + row for row in rows)))
    return b"\x89PNG\r\n\x1a\n" + head + extra + pixels + chunk(b"IEND", b"")


def bmp(size: tuple[int, int], depth: int, palette: bytes, pixels: bytes) -> bytes:
    offset = 54 + len(palette)
    head = struct.pack("<2sIHHI", b"BM", offset + len(pixels), 0, 0, offset)
    info = struct.pack("<IiiHHIIiiII", 40, *size, 1, depth, 0, len(pixels), 0, 0, len(palette) // 4, 0)
    return head + info + palette + pixels


def exif(orientation: int) -> bytes:
    """EXIF block by hand: orientation, and taken 2026-01-31 08:15:01 at +01:00."""
    main = struct.pack(">2sHIH", b"MM", 42, 8, 2)
    main += struct.pack(">HHIHH", 274, 3, 1, orientation, 0) + struct.pack(">HHII", 34665, 4, 1, 38) + bytes(4)
    taken = struct.pack(">H", 2) + struct.pack(">HHII", 36867, 2, 20, 68) + struct.pack(">HHII", 36881, 2, 7, 88)
    return main + taken + bytes(4) + b"2026:01:31 08:15:01\0" + b"+01:00\0"


def jpeg_with_exif(pixels: np.ndarray, block: bytes) -> bytes:
    plain = encoded(".jpg", pixels)
    body = b"Exif\0\0" + block
    return plain[:2] + b"\xff\xe1" + struct.pack(">H", len(body) + 2) + body + plain[2:]


@pytest.mark.parametrize("suffix", [".png", ".bmp"])
@pytest.mark.parametrize("colour", [False, True])
def test_8_bit_pixels_come_as_stored(tmp_path: Path, suffix: str, colour: bool) -> None:
    pixels = noise(colour=colour)
    picture = read(tmp_path / f"x{suffix}", encoded(suffix, pixels))
    np.testing.assert_array_equal(picture.pixels, pixels)
    assert (picture.pixels.dtype, picture.bits, picture.full_scale) == (np.uint8, 8, 255)


@pytest.mark.parametrize("colour", [False, True])
def test_16_bit_png_stays_16_bit(tmp_path: Path, colour: bool) -> None:
    pixels = noise(np.uint16, colour=colour)
    picture = read(tmp_path / "x.png", encoded(".png", pixels))
    np.testing.assert_array_equal(picture.pixels, pixels)
    assert (picture.pixels.dtype, picture.bits, picture.full_scale) == (np.uint16, 16, 65535)


def test_interlaced_png_is_read(tmp_path: Path) -> None:
    # Adam7 of a 1 x 1 picture is one pass of one pixel.
    head = chunk(b"IHDR", struct.pack(">IIBBBBB", 1, 1, 8, 0, 0, 0, 1))
    data = b"\x89PNG\r\n\x1a\n" + head + chunk(b"IDAT", zlib.compress(b"\0\x2a")) + chunk(b"IEND", b"")
    assert read(tmp_path / "x.png", data).pixels.tolist() == [[42]]


@pytest.mark.parametrize(
    ("depth", "row", "values"),
    [(1, b"\xa0", [255, 0, 255, 0]), (2, b"\x1b", [0, 85, 170, 255]), (4, b"\x01\xef", [0, 17, 238, 255])],
)
def test_few_bits_of_png_are_spread_over_8(tmp_path: Path, depth: int, row: bytes, values: list[int]) -> None:
    picture = read(tmp_path / "x.png", png((4, 1), depth, 0, [row]))
    assert picture.pixels.tolist() == [values]
    assert (picture.bits, picture.full_scale) == (depth, 255)


def test_png_palette_becomes_red_green_blue(tmp_path: Path) -> None:
    data = png((2, 1), 8, 3, [b"\0\1"], chunk(b"PLTE", bytes([10, 20, 30, 40, 50, 60])))
    assert read(tmp_path / "x.png", data).pixels.tolist() == [[[10, 20, 30], [40, 50, 60]]]


def test_bmp_palette_becomes_red_green_blue(tmp_path: Path) -> None:
    data = bmp((2, 1), 8, bytes([30, 20, 10, 0, 60, 50, 40, 0]), b"\0\1\0\0")
    assert read(tmp_path / "x.bmp", data).pixels.tolist() == [[[10, 20, 30], [40, 50, 60]]]


def test_bilevel_bmp_becomes_0_and_255(tmp_path: Path) -> None:
    data = bmp((8, 1), 1, b"\0\0\0\0\xff\xff\xff\0", b"\xa5\0\0\0")
    assert read(tmp_path / "x.bmp", data).pixels.tolist() == [[255, 0, 255, 0, 0, 255, 0, 255]]


def test_bmp_whose_rows_run_from_the_top_is_not_upside_down(tmp_path: Path) -> None:
    data = bmp((1, -2), 24, b"", bytes([3, 2, 1, 0, 6, 5, 4, 0]))
    assert read(tmp_path / "x.bmp", data).pixels.tolist() == [[[1, 2, 3]], [[4, 5, 6]]]


def test_opaque_alpha_is_dropped(tmp_path: Path) -> None:
    colour = read(tmp_path / "x.png", png((1, 1), 8, 6, [bytes([1, 2, 3, 255])]))
    grey = read(tmp_path / "y.png", png((2, 1), 16, 4, [b"\x01\x02\xff\xff\x03\x04\xff\xff"]))
    assert colour.pixels.tolist() == [[[1, 2, 3]]]
    assert grey.pixels.tolist() == [[0x0102, 0x0304]]


@pytest.mark.parametrize(
    "data",
    [
        png((1, 1), 8, 6, [bytes([1, 2, 3, 254])]),
        png((2, 1), 8, 4, [b"\x01\xff\x02\x00"]),
        png((2, 1), 8, 0, [b"\0\1"], chunk(b"tRNS", b"\0\1")),
        png((2, 1), 4, 0, [b"\x37"], chunk(b"tRNS", b"\0\7")),
        png((2, 1), 8, 3, [b"\0\1"], chunk(b"PLTE", bytes(6)) + chunk(b"tRNS", b"\x80")),
    ],
)
def test_transparent_pixels_are_refused(tmp_path: Path, data: bytes) -> None:
    with pytest.raises(PictureError, match="1 of its pixels are transparent"):
        read(tmp_path / "x.png", data)


def test_significant_bits_of_png_give_the_depth(tmp_path: Path) -> None:
    # W3C PNG, sBIT: the samples are scaled to the full depth.
    data = png((2, 1), 16, 0, [b"\x01\x20\x0f\xf0"], chunk(b"sBIT", b"\x0c"))
    picture = read(tmp_path / "x.png", data)
    assert picture.bits == 12


def test_gamma_chunk_does_not_change_pixels(tmp_path: Path) -> None:
    data = png((2, 1), 8, 0, [b"\x10\x80"], chunk(b"gAMA", struct.pack(">I", 45455)))
    assert read(tmp_path / "x.png", data).pixels.tolist() == [[0x10, 0x80]]


@pytest.mark.parametrize("colour", [False, True])
def test_jpeg_is_read_in_its_own_order_of_channels(tmp_path: Path, colour: bool) -> None:
    pixels = np.dstack([smooth(), smooth() // 2, 255 - smooth()]) if colour else smooth()
    picture = read(tmp_path / "x.jpg", encoded(".jpg", pixels, cv2.IMWRITE_JPEG_QUALITY, 100))
    assert np.abs(picture.pixels.astype(int) - pixels).mean() < 2


def test_progressive_jpeg_is_read(tmp_path: Path) -> None:
    picture = read(tmp_path / "x.jpg", encoded(".jpg", smooth(), cv2.IMWRITE_JPEG_PROGRESSIVE, 1))
    assert picture.pixels.shape == (40, 56)


def test_exif_orientation_of_jpeg_is_noted_and_not_applied(tmp_path: Path) -> None:
    picture = read(tmp_path / "x.jpg", jpeg_with_exif(smooth(), exif(6)))
    plain = read(tmp_path / "y.jpg", encoded(".jpg", smooth()))
    np.testing.assert_array_equal(picture.pixels, plain.pixels)
    assert picture.notes == ("orientation tag 6 not applied: pixels are taken as stored",)


def test_exif_time_comes_with_its_offset(tmp_path: Path) -> None:
    assert read(tmp_path / "x.jpg", jpeg_with_exif(smooth(), exif(1))).captured_at == "2026:01:31 08:15:01+01:00"
    assert read(tmp_path / "x.png", png((1, 1), 8, 0, [b"\0"], chunk(b"eXIf", exif(1)))).captured_at is not None


def test_damaged_exif_costs_the_time_not_the_picture(tmp_path: Path) -> None:
    picture = read(tmp_path / "x.jpg", jpeg_with_exif(smooth(), b"MM\0*rubbish"))
    assert picture.captured_at is None
    assert picture.notes == ("the EXIF block cannot be read: no time and no orientation is taken from it",)


def test_png_and_jpeg_give_no_scale(tmp_path: Path) -> None:
    data = png((1, 1), 8, 0, [b"\0"], chunk(b"pHYs", struct.pack(">IIB", 1_000_000, 1_000_000, 1)))
    picture = read(tmp_path / "x.png", data)
    assert picture.hint_um_per_px is None
    assert picture.hint_origin == "only OME-TIFF and TIFF resolution tags are read as a scale"


@pytest.mark.parametrize("suffix", [".png", ".jpg", ".bmp"])
@pytest.mark.parametrize("kept", [0.01, 0.1, 0.5, 0.9, 0.999])
def test_a_truncated_picture_is_refused(tmp_path: Path, suffix: str, kept: float) -> None:
    data = encoded(suffix, noise())
    with pytest.raises(PictureError, match=r"truncated|damaged|no PNG"):
        read(tmp_path / f"x{suffix}", data[: int(len(data) * kept)])


def test_every_flipped_bit_of_png_is_seen(tmp_path: Path) -> None:
    data = encoded(".png", noise()[:8, :8])
    for at in range(8, len(data)):
        flipped = bytearray(data)
        flipped[at] ^= 0x10
        with pytest.raises(PictureError, match=r"truncated|damaged"):
            read(tmp_path / "x.png", bytes(flipped))


def test_damage_that_libjpeg_only_warns_of_is_refused(tmp_path: Path, capfd: pytest.CaptureFixture[str]) -> None:
    data = bytearray(encoded(".jpg", noise()))
    for at in range(len(data) // 2, len(data) // 2 + 200):
        data[at] ^= 0x55
    with pytest.raises(PictureError, match="damaged"):
        read(tmp_path / "x.jpg", bytes(data))
    assert capfd.readouterr().err == ""


def test_a_thumbnail_does_not_hide_a_missing_end(tmp_path: Path) -> None:
    data = jpeg_with_exif(smooth(), exif(1) + b"\xff\xd8 thumbnail \xff\xd9")
    with pytest.raises(PictureError, match="end mark is missing"):
        read(tmp_path / "x.jpg", data[:-2])


def test_too_few_rows_in_a_sound_png_are_refused_in_silence(tmp_path: Path, capfd: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(PictureError, match="pixel data are damaged"):
        read(tmp_path / "x.png", png((8, 4), 8, 0, [b"12345678"]))
    assert capfd.readouterr().err == ""


@pytest.mark.parametrize(
    "data",
    [
        png((2**31 - 1, 2**31 - 1), 8, 0, [b"\0"]),
        b"\xff\xd8\xff\xc0\0\x0b\x08\xff\xff\xff\xff\x01\x01\x11\0\xff\xda\0\x08\x01\x01\0\0\x3f\0\0\xff\xd9",
        bmp((2**31 - 1, 2**31 - 1), 8, bytes(1024), b"\0"),
        png((20000, 20000), 8, 0, [b"\0"]),
    ],
)
def test_an_absurd_size_is_refused_by_the_header(tmp_path: Path, data: bytes, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(cv2, "imdecode", lambda *_: pytest.fail("memory was taken"))
    with pytest.raises(PictureError, match="its header claims"):
        read(tmp_path / "x.png", data)


def test_no_pixels_are_refused(tmp_path: Path) -> None:
    with pytest.raises(PictureError, match="claims 0 x 1 px"):
        read(tmp_path / "x.png", png((0, 1), 8, 0, [b""]))


def test_animated_png_is_refused(tmp_path: Path) -> None:
    data = png((1, 1), 8, 0, [b"\0"], chunk(b"acTL", struct.pack(">II", 2, 0)))
    with pytest.raises(PictureError, match="animated"):
        read(tmp_path / "x.png", data)


def test_12_bit_and_four_channel_jpeg_are_refused(tmp_path: Path) -> None:
    data = encoded(".jpg", smooth())
    at = data.index(b"\xff\xc0")
    with pytest.raises(PictureError, match="1 channels of 12 bit"):
        read(tmp_path / "x.jpg", data[: at + 4] + b"\x0c" + data[at + 5 :])
    with pytest.raises(PictureError, match="4 channels of 8 bit"):
        read(tmp_path / "x.jpg", data[: at + 9] + b"\x04" + data[at + 10 :])


def test_compressed_bmp_is_refused(tmp_path: Path) -> None:
    data = bytearray(encoded(".bmp", smooth()))
    data[30] = 1
    with pytest.raises(PictureError, match="rare kind of BMP"):
        read(tmp_path / "x.bmp", bytes(data))


def test_bytes_after_the_end_do_no_harm(tmp_path: Path) -> None:
    for suffix in (".png", ".jpg", ".bmp"):
        assert read(tmp_path / f"x{suffix}", encoded(suffix, smooth()) + bytes(64)).pixels.shape == (40, 56)
