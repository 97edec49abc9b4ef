"""The catalogue holds each quantity once, with all a table needs."""

import pytest

from printmetrics.measure.kinds import KINDS
from printmetrics.quantities import CATALOGUE, Quantity

ALL = [quantity for kind in CATALOGUE.values() for quantity in kind.values()]


@pytest.mark.parametrize("quantity", ALL, ids=lambda quantity: f"{quantity.kind}.{quantity.name}")
def test_a_quantity_has_a_definition_a_source_and_units(quantity: Quantity) -> None:
    assert quantity.definition.endswith(".")
    assert quantity.source
    assert quantity.unit() in {"um", "um2", "deg", "1"}
    assert CATALOGUE[quantity.kind][quantity.name] is quantity


def test_without_a_scale_lengths_and_areas_are_in_pixels() -> None:
    units = {quantity.dimension: quantity.unit("{px}") for quantity in ALL}
    known = {"length": "{px}", "area": "{px2}", "angle": "deg", "ratio": "1", "count": "1"}
    assert units == {dimension: known[dimension] for dimension in units}


def test_every_kind_has_its_quantities_and_its_count() -> None:
    assert set(KINDS) == set(CATALOGUE)
    for name, kind in KINDS.items():
        assert CATALOGUE[name][kind.count].dimension == "count"
