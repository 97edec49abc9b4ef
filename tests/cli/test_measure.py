"""``printmetrics measure`` as a user meets it: exit codes, tables, reasons. Pictures are invented."""

from __future__ import annotations

import csv
import json
import os
import re
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import cv2
import numpy as np
import pytest
import tifffile
from click.testing import CliRunner, Result

from printmetrics.cli import main
from printmetrics.io.tables import read_table
from printmetrics.measure.kinds import KINDS

if TYPE_CHECKING:
    from collections.abc import Callable

    from printmetrics.measure.options import FeatureOptions
    from printmetrics.measure.readings import Measured
    from printmetrics.measure.sight import Sight


def _measure(folder: Path, *options: str, workers: int = 1) -> Result:
    home = folder.parent
    arguments = ["measure", str(folder), "--recipe", str(home / "recipe.toml"), "--out", str(home / "out")]
    result = CliRunner().invoke(main, [*arguments, "--workers", str(workers), *options], catch_exceptions=False)
    assert "Traceback" not in result.output
    return result


def _table(out: Path, name: str) -> list[dict[str, str]]:
    """Return the cells as they stand in the file."""
    with (out / f"{name}.csv").open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def _encoded(image: Any, suffix: str = ".png") -> bytes:  # noqa: ANN401
    return bytes(cv2.imencode(suffix, image)[1])


def _noise() -> Any:  # noqa: ANN401
    return np.clip(np.random.default_rng(3).normal(120, 20, (240, 160)), 1, 254).astype(np.uint8)


def _flipped(png: bytes) -> bytes:
    middle = len(png) // 2
    return png[:middle] + bytes([png[middle] ^ 0x10]) + png[middle + 1 :]


# What it is -> its bytes, and words of the reason.
BAD: dict[str, tuple[Callable[[bytes], bytes], str]] = {
    "zero bytes": (lambda _: b"", "empty"),
    "truncated": (lambda png: png[: len(png) // 2], "truncated|cut short|ends"),
    "bit-flipped": (_flipped, "damaged|checksum"),
    "text": (lambda _: b"not a picture at all\n", "no PNG, TIFF, JPEG or BMP"),
    "1 x 1": (lambda _: _encoded(np.full((1, 1), 90, np.uint8)), "1 x 1 px"),
    "all black": (lambda _: _encoded(np.zeros((240, 160), np.uint8)), "bus: "),
    "all white": (lambda _: _encoded(np.full((240, 160), 255, np.uint8)), "bus: "),
    "pure noise": (lambda _: _encoded(_noise()), "bus: "),
    "unprinted web": (lambda _: _encoded(_noise() // 8 + 50), "bus: "),
}


@pytest.mark.parametrize("what", BAD)
def test_bad_picture_fails_with_a_plain_reason_and_the_rest_is_measured(folder: Path, png: bytes, what: str) -> None:
    make, words = BAD[what]
    (folder / "bad.png").write_bytes(make(png))
    result = _measure(folder)
    assert result.exit_code == 1
    _check_failed(folder.parent / "out", "bad.png", words)
    assert "bad.png: " in result.stderr


def test_pictures_that_fail_for_one_reason_share_one_line(folder: Path) -> None:
    for name in ("c.png", "d.png", "e.png"):
        (folder / name).touch()
    (folder / "f.png").write_text("no picture")
    lines = _measure(folder).stderr.splitlines()
    assert [line.split(": ")[0] for line in lines] == ["c.png and 2 more", "f.png"]


def _check_failed(out: Path, name: str, words: str) -> None:
    images = {row["image"]: row for row in _table(out, "images")}
    assert {key: row["status"] for key, row in images.items()} == {
        "a.png": "measured",
        "b.png": "measured",
        name: "failed",
    }
    assert any(word in images[name]["reason"] for word in words.split("|")), images[name]["reason"]
    assert "bug" not in images[name]["reason"]
    rows = [row for row in _table(out, "measurements") if row["image"] == name]
    assert {row["quantity"] for row in rows} == {"width_mean", "line_count"}
    assert {row["verdict"] for row in rows} <= {"undecided", "nonconforming"}


def test_picture_with_nan_fails_with_a_plain_reason(folder: Path) -> None:
    pixels = np.full((240, 160), 90, np.float32)
    pixels[100, 80] = np.nan
    tifffile.imwrite(folder / "n.tif", pixels)
    assert _measure(folder).exit_code == 1
    _check_failed(folder.parent / "out", "n.tif", "1 of its pixels are not a finite number")


def test_broken_link_fails_with_a_plain_reason(folder: Path) -> None:
    (folder / "l.png").symlink_to(folder / "gone.png")
    assert _measure(folder).exit_code == 1
    _check_failed(folder.parent / "out", "l.png", "broken link")


def test_picture_smaller_than_the_region_fails_with_both_sizes(folder: Path) -> None:
    _edit(folder, 'direction = "vertical"', 'direction = "vertical"\nregion = [0, 0, 80, 120]')
    (folder / "s.png").write_bytes(_encoded(_noise()[:100]))
    assert _measure(folder).exit_code == 1
    _check_failed(folder.parent / "out", "s.png", "partly outside the picture, which covers 80 x 50 um (160 x 100 px)")


def _edit(folder: Path, old: str, new: str) -> None:
    recipe = folder.parent / "recipe.toml"
    text = recipe.read_text()
    assert old in text
    recipe.write_text(text.replace(old, new))


def test_good_folder_is_measured_and_judged(folder: Path) -> None:
    result = _measure(folder)
    assert result.exit_code == 0, result.output
    out = folder.parent / "out"
    assert [row["status"] for row in _table(out, "images")] == ["measured", "measured"]
    widths = [row for row in _table(out, "measurements") if row["quantity"] == "width_mean"]
    assert [(row["image"], row["item"]) for row in widths] == [(f, i) for f in ("a.png", "b.png") for i in ("L1", "L2")]
    for row in widths:
        assert float(row["value"]) == pytest.approx(10.0, abs=0.3)
        assert (row["verdict"], row["unit"], row["source"], row["revision"]) == ("conforming", "um", "pictures", "0")
        assert row["recipe"] == "two lines 1"
        assert len(row["image_sha256"]) == 64
    assert "2 of 2 pictures measured, 0 failed" in result.stdout


def test_run_is_recorded_so_that_it_can_be_repeated(folder: Path) -> None:
    _measure(folder)
    out = folder.parent / "out"
    run = json.loads((out / "run.json").read_text())
    assert {"printmetrics", "python", "numpy", "scipy", "opencv"} <= run["versions"].keys()
    assert run["pictures"] == {"found": 2, "measured": 2, "failed": 0}
    assert run["decision_rule"]["guard_band"] == "1.645 u"
    first = [{k: v for k, v in row.items() if k != "measured_at"} for row in _table(out, "measurements")]
    again = CliRunner().invoke(
        main,
        ["measure", str(folder), "--recipe", str(out / "recipe" / "recipe.toml"), "--out", str(out), "--workers", "1"],
    )
    assert again.exit_code == 0
    assert [{k: v for k, v in row.items() if k != "measured_at"} for row in _table(out, "measurements")] == first


def test_each_table_has_a_description(folder: Path) -> None:
    _measure(folder)
    for name in ("measurements", "events", "profiles", "images"):
        description = json.loads((folder.parent / "out" / f"{name}.csv-metadata.json").read_text())
        assert description["url"] == f"{name}.csv"


def test_two_workers_give_the_tables_of_one(folder: Path, png: bytes) -> None:
    (folder / "bad.png").write_bytes(png[:99])
    tables = {}
    for workers in (1, 2):
        assert _measure(folder, workers=workers).exit_code == 1
        out = folder.parent / "out"
        tables[workers] = {
            name: [{k: v for k, v in row.items() if k not in ("measured_at", "seconds")} for row in _table(out, name)]
            for name in ("measurements", "events", "profiles", "images")
        }
    assert tables[1] == tables[2]


@pytest.mark.parametrize(
    "name",
    ["with space.png", 'quote".png', "comma, and.png", "new\nline.png", "=1+1.png", "'led.png", "-2.png", "@x.png",
     "линия 線 خط.png", "naïve é.png"],
)  # fmt: skip
def test_odd_file_name_survives_the_round_trip(folder: Path, png: bytes, name: str) -> None:
    (folder / name).write_bytes(png)
    (folder / "a.png").unlink()
    assert _measure(folder, "--pictures", "all").exit_code == 0
    for table in ("images", "measurements"):
        assert {row["image"] for row in read_table(folder.parent / "out" / f"{table}.csv")} == {"b.png", name}
    assert len(list((folder.parent / "out" / "pictures").iterdir())) == 2


def test_no_cell_of_an_odd_name_runs_as_a_formula(folder: Path, png: bytes) -> None:
    (folder / "=cmd.png").write_bytes(png)
    _measure(folder)
    assert {row["image"][0] for row in _table(folder.parent / "out", "images")} == {"a", "b", "'"}


def test_same_picture_under_another_name_is_flagged_on_the_later_one(folder: Path, png: bytes) -> None:
    (folder / "c.png").write_bytes(png)
    _measure(folder)
    flagged = {
        row["image"]: "repeated_picture" in row["flags"] for row in _table(folder.parent / "out", "measurements")
    }
    assert flagged == {"a.png": False, "b.png": False, "c.png": True}


def test_good_picture_is_no_repetition_of_a_twin_that_failed_by_its_name(folder: Path, png: bytes) -> None:
    _edit(folder, "[scale]", "[images]\ncontext = '(?P<lane>[b-z])'\n[scale]")
    (folder / "c.png").write_bytes(png)
    _measure(folder)
    assert [row["status"] for row in _table(folder.parent / "out", "images")] == ["failed", "measured", "measured"]
    assert not any("repeated" in row["flags"] for row in _table(folder.parent / "out", "measurements"))


def test_tag_that_is_not_applied_is_told_once_and_kept_in_the_record(folder: Path) -> None:
    pixels = cv2.imread(str(folder / "a.png"), cv2.IMREAD_GRAYSCALE)
    for name in ("t.tif", "u.tif"):
        tifffile.imwrite(folder / name, pixels, extratags=[(274, "H", 1, 6, False)], metadata=None)
    result = _measure(folder)
    note = "orientation tag 6 not applied: pixels are taken as stored"
    assert result.stderr.count("orientation") == 1
    assert f"note: {note} (2 pictures, such as t.tif)\n" in result.stderr
    run = json.loads((folder.parent / "out" / "run.json").read_text())
    assert run["notes"] == [{"note": note, "pictures": 2, "such_as": "t.tif"}]


def test_set_fills_a_column(folder: Path) -> None:
    _measure(folder, "--set", "lot=L7", "--set", "source=camera 2")
    (pair,) = {(row["lot"], row["source"]) for row in _table(folder.parent / "out", "measurements")}
    assert pair == ("L7", "camera 2")


def test_name_that_does_not_match_the_context_fails_its_picture(folder: Path) -> None:
    _edit(folder, "[scale]", "[images]\ncontext = '(?P<lane>a\\d?)'\n[scale]")
    assert _measure(folder).exit_code == 1
    first, second = _table(folder.parent / "out", "images")
    assert (first["status"], second["status"]) == ("measured", "failed")
    assert r"doesn't match the recipe's context '(?P<lane>a\d?)'; rename" in second["reason"]


def test_unreadable_picture_keeps_what_its_name_says(folder: Path) -> None:
    _edit(folder, "[scale]", "[images]\ncontext = '(?P<lane>.+)'\n[scale]")
    (folder / "c.png").write_bytes(b"")
    assert _measure(folder).exit_code == 1
    assert {row["lane"] for row in _table(folder.parent / "out", "measurements")} == {"a", "b", "c"}


def test_time_in_the_pictures_tags_is_taken_where_the_offset_is_known(folder: Path) -> None:
    pixels = cv2.imread(str(folder / "a.png"), cv2.IMREAD_GRAYSCALE)
    tifffile.imwrite(folder / "t.tif", pixels, datetime="2026:01:31 08:15:00", metadata=None)
    _edit(folder, "[scale]", '[images]\ninclude = ["*.tif"]\ntime_zone = "+01:00"\n[scale]')
    assert _measure(folder).exit_code == 0
    assert {row["captured_at"] for row in _table(folder.parent / "out", "measurements")} == {
        "2026-01-31T08:15:00+01:00"
    }


def test_strict_tells_readings_that_do_not_conform(folder: Path) -> None:
    assert _measure(folder, "--strict").exit_code == 0
    _edit(folder, "upper = 12.0", "upper = 9.0")
    _clear(folder)
    assert _measure(folder).exit_code == 0
    assert _measure(folder, "--strict").exit_code == 3


def _clear(folder: Path) -> None:
    (folder.parent / "out").rename(folder.parent / "earlier")


def test_drawings_are_written_for_those_that_call_for_a_look(folder: Path, png: bytes) -> None:
    (folder / "c.png").write_bytes(png)
    for wanted, number in (("none", 0), ("all", 3), ("none", 0)):
        assert _measure(folder, "--pictures", wanted).exit_code == 0
        assert len(_drawings(folder)) == number
    _clear(folder)
    (folder / "d.png").write_bytes(_encoded(_noise()))
    assert _measure(folder).exit_code == 1
    assert "d.png.png" in _drawings(folder)


def _drawings(folder: Path) -> list[str]:
    pictures = folder.parent / "out" / "pictures"
    return sorted(path.name for path in pictures.iterdir()) if pictures.exists() else []


def test_dry_run_lists_pictures_and_writes_nothing(folder: Path) -> None:
    before = sorted(folder.parent.rglob("*"))
    result = _measure(folder, "--dry-run")
    assert result.exit_code == 0
    assert result.stdout == "a.png\nb.png\n"
    assert "2 pictures would be measured" in result.stderr
    assert sorted(folder.parent.rglob("*")) == before


def _without_limits(folder: Path) -> None:
    recipe = folder.parent / "recipe.toml"
    recipe.write_text(recipe.read_text().partition("[feature.limits]")[0])


def test_recipe_without_limits_shows_what_was_read_and_draws_all(folder: Path) -> None:
    _without_limits(folder)
    result = _measure(folder)
    assert result.exit_code == 0
    widths = [row for row in _table(folder.parent / "out", "measurements") if row["quantity"] == "width_mean"]
    widths.sort(key=lambda row: float(row["value"]))
    (shown,) = (line for line in result.stdout.splitlines() if line.startswith("bus      width_mean"))
    mean = np.mean([float(row["value"]) for row in widths])
    assert shown.split()[2:5] == ["4", f"{mean:.4g}", "um"]
    places = re.findall(r"([\d.]+) \+/- [\d.]+ um, (L\d) in (\w\.png)", shown)
    ends = [widths[0], widths[-1]]
    assert [place[1:] for place in places] == [(row["item"], row["image"]) for row in ends]
    np.testing.assert_allclose([float(p[0]) for p in places], [float(row["value"]) for row in ends], atol=5e-3)
    assert "not judged" in result.stdout
    assert _drawings(folder) == ["a.png.png", "b.png.png"]


def test_quantity_with_limits_is_not_told_twice(folder: Path) -> None:
    assert len(re.findall(r"^bus +width_mean ", _measure(folder).stdout, re.MULTILINE)) == 1


def test_quiet_run_prints_nothing(folder: Path) -> None:
    assert _measure(folder, "--quiet").output == ""


def test_one_picture_may_stand_for_the_folder(folder: Path) -> None:
    arguments = ["measure", str(folder / "b.png"), "--recipe", str(folder.parent / "recipe.toml")]
    assert CliRunner().invoke(main, [*arguments, "--out", str(folder.parent / "out")]).exit_code == 0
    assert [row["image"] for row in _table(folder.parent / "out", "images")] == ["b.png"]


# What is done to the recipe, and what the message must say.
WRONG_RECIPE = [
    ("count = 2", "cuont = 2", ["cuont", "count", "line 12"]),
    ("upper = 12.0", "upper = 7.0", ["reversed", "width_mean"]),
    ("um_per_px = 0.5\n", "", ["scale is missing"]),
    ("um_per_px = 0.5\n", "um_per_px = 0\n", ["um_per_px", "positive"]),
    ("um_per_px = 0.5\n", "um_per_px = -1.0\n", ["um_per_px", "positive"]),
    ("um_per_px = 0.5\n", "um_per_px = nan\n", ["um_per_px", "positive"]),
    ("u_um_per_px = 0.0005\n", "", ["u_um_per_px", "missing"]),
]


@pytest.mark.parametrize(("old", "new", "words"), WRONG_RECIPE)
def test_wrong_recipe_is_refused_before_anything_is_measured(
    folder: Path, old: str, new: str, words: list[str]
) -> None:
    _edit(folder, old, new)
    result = _measure(folder)
    assert result.exit_code == 2
    assert not (folder.parent / "out").exists()
    for word in words:
        assert word in result.stderr


@pytest.mark.parametrize(
    ("options", "words"),
    [(["--set", "colour=red"], "'colour' is no context column"), (["--set", "lot"], "key=value")],
)
def test_wrong_setting_is_refused(folder: Path, options: list[str], words: str) -> None:
    result = _measure(folder, *options)
    assert result.exit_code == 2
    assert words in result.stderr


def test_folder_without_pictures_is_refused(folder: Path) -> None:
    for path in folder.iterdir():
        path.rename(path.with_suffix(".txt"))
    result = _measure(folder)
    assert result.exit_code == 2
    assert "no picture in" in result.stderr
    assert not (folder.parent / "out").exists()


def test_correction_that_cannot_be_read_is_refused(folder: Path) -> None:
    (folder.parent / "flat.tif").write_bytes(b"no picture")
    _edit(folder, "[[feature]]", '[correct]\nflat_field = "flat.tif"\n[[feature]]')
    result = _measure(folder)
    assert result.exit_code == 2
    assert "flat.tif, named in the recipe's [correct], cannot be used" in result.stderr


def test_corrections_are_copied_with_the_recipe(folder: Path) -> None:
    (folder.parent / "fields").mkdir()
    tifffile.imwrite(folder.parent / "fields" / "flat.tif", np.full((240, 160), 200, np.uint8))
    _edit(folder, "[[feature]]", '[correct]\nflat_field = "fields/flat.tif"\n[[feature]]')
    assert _measure(folder).exit_code == 0
    assert (folder.parent / "out" / "recipe" / "fields" / "flat.tif").is_file()


def test_out_that_holds_another_recipes_run_is_refused_and_kept(folder: Path) -> None:
    _measure(folder)
    before = (folder.parent / "out" / "measurements.csv").read_bytes()
    _edit(folder, "upper = 12.0", "upper = 13.0")
    result = _measure(folder)
    assert result.exit_code == 2
    assert "results of another recipe" in result.stderr
    assert "--out" in result.stderr
    assert (folder.parent / "out" / "measurements.csv").read_bytes() == before


def test_out_with_a_foreign_table_is_refused_and_kept(folder: Path) -> None:
    (folder.parent / "out").mkdir()
    (folder.parent / "out" / "measurements.csv").write_text("mine")
    result = _measure(folder)
    assert result.exit_code == 2
    assert "no run.json" in result.stderr
    assert (folder.parent / "out" / "measurements.csv").read_text() == "mine"


@pytest.mark.parametrize("out", ["recipe.toml", "recipe.toml/out", "/proc/out"])
def test_out_that_cannot_be_written_is_refused(folder: Path, out: str) -> None:
    arguments = ["measure", str(folder), "--recipe", str(folder.parent / "recipe.toml")]
    result = CliRunner().invoke(main, [*arguments, "--out", str(folder.parent / out), "--workers", "1"])
    assert result.exit_code == 2
    assert out in result.stderr
    assert "--out" in result.stderr


def test_drawings_inside_the_folder_are_not_taken_for_pictures(folder: Path) -> None:
    arguments = ["measure", str(folder), "--recipe", str(folder.parent / "recipe.toml"), "--out", str(folder)]
    for _ in range(2):
        assert CliRunner().invoke(main, [*arguments, "--pictures", "all", "--workers", "1"]).exit_code == 0
        assert len(_table(folder, "images")) == 2


def test_bug_fails_its_picture_and_leaves_its_traceback_in_the_log(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    kind = KINDS["lines"]
    calls = 0

    def measure(sight: Sight, options: FeatureOptions) -> Measured:
        nonlocal calls
        calls += 1
        if calls == 1:
            msg = "list index out of range"
            raise IndexError(msg)
        return kind.measure(sight, options)

    monkeypatch.setitem(KINDS, "lines", replace(kind, measure=measure))
    result = _measure(folder)
    assert result.exit_code == 1
    first, second = _table(folder.parent / "out", "images")
    assert (first["status"], second["status"]) == ("failed", "measured")
    assert first["reason"] == "bug: IndexError: list index out of range; see run.log"
    log = (folder.parent / "out" / "run.log").read_text()
    assert "a.png" in log
    assert "Traceback (most recent call last)" in log
    withheld = [row for row in _table(folder.parent / "out", "measurements") if row["image"] == "a.png"]
    assert {row["verdict"] for row in withheld} == {"undecided"}


def _many(folder: Path, png: bytes, number: int) -> None:
    for n in range(number):
        (folder / f"p{n:03}.png").write_bytes(png)


def _start(folder: Path, workers: int) -> subprocess.Popen[str]:
    home = folder.parent
    options = ["--recipe", home / "recipe.toml", "--out", home / "out", "--workers", str(workers)]
    # A shell may have started the tests with Ctrl-C ignored, which a process inherits.
    code = "import signal; signal.signal(signal.SIGINT, signal.default_int_handler); "
    code += "from printmetrics.cli import main; main()"
    return subprocess.Popen(
        [sys.executable, "-c", code, "measure", folder, *options],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True,
    )  # fmt: skip


def _wait_for_pictures(folder: Path, number: int) -> None:
    deadline = time.monotonic() + 60
    part = folder.parent / "out" / "images.csv.part"
    while time.monotonic() < deadline:
        if part.exists() and part.read_bytes().count(b"\r\n") > number:
            return
        time.sleep(0.02)
    pytest.fail("no picture was finished")


@pytest.mark.parametrize("workers", [1, 2])
def test_interrupted_run_leaves_what_was_finished(folder: Path, png: bytes, workers: int) -> None:
    _many(folder, png, 300)
    with _start(folder, workers) as run:
        _wait_for_pictures(folder, 3)
        began = time.monotonic()
        os.killpg(run.pid, signal.SIGINT)  # as a terminal does: the workers get it too
        _, stderr = run.communicate(timeout=20)
        assert time.monotonic() - began < 5
    assert run.returncode == 130
    assert "Traceback" not in stderr
    out = folder.parent / "out"
    images = _table(out, "images")
    assert 3 <= len(images) < 302
    assert f"interrupted after {len(images)} of 302 pictures" in stderr
    assert {row["image"] for row in _table(out, "measurements")} == {row["image"] for row in images}
    assert json.loads((out / "run.json").read_text())["status"] == "interrupted"
    assert not list(out.glob("*.part"))


def test_killed_worker_costs_no_picture(folder: Path, png: bytes) -> None:
    _many(folder, png, 20)
    with _start(folder, 2) as run:
        _wait_for_pictures(folder, 2)
        workers = _workers(run.pid)
        os.kill(workers[0], signal.SIGKILL)
        _, stderr = run.communicate(timeout=120)
    assert run.returncode == 0, stderr
    assert len(_table(folder.parent / "out", "images")) == 22


def _workers(parent: int) -> list[int]:
    children = [int(pid) for pid in Path(f"/proc/{parent}/task/{parent}/children").read_text().split()]
    return [pid for pid in children if b"spawn_main" in Path(f"/proc/{pid}/cmdline").read_bytes()]


def test_demo_can_be_measured_with_the_command_it_prints(tmp_path: Path) -> None:
    made = CliRunner().invoke(main, ["demo", str(tmp_path / "demo")])
    assert made.exit_code == 0
    command = made.stdout.splitlines()[-1].split()
    assert command[:2] == ["printmetrics", "measure"]
    result = CliRunner().invoke(main, [*command[1:], "--workers", "1"])
    assert result.exit_code == 0, result.output


def test_demo_refuses_a_folder_that_is_not_empty(folder: Path) -> None:
    result = CliRunner().invoke(main, ["demo", str(folder)])
    assert result.exit_code == 2
    assert "not empty" in result.stderr
