"""A recipe is read strictly, and what is wrong in it is said with key, line and remedy."""

import json
import math
import pickle
import re
import tomllib
from pathlib import Path

import cv2
import jsonschema
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from printmetrics.errors import PictureError, RecipeError
from printmetrics.flags import Flag
from printmetrics.recipe import CONTEXT_COLUMNS, Recipe, correction_sizes, load_recipe, moment
from printmetrics.recipe.problems import line_numbers

RECIPE = r"""schema = 1
name = "antenna, layer 2"
version = "3"
layer = "M2"

[images]
include = ["*.tif", "*.png"]
context = '(?P<roll>[^_]+)_(?P<position_m>[^_]+)m_lane(?P<lane>\d+)(_(?P<captured_at>.+))?'
time_zone = "+01:00"

[scale]
um_per_px = 0.5
u_um_per_px = 0.0005

[optics]
na = 0.28
wavelength_um = 0.55
illumination = "reflected"

[correct]
gamma = 1.0

[web]
machine_direction = "+y"
cross_direction = "+x"

[[feature]]
name = "first"
kind = "lines"
ink = "dark"

[[feature]]
name = "bus"
kind = "lines"
region = [120, 80, 900, 400]
ink = "bright"
direction = "auto"
centres = [140.0, 240.0, 340.0]
count = 3
edge_level = 0.5
neck_length = 4.0
[feature.limits]
width_mean = { lower = 18.0, target = 20.0, upper = 22.0 }
lwr_3sigma = { upper = 1.5 }
open_count = { upper = 0 }
"""


def load(folder: Path, old: str = "", new: str = "", *, at: str = "") -> Recipe:
    """Load the recipe with `old` replaced by `new`, once, after the text `at`."""
    start = RECIPE.index(at)
    assert old in RECIPE[start:]
    path = folder / "R.toml"
    path.write_text(RECIPE[:start] + RECIPE[start:].replace(old, new, 1), encoding="utf-8")
    return load_recipe(path)


def line_of(text: str, *, at: str = "") -> int:
    return RECIPE[: RECIPE.index(text, RECIPE.index(at))].count("\n") + 1


def test_every_key_of_a_full_recipe_arrives(tmp_path: Path) -> None:
    recipe = load(tmp_path)
    assert (recipe.name, recipe.version, recipe.layer) == ("antenna, layer 2", "3", "M2")
    assert recipe.images.include == ("*.tif", "*.png")
    assert recipe.images.channel == "luminance"
    assert recipe.scale.um_per_px == (0.5, 0.5)
    assert (recipe.optics.na, recipe.optics.illumination) == (0.28, "reflected")
    assert recipe.correct.gamma == 1.0
    assert recipe.web is not None
    assert recipe.web.cross_direction == "+x"
    first, bus = recipe.features
    assert first.region is None
    assert bus.region == (120.0, 80.0, 900.0, 400.0)
    assert bus.limits["width_mean"].upper == 22.0
    assert recipe.notes == ()


BUS = 'name = "bus"'
MISTAKES = {
    # what is written: old, new, after; what must be said: line marker, place, what, remedy
    "mistyped key": ("neck_length", "neck_lenght", BUS, "neck_length", 'feature "bus", key "neck_lenght": unknown',
                     "did you mean 'neck_length'?"),
    "mistyped section": ("[optics]", "[optic]", "", "[optics]", "section [optic]: unknown", "did you mean 'optics'?"),
    "unlike any key": ("na = 0.28", "na = 0.28\nzzz = 1", "", "wavelength_um", '[optics], key "zzz": unknown',
                       "known here: na, wavelength_um, illumination"),
    "unknown quantity": ("width_mean", "width_meen", BUS, "width_mean", 'limits, key "width_meen": unknown quantity',
                         "did you mean 'width_mean'?"),
    "mistyped limit": ("lower =", "lowr =", BUS, "width_mean", 'limits of "width_mean", key "lowr": unknown',
                       "did you mean 'lower'?"),
    "reversed limits": ("lower = 18", "lower = 28", BUS, "width_mean", 'key "width_mean": limits are reversed',
                        "correct it"),
    "mistyped word": ('"bright"', '"brigth"', BUS, "ink", "key \"ink\": must be 'bright' or 'dark', got \"brigth\"",
                      "did you mean 'bright'?"),
    "wrong direction": ('"auto"', '"slanted"', BUS, "direction",
                        "must be 'auto', 'horizontal' or 'vertical' or a number, got \"slanted\"", "Which way"),
    "wrong kind": ('kind = "lines"', 'kind = "cavities"', BUS, "kind", 'key "kind": "cavities" is not available',
                   "known kinds: lines"),
    "kind in colour": ('kind = "lines"', 'kind = "\\u001b[31m"', BUS, "kind", '"\\x1b[31m" is not', "known kinds"),
    "no kind": ('kind = "lines"\n', "", BUS, "[[feature]]", 'feature "bus", key "kind": is missing',
                "known kinds: lines"),
    "no name": (BUS + "\n", "", 'ink = "dark"', "[[feature]]", 'feature 2, key "name": is missing', "add it"),
    "same name": (BUS, 'name = "first"', "", None, "'first' is given 2 times", "give each feature its own name"),
    "falling centres": ("140.0, 240.0", "240.0, 140.0", BUS, "centres", '"centres": centres must rise', "correct it"),
    "count and centres": ("count = 3", "count = 4", BUS, "count", '"count": count is 4 but 3 centres', "correct it"),
    "count with a fraction": ("count = 3", "count = 3.5", BUS, "count", "must be a whole number, got 3.5",
                              "Expected number of lines"),
    "number in quotes": ("count = 3", 'count = "3"', BUS, "count", 'must be a whole number, got "3"',
                         "Expected number of lines"),
    "negative width": ("900, 400", "-900, 400", BUS, "region", 'key "region", entry 3: must be more than 0, got -900',
                       "x, y, width, height"),
    "short region": (", 900, 400", "", BUS, "region", "must be a longer list", "x, y, width, height"),
    "long region": ("400]", "400, 5]", BUS, "region", "must be a list of at most 4", "x, y, width, height"),
    "limits no table": (RECIPE[RECIPE.index("neck_length"):], "limits = 3", BUS, "neck_length",
                        'key "limits": must be a table of keys, got 3', "Limits by quantity"),
    "zero scale": ("um_per_px = 0.5", "um_per_px = 0", "", "um_per_px", '[scale], key "um_per_px": must be a number',
                   "got 0; measure it on a ruler"),
    "negative scale": ("um_per_px = 0.5", "um_per_px = -0.5", "", "um_per_px", "positive", "got -0.5; measure it"),
    "scale not a number": ("um_per_px = 0.5", "um_per_px = nan", "", "um_per_px", "positive", "got NaN; measure it"),
    "infinite scale": ("um_per_px = 0.5", "um_per_px = inf", "", "um_per_px", "positive", "got Infinity; measure it"),
    "scale in quotes": ("um_per_px = 0.5", "um_per_px = '0.5'", "", "um_per_px", "positive", 'got "0.5"; measure it'),
    "scale true": ("um_per_px = 0.5", "um_per_px = true", "", "um_per_px", "positive", "got true; measure it"),
    "scale as date": ("um_per_px = 0.5", "um_per_px = 2026-01-31", "", "um_per_px", "positive", 'got "2026-01-31"'),
    "three scales": ("um_per_px = 0.5", "um_per_px = [1, 2, 3]", "", "um_per_px", "a pair [x, y]", "measure it"),
    "no u": ("u_um_per_px = 0.0005\n", "", "", "[scale]", '[scale], key "u_um_per_px": is missing',
             "give the scale's standard uncertainty"),
    "negative u": ("u_um_per_px = 0.0005", "u_um_per_px = -1", "", "u_um_per_px", "zero or more", "certificate"),
    "u above the scale": ("= 0.0005", "= 0.5", "", "u_um_per_px", "is not smaller than um_per_px", "in um per px"),
    "two scales": ("um_per_px = 0.5", "pixels = true\num_per_px = 0.5", "", "um_per_px",
                   '[scale], key "pixels": more than one scale', "keep one of them"),
    "no way to scale": ("um_per_px = 0.5\nu_um_per_px = 0.0005\n", "", "", "[scale]", "[scale]: the scale is missing",
                        "give um_per_px with u_um_per_px"),
    "u without use": ("um_per_px = 0.5", "pixels = true", "", "u_um_per_px", '_per_px": has no use with pixels',
                      "remove it"),
    "no scale": ("[scale]\num_per_px = 0.5\nu_um_per_px = 0.0005\n", "", "", None, "section [scale]: is missing",
                 "um_per_px with u_um_per_px"),
    "half of optics": ("na = 0.28\n", "", "", "[optics]", 'key "na": is missing', "needs both na and wavelength_um"),
    "wavelength in nm": ("= 0.55", "= 550", "", "wavelength_um", "must be at most 2, got 550", "in um"),
    "axes not perpendicular": ('"+x"', '"-y"', "[web]", "cross_direction", "runs along machine_direction",
                               'it must be perpendicular: "+x" or "-x"'),
    "wrong gamma": ("gamma = 1.0", "gamma = 'sRGB'", "", "gamma", "must be a number or 'srgb', got \"sRGB\"",
                    "or srgb"),
    "gamma zero": ("gamma = 1.0", "gamma = 0", "", "gamma", "must be more than 0", "encoding exponent"),
    "version as number": ('"3"', "3", "", "version", 'key "version": must be text in quotes, got 3', "Your own"),
    "later schema": ("schema = 1", "schema = 2", "", "schema", 'key "schema": must be at most 1, got 2', "language: 1"),
    "schema true": ("schema = 1", "schema = true", "", "schema", "must be a whole number, got true", "language"),
    "version as date": ('"3"', "2026-01-31", "", "version", 'must be text in quotes, got "2026-01-31"', "Your own"),
    "no schema": ("schema = 1\n", "", "", None, 'key "schema": is missing', "add it"),
    "group misspelt": ("P<roll>", "P<rol>", "", "context", "'rol' is no context column", "did you mean 'roll'?"),
    "pattern broken": ("(?P<roll>", "((?P<roll>", "", "context", "is no valid pattern", "single quotes"),
    "pattern of old": ("P<roll>", "P<roll>[[a]", "", "context", "is no valid pattern: Possible nested set", "quotes"),
    "pattern too long": ("P<roll>", "P<roll>a{99999999999}", "", "context", "is no valid pattern", "quotes"),
    "pattern without groups": ("(?P<roll>[^_]+)", ".*'\n#", "", "context", "has no named group", "(?P<lot>...)"),
    "zone by name": ('"+01:00"', '"CET"', "", "time_zone", 'key "time_zone": must be an offset', '"+01:00"'),
    "zone too far": ('"+01:00"', '"+77:00"', "", "time_zone", 'key "time_zone": must be an offset', '"+01:00"'),
    "pattern outside": ('"*.tif"', '"../*.tif"', "", "include", 'key "include", entry 1', "without folders"),
    "locate": ("[web]", '[locate]\nmodel = "rigid"\n[web]', "", "[web]", "section [locate]: is not available",
               "remove it"),
}  # fmt: skip


@pytest.mark.parametrize("mistake", MISTAKES)
def test_a_mistake_is_named_with_key_line_and_remedy(tmp_path: Path, mistake: str) -> None:
    old, new, after, marker, what, remedy = MISTAKES[mistake]
    with pytest.raises(RecipeError, match="cannot be used, 1 problem") as caught:
        load(tmp_path, old, new, at=after)
    message = str(caught.value)
    if marker is not None:
        # "[[feature]]" stands before the name that tells the two features apart.
        line = line_of("[[feature]]", at='ink = "dark"') if marker == "[[feature]]" else line_of(marker, at=after)
        assert f"R.toml, line {line}: " in message
    assert what in message
    assert remedy in message
    for jargon in ("pydantic", "Input", "Value error", "validation", "object", "tuple", "str "):
        assert jargon not in message


def test_all_problems_are_listed_in_the_order_of_the_file(tmp_path: Path) -> None:
    path = tmp_path / "R.toml"
    path.write_text(
        RECIPE.replace("neck_length", "neck").replace("um_per_px = 0.5", "um_per_px = 0").replace("na =", "n =")
    )
    with pytest.raises(RecipeError, match="3 problems") as caught:
        load_recipe(path)
    lines = [int(number) for number in re.findall(r"R\.toml, line (\d+)", str(caught.value))]
    assert lines == [line_of("um_per_px"), line_of("na ="), line_of("neck_length")]


def test_a_mistyped_quantity_is_listed_with_the_other_mistakes_of_its_feature(tmp_path: Path) -> None:
    path = tmp_path / "R.toml"
    path.write_text(
        RECIPE.replace("width_mean", "widht_mean").replace("neck_length", "neck").replace("{ upper = 0", "{")
    )
    with pytest.raises(RecipeError, match="3 problems") as caught:
        load_recipe(path)
    said = str(caught.value)
    place = f'R.toml, line {line_of("width_mean")}: feature "bus", limits, key "widht_mean": unknown quantity'
    assert f"{place}; did you mean 'width_mean'?" in said
    assert 'key "neck": unknown' in said
    assert 'key "open_count": limits are empty' in said


def test_reversed_limits_are_shown_as_far_as_they_are_given(tmp_path: Path) -> None:
    with pytest.raises(RecipeError, match=r"limits are reversed: lower 2, upper 0; correct it"):
        load(tmp_path, "open_count = {", "open_count = { lower = 2,")


def test_a_mistake_in_toml_is_named_with_line_and_column(tmp_path: Path) -> None:
    with pytest.raises(RecipeError, match=rf"R\.toml, line {line_of('[images]')}, column 7: Expected '='.*correct"):
        load(tmp_path, "[images]", "images")


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('ink = "bright"', "ink = bright", "text stands between quotes"),
        ('ink = "bright"', 'ink = "bright"\nink = "dark"', "given twice; keep one"),
        ("[images]", "[images]\n[images]", "given twice; keep one"),
    ],
)
def test_common_mistakes_in_toml_are_told_with_their_remedy(tmp_path: Path, old: str, new: str, words: str) -> None:
    with pytest.raises(RecipeError, match=rf"line \d+, column \d+: .*{words}"):
        load(tmp_path, old, new)


def test_a_backslash_in_double_quotes_is_explained(tmp_path: Path) -> None:
    with pytest.raises(RecipeError, match=r"line 8, column \d+: .*between single quotes"):
        load(tmp_path, "context = '(?P<roll>[^_]+)_(?P<position_m>[^_]+)m_lane(?P<lane>\\d+)", 'context = "\\d')


@pytest.mark.parametrize("content", [b"\xff\xfe\x00", b"\x89PNG\r\n\x1a\n\x00"])
def test_a_file_that_is_no_text_is_refused(tmp_path: Path, content: bytes) -> None:
    (tmp_path / "R.toml").write_bytes(content)
    with pytest.raises(RecipeError, match="not text in UTF-8; save it as UTF-8"):
        load_recipe(tmp_path / "R.toml")


def test_a_missing_recipe_is_named(tmp_path: Path) -> None:
    with pytest.raises(RecipeError, match=r"none\.toml cannot be read: No such file .*recipe start"):
        load_recipe(tmp_path / "none.toml")


def test_a_byte_order_mark_does_not_disturb(tmp_path: Path) -> None:
    (tmp_path / "R.toml").write_text(RECIPE, encoding="utf-8-sig")
    assert load_recipe(tmp_path / "R.toml").recipe_id == load(tmp_path).recipe_id


def test_a_recipe_without_features_is_refused(tmp_path: Path) -> None:
    (tmp_path / "R.toml").write_text('schema = 1\nname = "x"\nfeature = []\n[scale]\npixels = true\n')
    with pytest.raises(RecipeError, match=r'line 3: key "feature": there is nothing to measure; add a \[\[feature\]\]'):
        load_recipe(tmp_path / "R.toml")


@given(data=st.data())
def test_keys_are_found_on_their_lines_whatever_stands_around_them(data: st.DataObject) -> None:
    noise = st.sampled_from([
        "# [x] = {",
        's{n} = "[[feature]] # ="',
        "s{n} = '{'",
        's{n} = """\nname = 1\n[feature]\n"""',
        "s{n} = '''\n[[feature]]\n{'''",
        "s{n} = [\n  1, # ]\n  [2],\n]",
        's{n} = "a \\" # b"',
        "",
    ])  # fmt: skip
    text, truth = "", {}
    for index in range(data.draw(st.integers(1, 3))):
        for n, extra in enumerate(data.draw(st.lists(noise, max_size=4))):
            text += extra.replace("{n}", f"{index}_{n}") + "\n"
        truth["feature", index] = text.count("\n") + 1
        text += "[[feature]]\n"
        truth["feature", index, "name"] = text.count("\n") + 1
        text += f'name = "f{index}"\n[feature.limits] # here\n'
        truth["feature", index, "limits", "width"] = text.count("\n") + 1
        text += 'width.lower = 3\n"up]per" = { a = 1 }\n'
    lines = line_numbers(text)
    assert {path: lines[path] for path in truth} == truth


VALUES = [
    "1", "-1", "nan", "inf", "1e400", "true", '"x"', '""', "[]", "[[]]", "[1, 2]", '["a"]', "{}", "{ a = 1 }", "[nan]",
    "2026-01-01", "2026-01-01T00:00:00Z", "10:00:00", "99999999999999999999", "[{ a = 1 }]", "'\\'", '"\\u0000"',
    '{ lower = "a" }',
]  # fmt: skip
EXTRA = [
    "kind",
    "name",
    "limits",
    "scale",
    "feature",
    "count",
    "file",
    "pixels",
    "context",
    '"a.b"',
    "images.y",
    "locate",
]


@given(
    changes=st.lists(st.tuples(st.integers(0, 60), st.sampled_from(VALUES), st.sampled_from([*EXTRA, ""])), min_size=1)
)
def test_whatever_stands_in_a_recipe_it_is_read_or_refused_in_words(
    tmp_path_factory: pytest.TempPathFactory, changes: list[tuple[int, str, str]]
) -> None:
    lines = RECIPE.splitlines()
    for number, value, extra in changes:
        at = number % len(lines)
        if extra:
            lines.insert(at, f"{extra} = {value}")
        elif "=" in lines[at]:
            lines[at] = f"{lines[at].partition('=')[0]}= {value}"
    path = tmp_path_factory.mktemp("any") / "R.toml"
    path.write_text("\n".join(lines), encoding="utf-8")
    try:
        assert load_recipe(path).features
    except RecipeError as error:
        assert re.search(r"R\.toml, line \d+", str(error))  # noqa: PT017  (either outcome is right)


# ---- files ----


@pytest.mark.parametrize(
    ("name", "what"),
    [
        ("../flat.tif", "leaves the recipe's folder; copy the file beside the recipe"),
        ("/etc/hostname", "must be a path relative to the recipe"),
        ("C:/flat.tif", "must be a path relative to the recipe"),
        ("sub\\flat.tif", "with / between folders"),
        ("link.tif", "leaves the recipe's folder"),
        ("linked/flat.tif", "leaves the recipe's folder"),
        ("none.tif", "there is no file 'none.tif' in the recipe's folder"),
        (".", "there is no file"),
        ("x" * 5000, "there is no file"),
        ("loop", "there is no file"),
    ],
)
def test_a_file_outside_the_recipes_folder_is_refused(tmp_path: Path, name: str, what: str) -> None:
    folder = tmp_path / "inner"
    folder.mkdir()
    (tmp_path / "flat.tif").write_bytes(b"x")
    (folder / "link.tif").symlink_to(tmp_path / "flat.tif")
    (folder / "linked").symlink_to(tmp_path)
    (folder / "loop").symlink_to(folder / "loop")
    with pytest.raises(RecipeError, match=rf'line {line_of("gamma")}: \[correct\], key "dark": ') as caught:
        load(folder, "gamma = 1.0", f"dark = '{name}'")
    assert what in str(caught.value)


def test_a_file_below_the_recipes_folder_is_found(tmp_path: Path) -> None:
    (tmp_path / "sub").mkdir()
    (tmp_path / "sub" / "flat.tif").write_bytes(b"x")
    recipe = load(tmp_path, "gamma = 1.0", "flat_field = 'sub/flat.tif'")
    assert recipe.files == {"flat_field": tmp_path / "sub" / "flat.tif"}


def corrections(folder: Path, **sizes: tuple[int, int]) -> Recipe:
    for name, (width, height) in sizes.items():
        cv2.imwrite(str(folder / f"{name}.png"), np.zeros((height, width), np.uint8))
    return load(folder, "gamma = 1.0", "flat_field = 'flat.png'\ndark = 'dark.png'")


def test_corrections_of_one_size_are_fine(tmp_path: Path) -> None:
    recipe = corrections(tmp_path, flat=(8, 6), dark=(8, 6))
    assert correction_sizes(recipe) == {"flat_field": (8, 6), "dark": (8, 6)}


def test_corrections_of_two_sizes_are_refused(tmp_path: Path) -> None:
    recipe = corrections(tmp_path, flat=(8, 6), dark=(6, 8))
    with pytest.raises(
        RecipeError, match="flat_field has 8 x 6 px, dark has 6 x 8 px; they must have one size: take them"
    ):
        correction_sizes(recipe)


def test_a_correction_of_another_size_than_the_scale_is_refused(tmp_path: Path) -> None:
    (tmp_path / "s.scale.json").write_text(json.dumps(SCALE_FILE))
    cv2.imwrite(str(tmp_path / "dark.png"), np.zeros((6, 8), np.uint8))
    path = tmp_path / "R.toml"
    path.write_text(RECIPE.replace(BY_HAND, "file = 's.scale.json'").replace("gamma = 1.0", "dark = 'dark.png'"))
    with pytest.raises(RecipeError, match="dark has 8 x 6 px, the scale file has 640 x 480 px"):
        correction_sizes(load_recipe(path))


def test_a_correction_that_is_no_picture_is_refused(tmp_path: Path) -> None:
    (tmp_path / "flat.png").write_text("text")
    recipe = load(tmp_path, "gamma = 1.0", "flat_field = 'flat.png'")
    with pytest.raises(RecipeError, match=r"R\.toml: flat_field 'flat\.png' cannot be used: "):
        correction_sizes(recipe)


def test_recipe_id_ignores_comments_order_and_the_folder(tmp_path: Path) -> None:
    (tmp_path / "other").mkdir()
    one = load(tmp_path)
    other = load(tmp_path / "other", 'version = "3"\nlayer = "M2"', '# a comment\nlayer = "M2"\nversion = "3"')
    assert one.recipe_id == other.recipe_id
    assert re.fullmatch("[0-9a-f]{16}", one.recipe_id)


@pytest.mark.parametrize(("old", "new"), [("count = 3", "# count"), ("= 22.0", "= 22.5"), ('"M2"', '"M3"')])
def test_recipe_id_changes_with_every_value(tmp_path: Path, old: str, new: str) -> None:
    assert load(tmp_path).recipe_id != load(tmp_path, old, new).recipe_id


def test_recipe_id_changes_with_the_content_of_a_file(tmp_path: Path) -> None:
    (tmp_path / "dark.tif").write_bytes(b"one")
    one = load(tmp_path, "gamma = 1.0", "dark = 'dark.tif'")
    (tmp_path / "dark.tif").write_bytes(b"two")
    other = load(tmp_path, "gamma = 1.0", "dark = 'dark.tif'")
    assert one.recipe_id != other.recipe_id
    assert one.scale_id == other.scale_id


def test_a_recipe_survives_the_way_to_a_worker(tmp_path: Path) -> None:
    (tmp_path / "dark.tif").write_bytes(b"one")
    recipe = load(tmp_path, "gamma = 1.0", "dark = 'dark.tif'")
    copy = pickle.loads(pickle.dumps(recipe))  # noqa: S301  (our own bytes)
    assert (copy.recipe_id, copy.files) == (recipe.recipe_id, recipe.files)


# ---- scale ----

SCALE_FILE = {
    "format": "printmetrics-scale", "version": 1, "um_per_px": [0.5, 0.25], "u_um_per_px": [0.001, 0.001],
    "picture_size_px": [640, 480], "made_at": "2026-01-31T08:15:00+01:00", "valid_until": "2026-06-30T00:00:00+01:00",
    "target": None, "certificate": None, "camera": None, "objective": None, "magnification": None,
    "temperature_c": None, "software": None,
}  # fmt: skip
BY_HAND = "um_per_px = 0.5\nu_um_per_px = 0.0005"


def test_the_scale_by_hand_carries_its_relative_uncertainty(tmp_path: Path) -> None:
    scale = load(tmp_path).scale_for(None, (10, 10))
    assert (scale.x, scale.y, scale.unit) == (0.5, 0.5, "um")
    assert scale.u_relative == pytest.approx(0.001, rel=1e-12)


def test_of_two_relative_uncertainties_the_larger_counts(tmp_path: Path) -> None:
    scale = load(tmp_path, BY_HAND, "um_per_px = [0.5, 0.25]\nu_um_per_px = 0.001").scale_for(None, (10, 10))
    assert scale.u_relative == pytest.approx(0.004, rel=1e-12)


def test_a_zero_uncertainty_is_allowed_and_said_aloud(tmp_path: Path) -> None:
    recipe = load(tmp_path, "= 0.0005", "= 0")
    assert recipe.scale_for(None, (1, 1)).u_relative == 0.0
    assert "u_um_per_px is zero" in recipe.notes[0]


def test_the_pictures_own_scale_is_used_when_the_recipe_says_so(tmp_path: Path) -> None:
    recipe = load(tmp_path, "um_per_px = 0.5", "from_image = true")
    assert recipe.scale_for((0.2, 0.1), (1, 1)).u_relative == pytest.approx(0.005, rel=1e-12)


def test_a_picture_without_its_scale_is_refused_with_the_reason(tmp_path: Path) -> None:
    recipe = load(tmp_path, "um_per_px = 0.5", "from_image = true")
    with pytest.raises(PictureError, match=r"from the picture, but 72 dpi is a default; give um_per_px"):
        recipe.scale_for(None, (1, 1), "72 dpi is a default")
    with pytest.raises(PictureError, match="but the picture carries none"):
        recipe.scale_for(None, (1, 1))


def test_the_scale_file_gives_scale_flag_and_id(tmp_path: Path) -> None:
    (tmp_path / "s.scale.json").write_text(json.dumps(SCALE_FILE))
    recipe = load(tmp_path, BY_HAND, "file = 's.scale.json'")
    scale = recipe.scale_for(None, (640, 480))
    assert (scale.x, scale.y, scale.u_relative) == (0.5, 0.25, 0.004)
    assert recipe.scale_flags("2026-06-29T23:59:59+01:00") == Flag.NONE
    assert recipe.scale_flags("2026-06-30T00:00:01+01:00") == Flag.SCALE_EXPIRED
    (tmp_path / "s.scale.json").write_text(json.dumps(SCALE_FILE | {"um_per_px": [0.5, 0.5]}))
    assert load(tmp_path, BY_HAND, "file = 's.scale.json'").scale_id != recipe.scale_id


def test_a_damaged_scale_file_is_a_problem_of_the_recipe(tmp_path: Path) -> None:
    (tmp_path / "s.scale.json").write_text("{")
    with pytest.raises(RecipeError, match=rf'line {line_of("um_per_px")}: \[scale\], key "file": .*damaged'):
        load(tmp_path, BY_HAND, "file = 's.scale.json'")


def test_without_a_scale_only_what_needs_none_is_judged(tmp_path: Path) -> None:
    recipe = load(tmp_path, BY_HAND, "pixels = true")
    bus = recipe.features[1]
    assert recipe.scale_for(None, (1, 1)).unit == recipe.length_unit == "{px}"
    assert recipe.limits_for(bus, "width_mean") is None
    assert recipe.limits_for(bus, "open_count") == bus.limits["open_count"]
    assert any("no verdict" in note and "bus.width_mean, bus.lwr_3sigma" in note for note in recipe.notes)


def test_with_a_scale_every_limit_is_judged(tmp_path: Path) -> None:
    recipe = load(tmp_path)
    bus = recipe.features[1]
    assert all(recipe.limits_for(bus, quantity) == limits for quantity, limits in bus.limits.items())
    assert recipe.limits_for(bus, "tilt") is None


def test_a_recipe_without_limits_says_that_nothing_is_judged(tmp_path: Path) -> None:
    path = tmp_path / "R.toml"
    path.write_text(
        RECIPE[: RECIPE.index("[feature.limits]")].replace("count", "# count").replace("centres", "# centres")
    )
    assert load_recipe(path).notes == ("no feature has limits: nothing will be judged",)


# ---- context ----


def test_a_name_fills_the_context_columns(tmp_path: Path) -> None:
    context = load(tmp_path).context_of("R12_3.5m_lane2_20260131T081500")
    assert list(context) == list(CONTEXT_COLUMNS)
    assert context == {
        "captured_at": "2026-01-31T08:15:00+01:00", "lot": "", "roll": "R12", "position_m": 3.5, "lane": "2",
        "site": "", "layer": "M2", "rotation_deg": "",
    }  # fmt: skip


@pytest.mark.parametrize(
    ("stem", "why"),
    [
        ("R12", "doesn't match the recipe's context"),
        ("x R12_3.5m_lane2 x", "doesn't match"),
        ("R12_nanm_lane2", "position_m must be a number, got 'nan'"),
        ("R12_infm_lane2", "position_m must be a number, got 'inf'"),
        ("R12_1.2.3m_lane2", "position_m must be a number, got '1.2.3'"),
        ("R12_3m_lane2_yesterday", "'yesterday' is no time; write it like 20260131T081500"),
        ("R12_3m_lane2_20261331T081500", "is no time: month"),
    ],
)
def test_a_name_that_says_something_else_fails_its_picture(tmp_path: Path, stem: str, why: str) -> None:
    with pytest.raises(PictureError, match=re.escape(why)):
        load(tmp_path).context_of(stem)


def test_what_is_set_fills_columns_that_the_name_leaves_open(tmp_path: Path) -> None:
    recipe = load(tmp_path)
    fixed = recipe.apply_set(["source=cam1", "lot=L7", "position_m=3.50", "site=a=b"])
    assert fixed["source"] == "cam1"
    context = recipe.context_of("R12_3.5m_lane2", fixed)
    assert (context["lot"], context["position_m"], context["site"]) == ("L7", 3.5, "a=b")
    assert "source" not in context


def test_a_name_that_contradicts_what_is_set_fails_its_picture(tmp_path: Path) -> None:
    recipe = load(tmp_path)
    with pytest.raises(PictureError, match=r"says roll 'R12', but --set or the recipe says 'R13'; measure the picture"):
        recipe.context_of("R12_3.5m_lane2", recipe.apply_set(["roll=R13"]))


def test_a_picture_of_another_layer_is_refused(tmp_path: Path) -> None:
    recipe = load(tmp_path, "P<lane>\\d+", "P<layer>.+")
    with pytest.raises(PictureError, match="says layer 'M1', but --set or the recipe says 'M2'"):
        recipe.context_of("R12_3.5m_laneM1")


@pytest.mark.parametrize(
    ("pair", "why"),
    [
        ("lott=L7", "'lott' is no context column; did you mean 'lot'?"),
        ("lot", "write it as key=value, such as lot=L7"),
        ("lot=", "write it as key=value"),
        ("position_m=far", "position_m must be a number, got 'far'"),
        ("captured_at=noon", "'noon' is no time"),
        ("layer=M3", "the recipe is for layer 'M2'"),
    ],
)
def test_a_wrong_setting_is_refused(tmp_path: Path, pair: str, why: str) -> None:
    with pytest.raises(RecipeError, match=re.escape(f"--set {pair}: ") + ".*" + re.escape(why)):
        load(tmp_path).apply_set([pair])


def test_a_column_set_twice_is_refused(tmp_path: Path) -> None:
    with pytest.raises(RecipeError, match="--set lot=L8: lot is given twice; keep one"):
        load(tmp_path).apply_set(["lot=L7", "lot=L8"])


@pytest.mark.parametrize(
    ("text", "rfc3339"),
    [
        ("2026-01-31T08:15:00Z", "2026-01-31T08:15:00+00:00"),
        ("2026-01-31t08:15:00.25-05:30", "2026-01-31T08:15:00.250000-05:30"),
        ("20260131T081500+0100", "2026-01-31T08:15:00+01:00"),
        ("20260131_081500", "2026-01-31T08:15:00+02:00"),
        ("2026-01-31T08-15-00", "2026-01-31T08:15:00+02:00"),
        ("2026:01:31 08:15:00", "2026-01-31T08:15:00+02:00"),
    ],
)
def test_times_become_rfc_3339_with_offset(text: str, rfc3339: str) -> None:
    assert moment(text, "+02:00") == rfc3339


def test_a_time_without_offset_stays_empty() -> None:
    assert moment("20260131T081500") == ""


# ---- schema ----


def test_the_schema_is_valid_and_agrees_with_what_is_read() -> None:
    schema = Recipe.model_json_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    validator = jsonschema.Draft202012Validator(schema)
    assert validator.is_valid(tomllib.loads(RECIPE))
    assert not validator.is_valid(tomllib.loads(RECIPE.replace("neck_length", "neck_lenght")))
    assert not validator.is_valid(tomllib.loads(RECIPE.replace('"lines"', '"line"')))
    assert validator.is_valid(tomllib.loads(RECIPE.replace("um_per_px = 0.5\n", "um_per_px = [0.5, 0.5]\n")))


def test_every_key_is_described_in_the_schema() -> None:
    schema = Recipe.model_json_schema()
    tables = [schema, *schema["$defs"].values()]
    described = {f"#/$defs/{name}" for name, table in schema["$defs"].items() if table.get("description")}
    bare = {
        key
        for table in tables
        for key, about in table["properties"].items()
        if not about.get("description") and about.get("$ref") not in described
    }
    assert bare <= {"kind"}  # explained by the features themselves


@given(x=st.floats(0.01, 100), u=st.floats(0, 0.009))
def test_relative_uncertainty_is_u_over_scale(tmp_path_factory: pytest.TempPathFactory, x: float, u: float) -> None:
    folder = tmp_path_factory.mktemp("scale")
    recipe = load(folder, BY_HAND, f"um_per_px = {x!r}\nu_um_per_px = {u!r}")
    assert math.isclose(recipe.scale_for(None, (1, 1)).u_relative, u / x, rel_tol=1e-12)
