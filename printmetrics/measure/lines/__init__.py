"""Printed lines: width, roughness, spaces and defects."""

from printmetrics.measure.lines.measure import expected_items, measure_lines, missing_lines
from printmetrics.measure.lines.options import LinesOptions

__all__ = ["LinesOptions", "expected_items", "measure_lines", "missing_lines"]
