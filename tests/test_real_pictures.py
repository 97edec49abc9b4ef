"""Photographs of real print: what is there was counted by eye. Source and licence: tests/data/printed_lines."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from printmetrics.inspect import Inspection, inspect_picture
from printmetrics.io.pictures import find_pictures, read_picture
from printmetrics.recipe import load_recipe

DATA = Path(__file__).parent / "data" / "printed_lines"
THICK = ("L1", "L4", "L7", "L10")  # the frame, and every third rule


def inspected(picture: str, recipe: str) -> Inspection:
    (found,) = find_pictures(DATA / picture)
    return inspect_picture(read_picture(found), load_recipe(DATA / recipe))


def values(inspection: Inspection, feature: str, quantity: str) -> dict[str, float]:
    return {
        row["item"]: row["value"]
        for row in inspection.rows
        if row["feature"] == feature and row["quantity"] == quantity and row["value"] is not None
    }


@pytest.fixture(scope="module")
def newsprint() -> Inspection:
    return inspected("newsprint_grid.png", "newsprint.toml")


@pytest.mark.parametrize("feature", ["upright", "lying", "column"])
def test_every_rule_of_the_grid_is_found_and_none_invented(newsprint: Inspection, feature: str) -> None:
    assert newsprint.failures == {}
    assert values(newsprint, feature, "line_count") == {"all": 10}
    assert len(values(newsprint, feature, "width_mean")) == 10


# By eye: cells are 40 to 53 px in size, smaller at the top, where the paper is farther away.
@pytest.mark.parametrize("feature", ["upright", "lying", "column"])
def test_rules_of_the_grid_are_one_cell_apart(newsprint: Inspection, feature: str) -> None:
    pitch = np.array(list(values(newsprint, feature, "pitch").values()))
    assert len(pitch) == 9
    assert pitch.min() > 39
    assert pitch.max() < 56


@pytest.mark.parametrize("feature", ["upright", "lying", "column"])
def test_thick_and_thin_rules_are_told_apart(newsprint: Inspection, feature: str) -> None:
    width = values(newsprint, feature, "width_mean")
    thick = [width[item] for item in THICK]
    thin = [value for item, value in width.items() if item not in THICK]
    assert min(thick) > 1.2 * max(thin)
    assert 3 < np.mean(thick) < 6
    assert 1.5 < np.mean(thin) < 3


def test_readings_without_a_scale_are_in_pixels(newsprint: Inspection) -> None:
    assert {row["unit"] for row in newsprint.rows if row["quantity"] in ("width_mean", "pitch")} == {"{px}"}


def test_traces_of_a_circuit_board_are_measured() -> None:
    inspection = inspected("circuit_traces.jpg", "circuit.toml")
    assert values(inspection, "traces", "line_count") == {"all": 5}
    width = np.array(list(values(inspection, "traces", "width_mean").values()))
    assert len(width) == 5
    assert 1.0 < width.min() < width.max() < 2.5  # by eye: 1.5 to 2 px
    pitch = np.array(list(values(inspection, "traces", "pitch").values()))
    # The brightest pixels of a column lie at y = 410.5, 416.7, 421.2, 425.3 and 429.8, read off by eye.
    assert pitch == pytest.approx([6.2, 4.5, 4.1, 4.5], abs=0.5)
