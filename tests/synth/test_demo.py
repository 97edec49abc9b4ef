"""The demo set, and the copy of it that comes with the project."""

import csv
import re
import tomllib
from pathlib import Path

import cv2
import numpy as np
import pytest

from printmetrics.errors import FolderError
from printmetrics.synth.demo import write_demo

SAMPLES = Path(__file__).parents[2] / "sample_images"


@pytest.fixture(scope="module")
def demo(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("demo") / "new" / "folder"
    write_demo(folder)
    return folder


def rows(path: Path) -> list[dict[str, str]]:
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def number(text: str) -> float | str:
    return float(text) if re.fullmatch(r"-?[\d.]+(e-?\d+)?", text) else text


def test_sample_images_are_the_demo(demo: Path) -> None:
    assert sorted(p.name for p in SAMPLES.iterdir()) == sorted(p.name for p in demo.iterdir())
    for name in ("recipe.toml", "README.txt"):
        assert (SAMPLES / name).read_text(encoding="utf-8") == (demo / name).read_text(encoding="utf-8")


@pytest.mark.parametrize("name", ["truth.csv", "truth_events.csv"])
def test_sample_truth_is_the_demo_truth(demo: Path, name: str) -> None:
    kept, made = rows(SAMPLES / name), rows(demo / name)
    assert len(kept) == len(made) > 3
    for one, two in zip(kept, made, strict=True):
        assert one.keys() == two.keys()
        for left, right in zip(map(number, one.values()), map(number, two.values()), strict=True):
            assert left == (right if isinstance(right, str) else pytest.approx(right, rel=1e-5, abs=1e-9))


def test_sample_pictures_are_the_demo_pictures(demo: Path) -> None:
    for path in SAMPLES.glob("R07*"):
        kept, made = (cv2.imread(str(folder / path.name), cv2.IMREAD_UNCHANGED) for folder in (SAMPLES, demo))
        assert kept.dtype == made.dtype
        # Other builds of the mathematics may round a pixel the other way.
        assert np.mean(kept != made) < 0.001


def test_sample_images_stay_small() -> None:
    assert sum(p.stat().st_size for p in SAMPLES.iterdir()) < 4e6


def test_demo_says_that_it_is_invented(demo: Path) -> None:
    assert "INVENTED" in (demo / "README.txt").read_text(encoding="utf-8")


def test_names_of_the_pictures_match_the_recipe(demo: Path) -> None:
    recipe = tomllib.loads((demo / "recipe.toml").read_text(encoding="utf-8"))
    pictures = sorted(demo.glob("R07*"))
    assert len(pictures) == 14
    assert all(re.fullmatch(recipe["images"]["context"], p.stem) for p in pictures)


# Source: slope-equivalent sigma of an aberration-free incoherent edge, 0.235 wavelength / NA; 0.46 um here.
def test_blur_in_the_pictures_is_that_of_the_recipe_s_optics(demo: Path) -> None:
    recipe = tomllib.loads((demo / "recipe.toml").read_text(encoding="utf-8"))
    sigma = 0.235 * recipe["optics"]["wavelength_um"] / recipe["optics"]["na"] / recipe["scale"]["um_per_px"]
    image = cv2.imread(str(demo / "R07_0002.5m_lane1.png"), cv2.IMREAD_UNCHANGED).astype(float)
    # Steepest slope of an edge: contrast / (sqrt(2 pi) sigma), the pixel included.
    steepest = np.median(np.diff(image, axis=1)[:, 80:140].max(axis=1)) / (186 - 58)
    assert 1 / (np.sqrt(2 * np.pi) * steepest) == pytest.approx(np.hypot(sigma, np.sqrt(1 / 6)), rel=0.1)


def test_one_picture_holds_12_bits_in_16(demo: Path) -> None:
    (path,) = demo.glob("*.tif")
    image = cv2.imread(str(path), cv2.IMREAD_UNCHANGED)
    assert image.dtype == np.uint16
    assert 2048 < image.max() < 4096


def test_missing_line_keeps_the_names_of_the_others(demo: Path) -> None:
    items = {row["item"] for row in rows(demo / "truth.csv") if row["image"] == "R07_0032.5m_lane1.png"}
    assert items == {"all", "L1", "L2", "L3", "L5", "L1..L2", "L2..L3"}


def test_folder_with_something_in_it_is_refused(tmp_path: Path) -> None:
    (tmp_path / "mine.txt").touch()
    with pytest.raises(FolderError, match="not empty"):
        write_demo(tmp_path)
    assert [p.name for p in tmp_path.iterdir()] == ["mine.txt"]


def test_folder_that_cannot_be_made_is_refused(tmp_path: Path) -> None:
    (tmp_path / "file").touch()
    with pytest.raises(FolderError, match="cannot write the demo"):
        write_demo(tmp_path / "file" / "demo")
