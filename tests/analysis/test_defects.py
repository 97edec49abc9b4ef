"""Defects in drawn masks: truth is what was drawn."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import cv2
import numpy as np
import pytest

from printmetrics.analysis.defects import Defect, find_defects, ink_mask, smooth_courses, smoothing

if TYPE_CHECKING:
    from numpy.typing import NDArray

SHAPE = (200, 200)
LEFT, RIGHT = np.array([40.0, 100.0]), np.array([60.0, 120.0])


def two_lines(tilt: float = 0.0) -> tuple[NDArray[np.uint8], NDArray[np.float64], NDArray[np.float64]]:
    """Mask and edges of two lines 20 px wide, 40 px apart."""
    lean = tilt * (np.arange(SHAPE[0]) - 100.0)
    left, right = LEFT[:, None] + lean, RIGHT[:, None] + lean
    columns = np.arange(SHAPE[1])
    inked = ((columns > left[..., None]) & (columns < right[..., None])).any(axis=0)
    return (inked * 255).astype(np.uint8), left, right


def defects_of(
    mask: NDArray[Any],
    left: NDArray[np.float64],
    right: NDArray[np.float64],
    **changed: Any,  # noqa: ANN401
) -> list[Defect]:
    given = {
        "way": np.ones(left.shape, bool), "slack": np.full((len(left), 2), 2.0), "margin": 30.0, "least_area": 6.0,
    }  # fmt: skip
    return find_defects(mask, left, right, **(given | changed))


def drawn(kind: str) -> tuple[NDArray[np.uint8], tuple[float, float], float]:
    """Mask with one defect, with its centre and area."""
    mask, _, _ = two_lines()
    rows, columns = np.mgrid[: SHAPE[0], : SHAPE[1]]
    if kind == "open":
        mask[90:106, 40:62] = 0
        return mask, (50.0, 97.5), 16 * 19
    if kind == "bridge":
        mask[90:106, 58:104] = 255
        return mask, (80.0, 97.5), 16 * 39
    centre, radius, ink = {
        "neck": ((41.0, 120.0), 8, 0), "void": ((50.0, 120.0), 5, 0),
        "bulge": ((61.0, 120.0), 8, 255), "satellite": ((80.0, 120.0), 7, 255),
    }[kind]  # fmt: skip
    disc = np.hypot(columns - centre[0], rows - centre[1]) <= radius
    before = mask.copy()
    mask[disc] = ink
    changed = mask != before
    return mask, (float(columns[changed].mean()), float(rows[changed].mean())), float(changed.sum())


@pytest.mark.parametrize("kind", ["open", "neck", "void", "bridge", "bulge", "satellite"])
def test_each_defect_is_found_once_with_name_place_and_area(kind: str) -> None:
    mask, centre, area = drawn(kind)
    _, left, right = two_lines()
    (defect,) = defects_of(mask, left, right)
    assert defect.kind == kind
    assert defect.line == 0
    assert (defect.x, defect.y) == pytest.approx(centre, abs=1.5)
    assert defect.area == pytest.approx(area, rel=0.2)
    assert (defect.left, defect.right) == {
        "open": (True, True), "bridge": (True, True), "neck": (True, False), "bulge": (True, False),
        "void": (False, False), "satellite": (False, False),
    }[kind]  # fmt: skip


@pytest.mark.parametrize("tilt", [0.0, 0.4])
@pytest.mark.parametrize("kind", ["open", "bridge"])
def test_extent_is_the_narrowest_along_the_line(kind: str, tilt: float) -> None:
    mask, left, right = two_lines(tilt)
    rows, columns = np.mgrid[: SHAPE[0], : SHAPE[1]]
    across = columns - tilt * (rows - 100.0)
    high = 6 + 0.02 * (across - (50 if kind == "open" else 80)) ** 2  # half its extent: 12 in the middle
    where = (
        (np.abs(rows - 100) < high)
        & (across > (38 if kind == "open" else 58))
        & (across < (62 if kind == "open" else 102))
    )
    mask[where] = 0 if kind == "open" else 255
    (defect,) = defects_of(mask, left, right)
    assert defect.kind == kind
    assert defect.extent == pytest.approx(12, abs=2)


def test_clean_lines_have_no_defect() -> None:
    for tilt in (0.0, 0.3):
        assert defects_of(*two_lines(tilt)) == []


def test_rough_edge_within_its_slack_is_no_defect() -> None:
    mask, left, right = two_lines()
    for row in range(0, 200, 3):
        mask[row, 39 : 39 + row % 3 + 2] = 255 * (row % 2)
    assert defects_of(mask, left, right) == []


def test_specks_below_the_least_area_do_not_count() -> None:
    mask, left, right = two_lines()
    mask[50:52, 80:82] = 255
    assert defects_of(mask, left, right) == []
    assert [d.kind for d in defects_of(mask, left, right, least_area=4.0)] == ["satellite"]


def test_ink_is_missing_only_where_the_whole_line_is_in_the_picture() -> None:
    mask, left, right = two_lines()
    mask[150:, 35:65] = 0
    way = np.ones(left.shape, bool)
    way[0, 150:] = False
    assert defects_of(mask, left, right, way=way) == []
    assert [d.kind for d in defects_of(mask, left, right)] == ["open"]


def test_excess_ink_is_looked_for_only_within_the_margin() -> None:
    mask, left, right = two_lines()
    cv2.circle(mask, (170, 100), 6, 255, -1)
    assert defects_of(mask, left, right, margin=30.0) == []
    (defect,) = defects_of(mask, left, right, margin=70.0)
    assert (defect.kind, defect.line) == ("satellite", 1)


def test_drop_left_of_the_first_line_belongs_to_no_space() -> None:
    mask, left, right = two_lines()
    cv2.circle(mask, (25, 100), 6, 255, -1)
    (defect,) = defects_of(mask, left, right)
    assert (defect.kind, defect.line) == ("satellite", -1)


def test_defects_come_from_top_to_bottom_each_for_itself() -> None:
    mask, left, right = two_lines()
    mask[160:170, 95:125] = 0
    mask[20:30, 58:104] = 255
    cv2.circle(mask, (50, 90), 5, 0, -1)
    found = defects_of(mask, left, right)
    assert [(d.kind, d.line) for d in found] == [("bridge", 0), ("void", 0), ("open", 1)]


@pytest.mark.parametrize("bright", [True, False])
@pytest.mark.parametrize("kind", [np.uint8, np.uint16, np.float32])
def test_ink_is_what_lies_beyond_the_threshold(bright: bool, kind: type) -> None:
    image = np.array([[10, 99, 101, 200]] * 3, kind)
    expected = [0, 0, 255, 255] if bright else [255, 255, 0, 0]
    for threshold in (100.0, 99.5, 100.5):
        np.testing.assert_array_equal(ink_mask(image, threshold, 1, bright=bright)[1], expected)


def test_threshold_may_follow_the_light() -> None:
    image = np.tile(np.linspace(50, 150, 64, dtype=np.float32), (64, 1))
    image[:, 10:20] += 20
    image[:, 40:50] += 20
    mask = ink_mask(image, np.tile(np.linspace(60, 160, 65, dtype=np.float32), (33, 1)), 1, bright=True)
    np.testing.assert_array_equal(np.unique(np.nonzero(mask)[1]), [*range(10, 20), *range(40, 50)])


def test_smoothing_grows_with_the_noise() -> None:
    assert [smoothing(100.0, noise) for noise in (0.5, 15.0, 25.0, 1e6)] == [1, 3, 3, 9]


def test_course_is_kept_but_for_roughness_and_defects() -> None:
    rng = np.random.default_rng(1)
    rows = np.arange(400.0)
    true = 50 + 0.1 * rows + 1e-4 * (rows - 200) ** 2
    edge = true + rng.normal(0, 0.5, 400)
    edge[100:130] += 8.0  # a bulge
    edge[250:270] = np.nan
    (course,) = smooth_courses(edge[None], np.full((1, 400), -1.0))
    assert np.abs(course - true).max() < 0.3


def test_course_beyond_what_was_measured_is_the_coarse_one() -> None:
    edge = np.full(100, np.nan)
    edge[20:60] = 30.0
    never = np.full(100, np.nan)
    course, coarse = smooth_courses(np.stack([edge, never]), np.full((2, 100), 31.0))
    assert course[[0, 19, 61, 99]] == pytest.approx(31.0)
    assert course[20:60] == pytest.approx(30.0)
    np.testing.assert_array_equal(coarse, 31.0)
