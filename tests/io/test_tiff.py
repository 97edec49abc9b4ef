"""TIFF: every kind a camera or microscope writes, its pages, its scale."""

import io
import struct
from pathlib import Path

import numpy as np
import pytest
import tifffile

from printmetrics.errors import PictureError
from printmetrics.io.pictures import Found, Picture, find_pictures, read_picture
from printmetrics.io.tags import read_ome


def written(path: Path, pixels: np.ndarray, **options: object) -> Path:
    tifffile.imwrite(path, pixels, **options)
    return path


def read(path: Path) -> Picture:
    return read_picture(Found(path, path.name))


def noise(kind: type = np.uint8, *, colour: bool = False) -> np.ndarray:
    shape = (40, 56, 3) if colour else (40, 56)
    return np.random.default_rng(1).integers(0, np.iinfo(kind).max, shape, kind, endpoint=True)


@pytest.mark.parametrize("kind", [np.uint8, np.uint16])
@pytest.mark.parametrize("colour", [False, True])
@pytest.mark.parametrize(
    "options",
    [
        {},
        {"compression": "lzw"},
        {"compression": "zlib", "predictor": True},
        {"compression": "packbits"},
        {"bigtiff": True},
        {"byteorder": ">"},
        {"tile": (16, 16)},
        {"rowsperstrip": 7},
    ],
)
def test_pixels_come_as_stored(tmp_path: Path, kind: type, colour: bool, options: dict[str, object]) -> None:
    pixels = noise(kind, colour=colour)
    picture = read(written(tmp_path / "x.tif", pixels, photometric="rgb" if colour else "minisblack", **options))
    np.testing.assert_array_equal(picture.pixels, pixels)
    assert picture.pixels.dtype == kind
    assert picture.pixels.dtype.isnative
    assert (picture.bits, picture.full_scale) == (np.iinfo(kind).bits, np.iinfo(kind).max)


def test_channels_stored_one_after_the_other_come_last(tmp_path: Path) -> None:
    pixels = noise(colour=True)
    path = written(tmp_path / "x.tif", np.moveaxis(pixels, 2, 0), photometric="rgb", planarconfig="separate")
    np.testing.assert_array_equal(read(path).pixels, pixels)


@pytest.mark.parametrize("compression", ["jpeg", "jpeg2000"])
def test_jpeg_in_tiff_is_read(tmp_path: Path, compression: str) -> None:
    pixels = np.indices((40, 56)).sum(0).astype(np.uint8)
    picture = read(written(tmp_path / "x.tif", np.dstack([pixels, pixels // 2, 255 - pixels]), compression=compression))
    assert picture.pixels.shape == (40, 56, 3)
    assert np.abs(picture.pixels[..., 1].astype(int) - pixels // 2).mean() < 3


@pytest.mark.parametrize("bits", [10, 12, 14])
def test_packed_codes_are_unpacked_with_their_depth(tmp_path: Path, bits: int) -> None:
    codes = noise(np.uint16) >> (16 - bits)
    height, width = codes.shape
    packed = np.packbits(((codes[..., None] >> np.arange(bits)[::-1]) & 1).astype(np.uint8).reshape(height, -1), axis=1)
    tags = {256: width, 257: height, 258: bits, 259: 1, 262: 1, 273: 122, 277: 1, 278: height, 279: packed.size}
    directory = struct.pack("<H", len(tags)) + b"".join(struct.pack("<HHII", t, 4, 1, v) for t, v in tags.items())
    path = tmp_path / "x.tif"
    path.write_bytes(struct.pack("<2sHI", b"II", 42, 8) + directory + bytes(4) + packed.tobytes())
    picture = read(path)
    np.testing.assert_array_equal(picture.pixels, codes)
    assert (picture.bits, picture.full_scale) == (bits, 2**bits - 1)


def test_min_is_white_is_turned(tmp_path: Path) -> None:
    pixels = noise()
    np.testing.assert_array_equal(
        read(written(tmp_path / "x.tif", pixels, photometric="miniswhite")).pixels, 255 - pixels
    )


@pytest.mark.parametrize("photometric", ["minisblack", "miniswhite"])
def test_bilevel_becomes_0_and_255(tmp_path: Path, photometric: str) -> None:
    bright = noise() > 99
    stored = bright if photometric == "minisblack" else ~bright
    picture = read(written(tmp_path / "x.tif", stored, photometric=photometric))
    np.testing.assert_array_equal(picture.pixels, bright * np.uint8(255))
    assert (picture.pixels.dtype, picture.bits) == (np.uint8, 1)


@pytest.mark.parametrize(("factor", "kind"), [(257, np.uint8), (256, np.uint8), (250, np.uint16)])
def test_palette_becomes_colour(tmp_path: Path, factor: int, kind: type) -> None:
    colours = np.random.default_rng(5).integers(0, 256, (3, 256)).astype(np.uint16)
    indices = noise()
    path = written(tmp_path / "x.tif", indices, photometric="palette", colormap=colours * np.uint16(factor))
    expected = (colours if kind is np.uint8 else colours * np.uint16(factor)).T[indices]
    picture = read(path)
    np.testing.assert_array_equal(picture.pixels, expected)
    assert picture.pixels.dtype == kind


def test_a_damaged_palette_is_refused(tmp_path: Path) -> None:
    path = written(tmp_path / "x.tif", noise(), photometric="palette", colormap=np.zeros((3, 256), np.uint16))
    with tifffile.TiffFile(path, mode="r+") as tif:
        tif.pages[0].tags[320].overwrite([1, 2, 3])
    with pytest.raises(PictureError, match="palette is missing or damaged"):
        read(path)


@pytest.mark.parametrize("kind", [np.float16, np.float32, np.float64])
def test_floats_become_float32(tmp_path: Path, kind: type) -> None:
    pixels = np.random.default_rng(1).normal(0, 1, (9, 7)).astype(kind)
    picture = read(written(tmp_path / "x.tif", pixels))
    np.testing.assert_array_equal(picture.pixels, pixels.astype(np.float32))
    assert picture.pixels.dtype == np.float32
    assert picture.full_scale == float("inf")


@pytest.mark.parametrize("bad", [np.nan, np.inf, 1e300])
def test_pixels_that_are_no_number_are_refused(tmp_path: Path, bad: float) -> None:
    pixels = np.ones((9, 7))
    pixels[2, 3] = bad
    with pytest.raises(PictureError, match="1 of its pixels are not a finite number"):
        read(written(tmp_path / "x.tif", pixels))


@pytest.mark.parametrize("kind", [np.int8, np.int16, np.int32, np.uint32])
def test_other_integers_become_float32_where_that_is_exact(tmp_path: Path, kind: type) -> None:
    pixels = noise(np.int8).astype(kind)
    picture = read(written(tmp_path / "x.tif", pixels))
    np.testing.assert_array_equal(picture.pixels, pixels)
    assert picture.pixels.dtype == np.float32


@pytest.mark.parametrize("kind", [np.int32, np.uint32])
def test_integers_beyond_24_bits_are_refused(tmp_path: Path, kind: type) -> None:
    with pytest.raises(PictureError, match="more than the 24 bits"):
        read(written(tmp_path / "x.tif", np.array([[1, 2**24 + 1]], kind)))


@pytest.mark.parametrize("kind", [np.complex64, np.int64, np.uint64])
def test_what_cannot_be_read_without_loss_is_refused(tmp_path: Path, kind: type) -> None:
    with pytest.raises(PictureError, match="cannot be read without loss"):
        read(written(tmp_path / "x.tif", np.ones((9, 7), kind)))


def test_opaque_alpha_is_dropped_and_transparency_refused(tmp_path: Path) -> None:
    pixels = np.dstack([noise(colour=True), np.full((40, 56), 255, np.uint8)])
    options = {"photometric": "rgb", "extrasamples": ["unassalpha"]}
    np.testing.assert_array_equal(read(written(tmp_path / "x.tif", pixels, **options)).pixels, pixels[..., :3])
    pixels[3, 4, 3] = 0
    with pytest.raises(PictureError, match="1 of its pixels are transparent"):
        read(written(tmp_path / "y.tif", pixels, **options))


@pytest.mark.parametrize("photometric", ["ycbcr", "cfa", "cielab"])
def test_other_colours_are_refused(tmp_path: Path, photometric: str) -> None:
    pixels = noise() if photometric == "cfa" else noise(colour=True)
    with pytest.raises(PictureError, match="save it as grey, RGB or palette"):
        read(written(tmp_path / "x.tif", pixels, photometric=photometric))


def test_orientation_is_noted_and_not_applied(tmp_path: Path) -> None:
    pixels = noise(np.uint16)
    picture = read(written(tmp_path / "x.tif", pixels, extratags=[(274, "H", 1, 6, True)]))
    np.testing.assert_array_equal(picture.pixels, pixels)
    assert picture.notes == ("orientation tag 6 not applied: pixels are taken as stored",)


def test_date_and_time_come_as_written(tmp_path: Path) -> None:
    path = written(tmp_path / "x.tif", noise(), datetime="2026:01:31 08:15:00")
    assert read(path).captured_at == "2026:01:31 08:15:00"


def test_12_bit_data_that_saturate_are_known_by_their_plateau(tmp_path: Path) -> None:
    codes = np.random.default_rng(1).normal(4000, 200, (99, 99)).clip(0, 4095).astype(np.uint16)
    picture = read(written(tmp_path / "x.tif", codes))
    assert (picture.bits, picture.full_scale) == (12, 4095)


def test_largest_sample_value_tag_gives_the_depth(tmp_path: Path) -> None:
    codes = noise(np.uint16) >> 6
    codes.ravel()[:] = np.minimum(codes.ravel(), 900)
    path = written(tmp_path / "x.tif", codes, extratags=[(281, "H", 1, 1023, True)])
    assert read(path).bits == 10


# Pages


def test_each_page_is_a_picture(tmp_path: Path) -> None:
    stack = np.random.default_rng(1).integers(0, 256, (3, 20, 30), np.uint8)
    written(tmp_path / "x.tif", stack, photometric="minisblack")
    found = find_pictures(tmp_path)
    assert [f.name for f in found] == ["x.tif#1", "x.tif#2", "x.tif#3"]
    for one, pixels in zip(found, stack, strict=True):
        np.testing.assert_array_equal(read_picture(one).pixels, pixels)
    assert len({read_picture(one).sha256 for one in found}) == 1


def test_each_plane_of_ome_is_a_picture(tmp_path: Path) -> None:
    stack = np.random.default_rng(1).integers(0, 256, (2, 3, 20, 30), np.uint8)
    written(tmp_path / "x.ome.tif", stack, metadata={"axes": "ZCYX"}, photometric="minisblack")
    found = find_pictures(tmp_path)
    assert len(found) == 6
    np.testing.assert_array_equal(read_picture(found[4]).pixels, stack[1, 1])


def test_smaller_versions_are_no_pictures(tmp_path: Path) -> None:
    with tifffile.TiffWriter(tmp_path / "x.tif") as tif:
        tif.write(noise(), subifds=1, metadata=None)
        tif.write(noise()[::2, ::2], subfiletype=1, metadata=None)
        tif.write(noise()[::4, ::4], subfiletype=1, metadata=None)
    found = find_pictures(tmp_path)
    assert [f.name for f in found] == ["x.tif"]
    np.testing.assert_array_equal(read_picture(found[0]).pixels, noise())


def test_a_thumbnail_before_the_picture_is_passed_over(tmp_path: Path) -> None:
    with tifffile.TiffWriter(tmp_path / "x.tif") as tif:
        tif.write(noise()[::4, ::4], subfiletype=1, metadata=None)
        tif.write(noise(), metadata=None)
    np.testing.assert_array_equal(read_picture(find_pictures(tmp_path)[0]).pixels, noise())


def test_finding_pages_decodes_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    written(tmp_path / "x.tif", np.zeros((3, 20, 30), np.uint8), photometric="minisblack")
    monkeypatch.setattr(tifffile.TiffPage, "asarray", lambda *_: pytest.fail("pixels were decoded"))
    assert len(find_pictures(tmp_path)) == 3


def test_pages_under_another_suffix_are_refused_not_lost(tmp_path: Path) -> None:
    written(tmp_path / "x.tif", np.zeros((3, 20, 30), np.uint8), photometric="minisblack")
    (tmp_path / "x.tif").rename(tmp_path / "x.png")
    with pytest.raises(PictureError, match="it holds 3 pictures"):
        read(tmp_path / "x.png")


def test_a_stack_behind_one_header_is_refused_not_cut(tmp_path: Path) -> None:
    stack = np.zeros((5, 20, 30), np.uint8)
    path = written(tmp_path / "x.tif", stack, imagej=True, truncate=True)
    assert len(find_pictures(tmp_path)) == 1
    with pytest.raises(PictureError, match="it holds 5 pictures behind one header"):
        read(path)


def test_a_broken_chain_of_pages_is_one_picture_that_fails(tmp_path: Path) -> None:
    path = written(tmp_path / "x.tif", np.zeros((3, 20, 30), np.uint8), photometric="minisblack", metadata=None)
    with tifffile.TiffFile(path) as tif:
        last = tif.pages[2].offset
    path.write_bytes(path.read_bytes()[:last])
    found = find_pictures(tmp_path)
    assert [f.name for f in found] == ["x.tif"]
    with pytest.raises(PictureError, match="damaged"):
        read_picture(found[0])


# Damage


@pytest.mark.parametrize("compression", [None, "lzw", "zlib", "packbits", "jpeg", "jpeg2000"])
@pytest.mark.parametrize("tile", [None, (16, 16)])
@pytest.mark.parametrize("kept", [0.01, 0.3, 0.9, 0.999])
def test_a_truncated_tiff_is_refused(
    tmp_path: Path, compression: str, tile: tuple[int, int] | None, kept: float
) -> None:
    path = written(tmp_path / "x.tif", noise(), compression=compression, tile=tile)
    data = path.read_bytes()
    path.write_bytes(data[: int(len(data) * kept)])
    with pytest.raises(PictureError, match=r"truncated|damaged|no PNG"):
        read(path)


def test_a_missing_tile_is_not_filled_with_black(tmp_path: Path) -> None:
    path = written(tmp_path / "x.tif", noise(), tile=(16, 16))
    with tifffile.TiffFile(path, mode="r+") as tif:
        tif.pages[0].tags[325].overwrite([0, *tif.pages[0].databytecounts[1:]])
    with pytest.raises(PictureError, match="truncated"):
        read(path)


def test_flipped_bits_never_crash_and_never_speak(tmp_path: Path, capfd: pytest.CaptureFixture[str]) -> None:
    data = written(tmp_path / "x.tif", noise()[:9, :9], compression="zlib").read_bytes()
    rng = np.random.default_rng(4)
    refused = 0
    for _ in range(300):
        flipped = bytearray(data)
        for at in rng.integers(0, len(data), 3):
            flipped[at] ^= 1 << int(rng.integers(8))
        (tmp_path / "x.tif").write_bytes(flipped)
        find_pictures(tmp_path)
        try:
            read(tmp_path / "x.tif")
        except PictureError:
            refused += 1
    assert refused > 150
    assert capfd.readouterr().err == ""


def test_an_absurd_size_is_refused_by_the_header(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = written(tmp_path / "x.tif", noise())
    with tifffile.TiffFile(path, mode="r+") as tif:
        tif.pages[0].tags[256].overwrite(2**31 - 1, dtype="I")
    monkeypatch.setattr(tifffile.TiffPage, "asarray", lambda *_, **__: pytest.fail("memory was taken"))
    with pytest.raises(PictureError, match="its header claims 2147483647 x 40 px"):
        read(path)


def test_absurd_tiles_are_refused_by_the_header(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = written(tmp_path / "x.tif", noise(), tile=(16, 16))
    with tifffile.TiffFile(path, mode="r+") as tif:
        tif.pages[0].tags[322].overwrite(2**30, dtype="I")
        tif.pages[0].tags[323].overwrite(2**30, dtype="I")
    monkeypatch.setattr(tifffile.TiffPage, "asarray", lambda *_, **__: pytest.fail("memory was taken"))
    with pytest.raises(PictureError, match="claims tiles"):
        read(path)


# Scale


@pytest.mark.parametrize(
    ("resolution", "unit", "um"),
    [
        # TIFF 6.0: pixels per unit; 25400 per inch is 1 um.
        ((25400, 12700), "inch", (1.0, 2.0)),
        ((20000, 20000), "centimeter", (0.5, 0.5)),
    ],
)
def test_resolution_tags_give_a_scale(
    tmp_path: Path, resolution: tuple[float, float], unit: str, um: tuple[float, float]
) -> None:
    picture = read(written(tmp_path / "x.tif", noise(), resolution=resolution, resolutionunit=unit))
    assert picture.hint_um_per_px == pytest.approx(um)
    assert "TIFF resolution tags" in picture.hint_origin


@pytest.mark.parametrize(
    ("resolution", "unit", "why"),
    [
        ((72, 72), "inch", "72 dpi, a program's default"),
        ((96, 96), "inch", "96 dpi, a program's default"),
        ((300, 300), "inch", "300 dpi, a program's default"),
        ((28.35, 28.35), "centimeter", "72 dpi, a program's default"),
        ((118.11, 118.11), "centimeter", "300 dpi, a program's default"),
        ((25400, 25400), "none", "no unit of length"),
        ((0, 0), "inch", "are zero"),
    ],
)
def test_a_default_or_empty_resolution_is_no_scale(
    tmp_path: Path, resolution: tuple[float, float], unit: str, why: str
) -> None:
    picture = read(written(tmp_path / "x.tif", noise(), resolution=resolution, resolutionunit=unit))
    assert picture.hint_um_per_px is None
    assert why in picture.hint_origin


def test_ome_physical_size_goes_before_resolution_tags(tmp_path: Path) -> None:
    metadata = {
        "axes": "YX",
        "PhysicalSizeX": 650,
        "PhysicalSizeXUnit": "nm",
        "PhysicalSizeY": 0.7,
        "SignificantBits": 12,
    }
    codes = noise(np.uint16) >> 4
    codes.ravel()[:] = np.minimum(codes.ravel(), 4000)
    path = written(tmp_path / "x.ome.tif", codes, metadata=metadata, resolution=(25400, 25400), resolutionunit="inch")
    picture = read(path)
    assert picture.hint_um_per_px == pytest.approx((0.65, 0.7))
    assert picture.hint_origin == "OME-XML PhysicalSizeX and PhysicalSizeY"


def ome(attributes: str) -> str:
    schema = "http://www.openmicroscopy.org/Schemas/OME/2016-06"
    return f'<?xml version="1.0"?><OME xmlns="{schema}"><Image><Pixels {attributes}/></Image></OME>'


@pytest.mark.parametrize(
    ("attributes", "why"),
    [
        (
            'PhysicalSizeX="1" PhysicalSizeXUnit="pixel" PhysicalSizeY="1" PhysicalSizeYUnit="pixel"',
            "'pixel' is no unit",
        ),
        ('PhysicalSizeX="1"', "a physical size is missing"),
        ("", "a physical size is missing"),
        ('PhysicalSizeX="0" PhysicalSizeY="0"', "a physical size is 0"),
        ('PhysicalSizeX="nan" PhysicalSizeY="1"', "a physical size is nan"),
        ('PhysicalSizeX="x" PhysicalSizeY="1"', "could not convert"),
    ],
)
def test_a_missing_or_senseless_ome_size_stays_missing(attributes: str, why: str) -> None:
    found = read_ome(ome(attributes))
    assert found.um_per_px is None
    assert why in found.origin


def test_ome_default_unit_is_um_and_depth_is_read() -> None:
    found = read_ome(ome('PhysicalSizeX="0.5" PhysicalSizeY="0.25" SignificantBits="12"'))
    assert (found.um_per_px, found.significant_bits) == ((0.5, 0.25), 12)


@pytest.mark.parametrize(
    "document_type",
    [
        '<!DOCTYPE OME [<!ENTITY a "1">]>',
        '<!DOCTYPE OME SYSTEM "file:///etc/hostname">',
    ],
)
def test_document_types_in_ome_are_refused(document_type: str) -> None:
    text = ome('PhysicalSizeX="&a;" PhysicalSizeY="1"').replace("<OME", document_type + "<OME")
    assert read_ome(text).origin == "its OME-XML is refused: it holds a document type"


def test_a_document_type_costs_the_scale_not_the_picture(tmp_path: Path) -> None:
    text = ome('PhysicalSizeX="1" PhysicalSizeY="1"').replace("<OME", "<!DOCTYPE OME><OME")
    picture = read(written(tmp_path / "x.tif", noise(), description=text, metadata=None))
    assert picture.hint_um_per_px is None
    assert "document type" in picture.hint_origin


def test_images_of_different_scale_give_none() -> None:
    text = ome('PhysicalSizeX="1" PhysicalSizeY="1"')
    both = text.replace("</OME>", '<Image><Pixels PhysicalSizeX="2" PhysicalSizeY="2"/></Image></OME>')
    assert read_ome(both).origin == "its OME-XML has no one physical size"


def test_pickled_data_are_never_loaded(tmp_path: Path) -> None:
    buffer = io.BytesIO()
    np.save(buffer, np.array([{}], object), allow_pickle=True)
    (tmp_path / "x.tif").write_bytes(buffer.getvalue())
    with pytest.raises(PictureError, match="no PNG, TIFF, JPEG or BMP"):
        read(tmp_path / "x.tif")
