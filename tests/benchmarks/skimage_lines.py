"""The job done plainly with scikit-image: threshold, label, contours at mid-level, width row by row."""

from __future__ import annotations

from typing import Any

import numpy as np
from skimage.filters import threshold_otsu
from skimage.measure import find_contours, label, regionprops


def measure(image: np.ndarray[Any, Any], fewest_rows: float = 0.5) -> list[np.ndarray[Any, Any]]:
    """Return the width in each row of every bright, about vertical line, from left to right. [px]"""
    level = float(threshold_otsu(image))
    labels = label(image > level)
    lines = [r for r in regionprops(labels) if np.ptp(r.bbox[::2]) > fewest_rows * image.shape[0]]
    contours = find_contours(image.astype(np.float64), level)
    points = np.concatenate(contours)
    points = points[points[:, 0] == np.rint(points[:, 0])]  # crossings of whole rows
    widths = []
    for line in sorted(lines, key=lambda r: r.centroid[1]):
        top, left, bottom, right = line.bbox
        near = points[(points[:, 1] > left - 1.5) & (points[:, 1] < right + 0.5)]
        near = near[(near[:, 0] >= top) & (near[:, 0] < bottom)]
        rows = near[:, 0].astype(int)
        first, last = np.full(image.shape[0], np.inf), np.full(image.shape[0], -np.inf)
        np.minimum.at(first, rows, near[:, 1])
        np.maximum.at(last, rows, near[:, 1])
        widths.append((last - first)[np.isfinite(last - first)])
    return widths
