"""Finding pictures, and telling plainly what cannot be read."""

import hashlib
import os
import subprocess
import sys
from pathlib import Path

import cv2
import numpy as np
import pytest
import tifffile

from printmetrics.errors import FolderError, PictureError
from printmetrics.io.pictures import Found, file_sha256, find_pictures, read_picture

PNG = cv2.imencode(".png", np.full((3, 4), 7, np.uint8))[1].tobytes()


def names(*args: object) -> list[str]:
    return [found.name for found in find_pictures(*args)]


def failure(path: Path) -> str:
    with pytest.raises(PictureError, match=r".") as caught:
        read_picture(Found(path, path.name))
    return str(caught.value)


def test_names_are_sorted_as_a_person_counts(tmp_path: Path) -> None:
    for name in ("web10.png", "web9.png", "Web2.png", "web2b.png", "a.png", "10.png", "9.png"):
        (tmp_path / name).write_bytes(PNG)
    assert names(tmp_path) == ["9.png", "10.png", "a.png", "Web2.png", "web2b.png", "web9.png", "web10.png"]


def test_every_readable_suffix_is_found_in_upper_and_lower_case(tmp_path: Path) -> None:
    wanted = ["a.BMP", "b.jpg", "c.JPEG", "d.PNG", "e.tif", "f.TIFF"]
    for name in [*wanted, "notes.txt", "x.csv", ".hidden.png", "._d.PNG"]:
        (tmp_path / name).write_bytes(PNG)
    assert names(tmp_path) == wanted


def test_include_chooses_by_name(tmp_path: Path) -> None:
    for name in ("bus_1.png", "BUS_2.PNG", "pad_1.png", "bus.dat"):
        (tmp_path / name).write_bytes(PNG)
    assert names(tmp_path, ["bus*"]) == ["bus.dat", "bus_1.png", "BUS_2.PNG"]
    assert names(tmp_path, []) == []


def test_folders_are_not_pictures_and_not_searched(tmp_path: Path) -> None:
    (tmp_path / "x.png").mkdir()
    (tmp_path / "x.png" / "y.png").write_bytes(PNG)
    assert names(tmp_path) == []


def test_one_file_is_taken_whatever_its_name(tmp_path: Path) -> None:
    (tmp_path / "x.dat").write_bytes(PNG)
    assert names(tmp_path / "x.dat") == ["x.dat"]
    tifffile.imwrite(tmp_path / "y.tif", np.zeros((2, 8, 8), np.uint8), photometric="minisblack")
    assert names(tmp_path / "y.tif") == ["y.tif#1", "y.tif#2"]


def test_a_missing_folder_is_named(tmp_path: Path) -> None:
    with pytest.raises(FolderError, match="does not exist; give a folder"):
        find_pictures(tmp_path / "nowhere")


@pytest.mark.parametrize(
    "name", ["a b.png", "it's.png", 'q".png', "a,b;c.png", "two\nlines.png", "=1+1.png", "線幅.png", "ширина.png"]
)
def test_any_name_is_read(tmp_path: Path, name: str) -> None:
    (tmp_path / name).write_bytes(PNG)
    (found,) = find_pictures(tmp_path)
    assert found.name == name
    assert read_picture(found).pixels.tolist() == [[7] * 4] * 3


@pytest.mark.parametrize("suffix", [".png", ".tif"])
def test_a_name_that_is_no_text_is_read(tmp_path: Path, suffix: str) -> None:
    pixels = np.full((3, 4), 7, np.uint8)
    cv2.imwrite(str(tmp_path / f"x{suffix}"), pixels)
    os.rename(os.fsencode(tmp_path / f"x{suffix}"), os.fsencode(tmp_path) + b"/\xff" + suffix.encode())  # noqa: PTH104
    (found,) = find_pictures(tmp_path)
    np.testing.assert_array_equal(read_picture(found).pixels, pixels)


def test_the_fingerprint_is_of_the_files_bytes(tmp_path: Path) -> None:
    tifffile.imwrite(tmp_path / "x.tif", np.zeros((8, 8), np.uint8))
    (tmp_path / "y.png").write_bytes(PNG)
    for found in find_pictures(tmp_path):
        expected = hashlib.sha256(found.path.read_bytes()).hexdigest()
        assert read_picture(found).sha256 == file_sha256(found.path) == expected


def test_the_fingerprint_follows_a_changed_file(tmp_path: Path) -> None:
    path = tmp_path / "x.bin"
    for content in (b"one", b"other"):
        path.write_bytes(content)
        assert file_sha256(path) == hashlib.sha256(content).hexdigest()


def test_a_picture_of_one_pixel_is_read(tmp_path: Path) -> None:
    cv2.imwrite(str(tmp_path / "x.png"), np.full((1, 1), 9, np.uint8))
    assert read_picture(find_pictures(tmp_path)[0]).pixels.tolist() == [[9]]


def test_a_broken_link_is_found_and_fails_plainly(tmp_path: Path) -> None:
    (tmp_path / "x.tif").symlink_to(tmp_path / "gone.tif")
    (found,) = find_pictures(tmp_path)
    assert failure(found.path) == "it is a broken link: what it points to does not exist"


@pytest.mark.parametrize("suffix", [".png", ".tif", ".jpg", ".bmp"])
def test_an_empty_file_fails_plainly(tmp_path: Path, suffix: str) -> None:
    (tmp_path / f"x{suffix}").touch()
    (found,) = find_pictures(tmp_path)
    assert failure(found.path) == "it is empty (0 bytes); copy it again from the camera"


def test_text_named_as_a_picture_fails_plainly(tmp_path: Path) -> None:
    (tmp_path / "x.png").write_text("not a picture")
    assert failure(tmp_path / "x.png").startswith("it is no PNG, TIFF, JPEG or BMP file, whatever its name says")


def test_a_picture_under_a_wrong_suffix_is_read_by_its_content(tmp_path: Path) -> None:
    (tmp_path / "x.jpg").write_bytes(PNG)
    assert read_picture(find_pictures(tmp_path)[0]).pixels.shape == (3, 4)


def test_a_folder_or_a_pipe_fails_instead_of_waiting(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "x.png")
    (found,) = find_pictures(tmp_path)
    assert failure(found.path) == "it is not a file; give a picture, or a folder of pictures"
    assert failure(tmp_path) == "it is not a file; give a picture, or a folder of pictures"


def test_a_vanished_file_fails_plainly(tmp_path: Path) -> None:
    assert failure(tmp_path / "x.png").startswith("it cannot be opened: No such file")


@pytest.mark.skipif(os.geteuid() == 0, reason="root may read everything")
def test_a_forbidden_file_fails_plainly(tmp_path: Path) -> None:
    (tmp_path / "x.tif").write_bytes(PNG)
    (tmp_path / "x.tif").chmod(0)
    (found,) = find_pictures(tmp_path)
    assert failure(found.path).startswith("it cannot be opened: Permission denied")


def test_what_the_system_forbids_is_told_plainly(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "x.tif").write_bytes(PNG)

    def refuse(*_: object) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "open", refuse)
    (found,) = find_pictures(tmp_path)
    assert failure(found.path) == "it cannot be opened: Permission denied; check that it exists and may be read"


def test_importing_the_reader_loads_no_decoder() -> None:
    code = "import sys, printmetrics.io.pictures; print(*({'cv2', 'tifffile', 'imagecodecs'} & sys.modules.keys()))"
    out = subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, text=True)
    assert out.stdout.strip() == ""
