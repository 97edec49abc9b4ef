"""A scale file is read whole or refused with the remedy."""

import json
from datetime import datetime, timedelta
from pathlib import Path

import pytest

from printmetrics.calibrate.scalefile import ScaleFile, read_scale_file
from printmetrics.errors import PictureError, ScaleError
from printmetrics.flags import Flag

CONTENT = {
    "format": "printmetrics-scale",
    "version": 1,
    "um_per_px": [0.5, 0.25],
    "u_um_per_px": [0.001, 0.002],
    "picture_size_px": [640, 480],
    "made_at": "2026-01-31T08:15:00+01:00",
    "valid_until": "2026-06-30T12:00:00+02:00",
    "target": "ruler, 10 um",
    "certificate": "invented 17",
    "camera": "invented",
    "objective": "10x",
    "magnification": 10,
    "temperature_c": 20.5,
    "software": "printmetrics 0.1.0",
}


def read(folder: Path, content: object) -> ScaleFile:
    path = folder / "a.scale.json"
    path.write_text(content if isinstance(content, str) else json.dumps(content), encoding="utf-8")
    return read_scale_file(path)


def test_a_scale_file_gives_its_scale(tmp_path: Path) -> None:
    scale = read(tmp_path, CONTENT).scale((640, 480))
    assert (scale.x, scale.y, scale.unit) == (0.5, 0.25, "um")
    assert scale.u_relative == pytest.approx(0.008, rel=1e-12)  # the larger of 0.002 and 0.008


def test_a_scale_for_pictures_of_another_size_is_refused(tmp_path: Path) -> None:
    with pytest.raises(
        PictureError, match=r"has 320 x 240 px, but the scale file was made for 640 x 480 px; .*use the scale"
    ):
        read(tmp_path, CONTENT).scale((320, 240))


def test_a_scale_for_any_size_takes_any(tmp_path: Path) -> None:
    assert read(tmp_path, CONTENT | {"picture_size_px": None}).scale((1, 2)).x == 0.5


def test_a_scale_expires(tmp_path: Path) -> None:
    scale_file = read(tmp_path, CONTENT)
    last = datetime.fromisoformat(CONTENT["valid_until"])
    assert scale_file.flags(last) == Flag.NONE
    assert scale_file.flags(last + timedelta(seconds=1)) == Flag.SCALE_EXPIRED
    assert read(tmp_path, CONTENT | {"valid_until": None}).flags() == Flag.NONE
    assert read(tmp_path, CONTENT | {"valid_until": "2000-01-01T00:00:00Z"}).flags() == Flag.SCALE_EXPIRED


@pytest.mark.parametrize("key", [key for key in CONTENT if key not in {"format", "version"}])
def test_a_missing_key_is_named(tmp_path: Path, key: str) -> None:
    content = {k: v for k, v in CONTENT.items() if k != key}
    with pytest.raises(
        ScaleError, match=rf'a\.scale\.json cannot be used: "{key}" is missing; correct it or make it again'
    ):
        read(tmp_path, content)


@pytest.mark.parametrize(
    ("key", "value"),
    [
        ("um_per_px", [0.5, 0.0]), ("um_per_px", [0.5]), ("um_per_px", 0.5), ("um_per_px", ["0.5", 0.5]),
        ("um_per_px", [float("nan"), 0.5]), ("um_per_px", [float("inf"), 0.5]), ("u_um_per_px", [-0.1, 0.1]),
        ("u_um_per_px", None), ("picture_size_px", [640.5, 480]), ("picture_size_px", [0, 480]),
        ("made_at", "2026-01-31T08:15:00"), ("made_at", "yesterday"), ("valid_until", 17), ("camera", 3),
    ],
)  # fmt: skip
def test_a_wrong_value_is_named(tmp_path: Path, key: str, value: object) -> None:
    with pytest.raises(ScaleError, match=rf'"{key}" is wrong; correct it or make it again'):
        read(tmp_path, CONTENT | {key: value})


def test_all_that_is_wrong_is_named_at_once(tmp_path: Path) -> None:
    content = CONTENT | {"um_per_px": 0, "colour": "red"}
    del content["target"]
    with pytest.raises(
        ScaleError, match='"um_per_px" is wrong, "target" is missing, "colour" is not a key of a scale file'
    ):
        read(tmp_path, content)


@pytest.mark.parametrize("damaged", ["", "{", "[" * 100_000, json.dumps(CONTENT)[:-30]])
def test_a_damaged_file_is_refused(tmp_path: Path, damaged: str) -> None:
    with pytest.raises(ScaleError, match=r"is damaged: no valid JSON .*make it again or take it from a copy"):
        read(tmp_path, damaged)


@pytest.mark.parametrize("other", ["[]", "3", "{}", '{"format": "other", "version": 1}'])
def test_another_json_file_is_refused(tmp_path: Path, other: str) -> None:
    with pytest.raises(ScaleError, match=r"is no scale file: .*name the right file"):
        read(tmp_path, other)


@pytest.mark.parametrize("version", [0, 2, "1", None])
def test_another_version_is_refused(tmp_path: Path, version: object) -> None:
    with pytest.raises(ScaleError, match=f"has version {version!r}, this program reads version 1; update"):
        read(tmp_path, CONTENT | {"version": version})


def test_a_binary_file_is_refused(tmp_path: Path) -> None:
    path = tmp_path / "a.scale.json"
    path.write_bytes(b"\x89PNG\xff")
    with pytest.raises(ScaleError, match="is not text in UTF-8"):
        read_scale_file(path)


def test_a_missing_file_is_refused(tmp_path: Path) -> None:
    with pytest.raises(ScaleError, match=r"cannot be read: No such file.*; check its name"):
        read_scale_file(tmp_path / "none.scale.json")
