"""The table of kinds: what the recipe may name, and who measures it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from printmetrics.measure import lines

if TYPE_CHECKING:
    from collections.abc import Callable

    from printmetrics.measure.options import FeatureOptions
    from printmetrics.measure.readings import Measured, Shape
    from printmetrics.measure.sight import Sight


@dataclass(frozen=True, slots=True)
class Kind:
    """One kind of feature.

    Parameters
    ----------
    options : type
        The recipe's model for it.
    measure : callable
        Takes what is seen and the options, gives what was measured.
    expected_items : callable
        Names the items that the options promise, for rows that must not be missing.
    missing : callable
        Takes the options, the names of the items found, what is drawn of them, and what is seen; gives what to draw
        of the items that the options promise and that were not found.
    count : str
        The quantity that counts its items.
    main : tuple of str
        The quantities that a person looks at first, for a summary where there are no limits.
    """

    options: type[FeatureOptions]
    measure: Callable[[Sight, Any], Measured]
    expected_items: Callable[[Any], dict[str, tuple[str, ...]]]
    missing: Callable[[Any, set[str], list[Shape], Sight], list[Shape]]
    count: str
    main: tuple[str, ...]


KINDS: dict[str, Kind] = {
    "lines": Kind(
        options=lines.LinesOptions,
        measure=lines.measure_lines,
        expected_items=lines.expected_items,
        missing=lines.missing_lines,
        count="line_count",
        main=("width_mean", "width_min", "lwr_3sigma", "space_min", "line_count"),
    ),
}
