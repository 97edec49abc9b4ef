"""Defects of lines: ink missing where a line runs, ink in excess where none should be."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import cv2
import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

_FEWEST_ROWS, _COURSE_ROWS = 8, 256  # a cubic and its scatter need the one, and gain nothing beyond the other
_COURSE_TERMS = (2, 2, 2, 4, 4, 4, 4)  # of the course, fit by fit
_OUTLIER = 5.2  # median deviations: 3.5 sd
_STAND_OUT = 10.0  # half the contrast stands five noise sds out of the smoothed picture


@dataclass(frozen=True, slots=True, kw_only=True)
class Defect:
    """One defect.

    Parameters
    ----------
    kind : str
        ``open``, ``neck``, ``void``, ``bridge``, ``bulge`` or ``satellite``.
    line : int
        Index of the line; for a bridge or satellite, of the line left of the space. -1: left of the first.
    left, right : bool
        Whether it touches the left, the right edge of the line (or the line left, right of the space).
    rows : tuple of int
        First and last row. [px]
    x, y : float
        Centre of its area. [px]
    extent : float
        Its length in rows; of a bridge or an open, where it is shortest. [px]
    area : float
        Its area. [px^2]
    outline : ndarray of float, shape (n, 2)
        Outer contour, x and y. [px]
    """

    kind: str
    line: int
    left: bool
    right: bool
    rows: tuple[int, int]
    x: float
    y: float
    extent: float
    area: float
    outline: NDArray[np.float64]


def ink_mask(image: NDArray[Any], threshold: NDArray[np.float32] | float, smooth: int, *, bright: bool) -> NDArray[Any]:
    """Return where the picture is inked.

    Parameters
    ----------
    image : ndarray, shape (M, N)
        Picture. [counts]
    threshold : float or ndarray of float32, shape (m, n)
        Middle between ink and bare web; an array is stretched over the picture. [counts]
    smooth : int
        Side of the averaging square, odd; 1 for none. [px]
    bright : bool
        Ink brighter than the web.

    Returns
    -------
    ndarray of uint8, shape (M, N)
        255 where inked, else 0.
    """
    seen = cv2.blur(image, (smooth, smooth)) if smooth > 1 else image
    if np.ndim(threshold):
        size = (image.shape[1], image.shape[0])
        limit = cv2.resize(np.asarray(threshold, np.float32), size, interpolation=cv2.INTER_LINEAR)
        return np.asarray(cv2.compare(seen.astype(np.float32), limit, cv2.CMP_GT if bright else cv2.CMP_LT))
    kind = cv2.THRESH_BINARY if bright else cv2.THRESH_BINARY_INV
    level = math.floor(float(threshold)) if seen.dtype == np.uint8 and bright else float(threshold)
    if seen.dtype == np.uint8 and not bright:
        level = math.ceil(level) - 1
    mask = cv2.threshold(seen, level, 255, kind)[1]
    return np.asarray(mask if mask.dtype == np.uint8 else mask.astype(np.uint8))


def smoothing(contrast: float, noise: float) -> int:
    """Return the averaging square that lets half the contrast stand out of the noise.

    Parameters
    ----------
    contrast, noise : float
        Step height and noise sd of a pixel. [counts]

    Returns
    -------
    int
        Odd side of the square. [px]
    """
    return 2 * (math.ceil(min(_STAND_OUT * noise / max(contrast, 1e-12), 9)) // 2) + 1


def find_defects(
    ink: NDArray[Any],
    left: NDArray[np.float64],
    right: NDArray[np.float64],
    way: NDArray[np.bool_],
    slack: NDArray[np.float64],
    margin: float,
    least_area: float,
) -> list[Defect]:
    """Compare the ink seen with the ink expected.

    Parameters
    ----------
    ink : ndarray of uint8, shape (M, N)
        255 where inked.
    left, right : ndarray of float, shape (K, M)
        Course of each line's edges, left to right. [px]
    way : ndarray of bool, shape (K, M)
        Rows in which the whole line is in the picture; only there can ink be missing.
    slack : ndarray of float, shape (K, 2)
        How far from the course an edge may be and still be rough, not defective. [px]
    margin : float
        How far beyond the outermost lines excess ink is looked for. [px]
    least_area : float
        Smallest area that counts. [px^2]

    Returns
    -------
    list of Defect
        From top to bottom.

    Notes
    -----
    An open is bare web that joins both sides of a line, a bridge is ink that joins two lines: both are judged on
    the whole mask around the finding, so a film of half contrast or a crack much finer than the blur isn't seen.
    """
    found: list[Defect] = []
    drawn = np.zeros_like(ink)
    far = np.full(left.shape[1], float(ink.shape[1]))
    for missing in (False, True):
        # One buffer serves both: what is drawn is ink that may be there, then ink that must be there.
        drawn[:] = 0
        sign = -1.0 if missing else 1.0
        for k in range(len(left)):
            a, b = left[k] - sign * slack[k, 0], right[k] + sign * slack[k, 1]
            _fill(drawn, np.where(way[k], a, np.nan) if missing else a, b)
        if missing:
            cv2.compare(drawn, ink, cv2.CMP_GT, drawn)
        else:
            _fill(drawn, -far, left[0] - slack[0, 0] - margin)
            _fill(drawn, right[-1] + slack[-1, 1] + margin, far)
            cv2.compare(ink, drawn, cv2.CMP_GT, drawn)
        for box, inside in _components(drawn, least_area):
            found.append(_Look(ink, left, right, slack, box, inside, missing=missing).defect())
    return sorted(found, key=lambda d: (d.rows[0], d.x))


def smooth_courses(edges: NDArray[np.float64], coarse: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return the courses that edges keep but for their roughness and defects.

    Parameters
    ----------
    edges : ndarray of float, shape (E, M)
        Column of each edge in each row; NaN where not measured. [px]
    coarse : ndarray of float, shape (E, M)
        Courses to keep beyond what was measured. [px]

    Returns
    -------
    ndarray of float, shape (E, M)
        Robust cubics through the edges. [px]
    """
    height = edges.shape[1]
    place = np.linspace(-1.0, 1.0, height)
    rows = np.arange(0, height, max(1, height // _COURSE_ROWS))
    basis = np.polynomial.legendre.legvander(place[rows], 3)
    known = np.isfinite(edges[:, rows])
    y = np.where(known, edges[:, rows], 0.0)
    weight = known.astype(np.float64)
    middle = np.maximum(known.sum(axis=1) // 2, 0)
    fit = np.zeros((len(edges), 4))
    for turn, terms in enumerate(_COURSE_TERMS):
        part = basis[:, :terms]
        normal = (weight @ (part[:, :, None] * part[:, None, :]).reshape(len(rows), -1)).reshape(-1, terms, terms)
        fit[:, :terms] = np.linalg.solve(normal + 1e-9 * np.eye(terms), ((weight * y) @ part)[..., None])[..., 0]
        off = np.where(known, np.abs(y - fit @ basis.T), np.inf)
        typical = np.sort(off, axis=1)[np.arange(len(edges)), np.minimum(middle, len(rows) - 1)]
        # Least absolute deviations first: a long neck must not draw the course to itself.
        weight = known / np.maximum(np.where(known, off, 1.0), 0.5 * typical[:, None] + 1e-6)
        if turn >= len(_COURSE_TERMS) - 2:
            weight = ((off <= _OUTLIER * typical[:, None] + 1e-6) & known).astype(np.float64)
    course = fit @ np.polynomial.legendre.legvander(place, 3).T
    for k in range(len(edges)):
        measured = rows[known[k]]
        if len(measured) < _FEWEST_ROWS:
            course[k] = coarse[k]
            continue
        # Beyond what was measured a cubic runs wild.
        course[k, : measured[0]] = coarse[k, : measured[0]]
        course[k, measured[-1] + 1 :] = coarse[k, measured[-1] + 1 :]
    return course


def _fill(mask: NDArray[Any], a: NDArray[np.float64], b: NDArray[np.float64]) -> None:
    """Draw the band of pixels whose centres lie between two courses."""
    known = np.isfinite(a) & np.isfinite(b) & (b > a)
    if not known.any():
        return
    step = max(1, len(a) // _COURSE_ROWS)
    rows = np.nonzero(known)[0]
    rows = rows[(np.arange(len(rows)) % step == 0) | (rows == rows[-1])]
    outline = np.concatenate(
        [np.column_stack([np.ceil(a[rows]), rows]), np.column_stack([np.floor(b[rows]), rows])[::-1]]
    )
    cv2.fillPoly(mask, [np.rint(outline).astype(np.int32)], 255)


def _components(mask: NDArray[Any], least_area: float) -> list[tuple[tuple[int, int, int, int], NDArray[Any]]]:
    """Return bounding box and mask of each connected part."""
    if not cv2.countNonZero(mask):
        return []
    x, y, w, h = cv2.boundingRect(mask)
    _, labels, stats, _ = cv2.connectedComponentsWithStats(
        np.ascontiguousarray(mask[y : y + h, x : x + w]), connectivity=8
    )
    found = []
    for k in np.nonzero(stats[1:, cv2.CC_STAT_AREA] >= least_area)[0] + 1:
        bx, by, bw, bh = (int(v) for v in stats[k, :4])
        part = labels[by : by + bh, bx : bx + bw] == k
        found.append(((bx + x, by + y, bw, bh), part))
    return found


class _Look:
    """A closer look at one finding: what it touches."""

    def __init__(
        self,
        ink: NDArray[Any],
        left: NDArray[np.float64],
        right: NDArray[np.float64],
        slack: NDArray[np.float64],
        box: tuple[int, int, int, int],
        inside: NDArray[np.bool_],
        *,
        missing: bool,
    ) -> None:
        self.box, self.inside, self.missing = box, inside, missing
        x, y, w, h = box
        rows = np.arange(y, y + h)
        columns, counts = np.nonzero(inside)[1] + x, np.nonzero(inside)[0]
        middle = y + int(np.median(counts))
        at = float(np.median(columns))
        if missing:
            self.line = int(np.argmin(np.abs((left[:, middle] + right[:, middle]) / 2 - at)))
            k = self.line
            near, far = left[k, rows], right[k, rows]
            a, b = near - slack[k, 0] - 1, far + slack[k, 1] + 1
        else:
            self.line = int(np.sum(left[:, middle] < at)) - 1
            k = self.line
            near = right[k, rows] if k >= 0 else np.full(h, -np.inf)
            far = left[k + 1, rows] if k + 1 < len(left) else np.full(h, np.inf)
            a = near - slack[k, 1] - 1 if k >= 0 else near
            b = far + slack[k + 1, 0] + 1 if k + 1 < len(left) else far
        # What it joins is judged in its own rows only, so that nothing is joined around its ends.
        low = int(np.clip(np.where(np.isfinite(a), a, x - 2).min() - 1, 0, ink.shape[1] - 1))
        high = int(np.clip(np.where(np.isfinite(b), b, x + w + 2).max() + 2, low + 1, ink.shape[1]))
        low, high = min(low, x), max(high, x + w)
        part = ink[y : y + h, low:high] == 0 if missing else ink[y : y + h, low:high] > 0
        _, labels = cv2.connectedComponents(part.astype(np.uint8), connectivity=4 if missing else 8)
        own = np.unique(labels[:, x - low : x - low + w][inside & part[:, x - low : x - low + w]])
        whole = np.isin(labels, own[own > 0])
        place = np.arange(low, high)[None, :]
        self.left = bool((whole & (place <= a[:, None])).any())
        self.right = bool((whole & (place >= b[:, None])).any())
        self.whole, self.low = whole & (place > near[:, None]) & (place < far[:, None]), low
        # Columns counted from the course, so that a tilted line's defect is not cut askew.
        reference = a if np.isfinite(a).all() else b if np.isfinite(b).all() else np.full(h, float(x))
        offset = np.rint(columns - reference[counts]).astype(int)
        self.across = np.bincount(offset - offset.min())

    def defect(self) -> Defect:
        """Name it."""
        x, y, _, h = self.box
        both, one = self.left and self.right, self.left or self.right
        kind = (
            ("open" if both else "neck" if one else "void")
            if self.missing
            else ("bridge" if both else "bulge" if one else "satellite")
        )
        body = self.whole if self.whole.any() else self.inside
        shift = self.low if self.whole.any() else x
        rows, columns = np.nonzero(body)
        extent = float(h)
        if kind in ("bridge", "open"):
            inner = self.across[len(self.across) // 8 : len(self.across) - len(self.across) // 8]
            extent = float(inner[inner > 0].min())
        contour = max(cv2.findContours(body.astype(np.uint8), cv2.RETR_EXTERNAL, cv2.CHAIN_APPROX_SIMPLE)[0], key=len)
        return Defect(
            kind=kind,
            line=self.line,
            left=self.left,
            right=self.right,
            rows=(y, y + h - 1),
            x=float(columns.mean() + shift),
            y=float(rows.mean() + y),
            extent=extent,
            area=float(body.sum()),
            outline=contour[:, 0] + np.array([shift, y], dtype=np.float64),
        )
