"""Find the lines of a picture: which way they run, how many there are, and roughly where their edges are."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import cv2
import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

MAX_TILT_DEG = 30.0
_BAND_ROWS, _BANDS, _BAND_PIXELS = 12, (3, 32), 150_000  # the direction is taken from this much of a large picture
_CLEAR = 0.6  # of all votes for one direction settles it
_SHRINKS = (1, 4)  # edges so rough that they have no direction up close have one from afar
_TYPICAL = 4000  # pixels that tell the typical gradient of a band
_SPREAD_DEG = 8  # a line that wanders shows its course in a range of angles
_BLOCKS = 48  # so many blocks along the lines, where there are rows enough
_BLOCK_ROWS = 2, 64
_ROWS_USED = 8  # of each block, enough to lift a line out of the noise
SMOOTH_PX = (1.0, 3.0)  # the second is tried where the first finds nothing: strong blur in strong noise
_NOISE_PIXELS = 20_000
_NOISE_SIGMAS = 6.0  # a step counts when it stands out of the noise by this much
_RELATIVE_STEP = 0.12  # and is at least this part of the picture's strong steps
_APART_BLOCKS, _SLOPE_BINS, _LIKELY = 4, 61, 0.7  # the lines' slope is checked on pieces this far apart
_END_BLOCKS = (5, 25)
_FOLLOW = 0.3  # how fast a chain follows a line that wanders
_HALO_PX, _HALO = 10.0, 4.0  # so close, and so much weaker
_COVERED = 0.4  # a line shows its edges over at least this part of its way through the region


@dataclass(frozen=True, slots=True)
class Direction:
    """Which way the lines run.

    Parameters
    ----------
    vertical : bool
        True where they run along the columns of the picture.
    slope : float
        Change of the across coordinate per unit of the along coordinate.
    rival : float
        Strength of edges along the other axis over that along this one.
    """

    vertical: bool
    slope: float
    rival: float


@dataclass(frozen=True, slots=True)
class CoarseLine:
    """One line as found: rough edges in blocks of rows.

    Parameters
    ----------
    rows : ndarray of float, shape (B,)
        Middle row of each block in which both edges were seen. [px]
    left, right : ndarray of float, shape (B,)
        Columns of the edges. [px]
    covered : float
        Share of its way through the region over which it was seen.
    """

    rows: NDArray[np.float64]
    left: NDArray[np.float64]
    right: NDArray[np.float64]
    covered: float = 1.0


def find_direction(image: NDArray[Any], *, vertical: bool | None = None, smooth: float = SMOOTH_PX[0]) -> Direction:
    """Return the direction in which most edges run, within 30 degrees of an axis.

    Parameters
    ----------
    image : ndarray, shape (M, N)
        Picture. [counts]
    vertical : bool, optional
        Look only at lines along the columns (True) or the rows (False).
    smooth : float, optional
        Gaussian sigma of the smoothing. [px]

    Returns
    -------
    Direction
        Axis, slope and the other axis' strength.

    Notes
    -----
    Histogram of gradient angles, weighted with the squared gradient above its noise, in bands of rows and of columns.
    """
    spread = range(-_SPREAD_DEG // 2, _SPREAD_DEG // 2 + 1)
    votes = np.zeros(180)
    clearest = 0.0
    for shrink in _SHRINKS:
        raw = _votes(image, smooth, shrink)
        wide = np.asarray(sum(np.roll(raw, k) for k in spread))
        clear = float(wide.max()) / max(float(raw.sum()), 1e-30)
        if clear > clearest:
            votes, clearest = wide, clear
        if clear > _CLEAR:
            break
    reach = round(MAX_TILT_DEG) + 2 + _SPREAD_DEG
    near = np.arange(-reach, reach + 1)
    strength = {True: votes[near % 180], False: votes[(near + 90) % 180]}
    best = {key: float(value[_SPREAD_DEG:-_SPREAD_DEG].max()) for key, value in strength.items()}
    upright = best[True] >= best[False] if vertical is None else vertical
    peak = _SPREAD_DEG + int(np.argmax(strength[upright][_SPREAD_DEG:-_SPREAD_DEG]))
    around = np.arange(max(peak - _SPREAD_DEG, 0), min(peak + _SPREAD_DEG + 1, len(near)))
    floor = float(np.median(strength[upright]))
    weight = np.maximum(strength[upright][around] - floor, 0.0)
    angle = float(np.sum(weight * near[around]) / max(weight.sum(), 1e-30)) if weight.any() else 0.0
    # A gradient at `angle` from +x belongs to a line at `angle` from +y: x falls as y grows.
    slope = -math.tan(math.radians(angle)) if upright else math.tan(math.radians(angle))
    return Direction(upright, slope, best[not upright] / max(best[upright], 1e-30))


def _votes(image: NDArray[Any], smooth: float, shrink: int) -> NDArray[np.float64]:
    """Votes for each gradient angle, from bands of rows and of columns."""
    votes = np.zeros(180)
    for axis in (0, 1):
        size = image.shape[axis]
        band = min(round(_BAND_ROWS * smooth) * shrink, size)
        count = min(max(_BAND_PIXELS // (band * image.shape[1 - axis]), _BANDS[0]), _BANDS[1])
        for start in np.unique(np.linspace(0, size - band, count).astype(int)):
            part = np.asarray(image[start : start + band] if axis == 0 else image[:, start : start + band])
            small = (part.shape[1] // shrink, part.shape[0] // shrink)
            if min(small) < _BAND_ROWS // 2:
                continue
            if shrink > 1:
                part = cv2.resize(part, small, interpolation=cv2.INTER_AREA)
            votes += _angle_votes(np.ascontiguousarray(part, dtype=np.float32), smooth)
    return votes


def _angle_votes(part: NDArray[np.float32], smooth: float) -> NDArray[np.float64]:
    part = cv2.GaussianBlur(part, (0, 0), 1.2 * smooth)
    gx = cv2.Sobel(part, cv2.CV_32F, 1, 0)
    gy = cv2.Sobel(part, cv2.CV_32F, 0, 1)
    # Beyond its border a band is mirrored, and its gradients with it.
    rim = min(3, (min(part.shape) - 2) // 2)
    inner = (slice(rim, -rim), slice(rim, -rim)) if rim else (slice(None), slice(None))
    gx, gy = np.ascontiguousarray(gx[inner]), np.ascontiguousarray(gy[inner])
    power = gx * gx + gy * gy
    some = power.ravel()[:: max(1, power.size // _TYPICAL)]
    # Pure noise has 3.1 times its lowest fifth for its median; dense lines leave no more than that without edges.
    noise = min(float(np.median(some)), 3.1 * float(np.percentile(some, 20)))
    strong = power > 6 * noise
    gx, gy = gx[strong], gy[strong]
    if not gx.size:
        return np.zeros(180)
    angle = cv2.phase(gx, gy, angleInDegrees=True).ravel()
    return np.asarray(np.bincount(np.rint(angle).astype(int) % 180, weights=power[strong], minlength=180), np.float64)


def block_profiles(image: NDArray[Any], slope: float, rows: int) -> tuple[NDArray[np.float32], NDArray[np.float64]]:
    """Average blocks of rows along the lines.

    Parameters
    ----------
    image : ndarray, shape (M, N)
        Picture with lines along the columns. [counts]
    slope : float
        Change of column per row along a line.
    rows : int
        Rows a block; a shorter rest at the end is left out.

    Returns
    -------
    profiles : ndarray of float32, shape (M // rows, N)
        Means of up to 8 rows, at the columns where the lines cross the block's middle. [counts]
    centre : ndarray of float, shape (M // rows,)
        Middle row of each block. [px]
    """
    count, width = image.shape[0] // rows, image.shape[1]
    total = np.zeros((count, width), np.float32)
    seen = np.zeros(width, np.float32)
    for j in range(0, rows, math.ceil(rows / _ROWS_USED)):
        part = image[j : count * rows : rows]
        shift = round((j - (rows - 1) / 2) * slope)
        low, high = max(0, -shift), min(width, width - shift)
        if high <= low:
            continue
        target = total[:, low:high]
        target += part[:, low + shift : high + shift]
        seen[low:high] += 1
    return (total / np.maximum(seen, 1)).astype(np.float32), np.arange(count) * rows + (rows - 1) / 2


def find_lines(image: NDArray[Any], slope: float, *, bright: bool, smooth: float = SMOOTH_PX[0]) -> list[CoarseLine]:
    """Find the lines that run along the columns.

    Parameters
    ----------
    image : ndarray, shape (M, N)
        Picture. [counts]
    slope : float
        Change of column per row along the lines.
    bright : bool
        Ink brighter than what surrounds it.
    smooth : float, optional
        Gaussian sigma of the smoothing across the lines. [px]

    Returns
    -------
    list of CoarseLine
        From left to right.

    Notes
    -----
    Blocks of rows are averaged along the lines; a rising and a falling step, each 6 times above the noise, make a
    piece; pieces that follow each other make a line, over gaps too, when they lie on one course. A thing that
    doesn't run through the region for at least 40 % of its way is no line: letters, drops and dust fall out.
    """
    rows = min(max(image.shape[0] // _BLOCKS, _BLOCK_ROWS[0]), _BLOCK_ROWS[1])
    profiles, centre = block_profiles(image, slope, rows)
    if not len(centre):
        return []
    pieces = _pieces(profiles, smooth, bright=bright)
    better = _common_slope(pieces, rows, slope)
    if abs(better - slope) * rows > 1.0:  # askew enough to smear a block by a pixel
        slope = better
        profiles, centre = block_profiles(image, slope, rows)
        pieces = _pieces(profiles, smooth, bright=bright)
    chains = _chains(pieces, centre, slope)
    lines = _join(chains, slope)
    lines = [replace(line, covered=_covered(line, image.shape[1], centre)) for line in lines]
    kept = [line for line in lines if line.covered >= _COVERED]
    middle = image.shape[0] / 2
    return sorted(kept, key=lambda c: float(np.median((c.left + c.right) / 2 - slope * (c.rows - middle))))


def _common_slope(pieces: list[NDArray[np.float64]], rows: int, slope: float) -> float:
    """Return the slope on which most pieces of blocks some way apart lie; of several, the one nearest to `slope`."""
    apart = min(_APART_BLOCKS, len(pieces) - 1)
    middles = [piece.mean(axis=1) for piece in pieces]
    if apart < 1:
        return slope
    steps = [(b[None, :] - a[:, None]).ravel() for a, b in zip(middles, middles[apart:], strict=False)]
    slopes = np.concatenate(steps) / (apart * rows)
    steepest = math.tan(math.radians(MAX_TILT_DEG + 1))
    slopes = slopes[np.abs(slopes) <= steepest]
    if len(slopes) < len(steps) / 2:
        return slope
    votes = np.histogram(slopes, bins=_SLOPE_BINS, range=(-steepest, steepest))[0]
    votes = np.convolve(votes, np.ones(3), mode="same")
    width = 2 * steepest / _SLOPE_BINS
    place = (np.arange(_SLOPE_BINS) + 0.5) * width - steepest
    likely = np.nonzero(votes >= _LIKELY * votes.max())[0]
    best = place[likely[np.argmin(np.abs(place[likely] - slope))]]
    near = slopes[np.abs(slopes - best) <= 1.5 * width]
    return float(np.median(near))


def _pieces(profiles: NDArray[np.float32], scale: float, *, bright: bool) -> list[NDArray[np.float64]]:
    """Return for each block the left and right edges of what looks like ink, shape (n, 2)."""
    smooth = cv2.GaussianBlur(profiles, (0, 0), sigmaX=scale, sigmaY=1e-3)
    step = np.zeros_like(smooth)
    step[:, 1:-1] = smooth[:, 2:] - smooth[:, :-2]
    if not bright:
        step = -step
    # The noise of a mean, from neighbours across, or from block to block where the lines stand too dense for that.
    every = max(1, profiles.size // _NOISE_PIXELS)
    across = profiles[:, 1::every] - profiles[:, :-1:every]
    along = profiles[1:, ::every] - profiles[:-1, ::every]
    spread = [float(np.median(np.abs(d - np.median(d)))) for d in (across, along) if d.size]
    noise = 1.4826 * min(spread) / math.sqrt(2) * _step_noise(scale)
    size = np.abs(step)
    strong = float(np.percentile(size.max(axis=1), 50))
    least = max(_NOISE_SIGMAS * noise, _RELATIVE_STEP * strong, 1e-6 * float(np.abs(profiles).max()) + 1e-12)
    peak = np.zeros(step.shape, bool)
    middle = size[:, 1:-1]
    peak[:, 1:-1] = (middle > size[:, :-2]) & (middle >= size[:, 2:]) & (middle > least)
    b, at = np.nonzero(peak)
    # A weak step close beside a strong one is the strong one's overshoot.
    amount = size[b, at]
    close = (b[1:] == b[:-1]) & (np.diff(at) <= _HALO_PX * scale)
    keep = np.ones(len(b), bool)
    keep[1:] &= ~(close & (amount[1:] * _HALO < amount[:-1]))
    keep[:-1] &= ~(close & (amount[:-1] * _HALO < amount[1:]))
    b, at = b[keep], at[keep]
    if not len(b):
        return [np.empty((0, 2)) for _ in profiles]
    before, here, after = size[b, at - 1], size[b, at], size[b, at + 1]
    place = at + 0.5 * (before - after) / np.minimum(before - 2 * here + after, -1e-12)
    sign = step[b, at] > 0
    # Of several steps of one sign in a row the strongest stands for them.
    new = np.concatenate([[True], (b[1:] != b[:-1]) | (sign[1:] != sign[:-1])])
    run = np.cumsum(new) - 1
    order = np.lexsort((here, run))
    last = np.concatenate([run[order][1:] != run[order][:-1], [True]])
    best = order[last]
    b, place, sign = b[best], place[best], sign[best]
    left = np.nonzero((b[:-1] == b[1:]) & sign[:-1] & ~sign[1:])[0]
    pairs = np.column_stack([place[left], place[left + 1]])
    return np.split(pairs, np.searchsorted(b[left], np.arange(1, len(profiles))))


def _step_noise(scale: float) -> float:
    """Return the sd of smooth(x + 1) - smooth(x - 1) over that of a pixel."""
    power = 1.0 / (2.0 * math.sqrt(math.pi) * scale)
    return math.sqrt(2.0 * power * (1.0 - math.exp(-1.0 / scale**2)))


class _Chain:
    """Pieces of successive blocks that belong together."""

    def __init__(self, row: float, edges: NDArray[np.float64]) -> None:
        self.rows = [row]
        self.edges = [edges]

    def end(self, row: float, slope: float, blocks: int, *, first: bool) -> NDArray[np.float64]:
        """Edges expected at a row from the nearest blocks."""
        near = slice(None, blocks) if first else slice(-blocks, None)
        rows, edges = np.array(self.rows[near]), np.array(self.edges[near])
        return np.asarray(np.median(edges + slope * (row - rows)[:, None], axis=0))


def _distance(expected: NDArray[np.float64], seen: NDArray[np.float64], slack: float) -> NDArray[np.float64]:
    """Return how far each piece is from each line expected; infinite where it can't be that line."""
    return _distance_of_pairs(expected[:, None], seen[None], slack)


def _distance_of_pairs(expected: NDArray[np.float64], seen: NDArray[np.float64], slack: float) -> NDArray[np.float64]:
    width = expected[..., 1] - expected[..., 0]
    off = np.abs(seen - expected)
    worst = np.maximum(off[..., 0], off[..., 1])
    return np.where(worst <= np.minimum(slack + 0.3 * width, 0.5 * width + 1.5), worst, np.inf)


def _match(expected: NDArray[np.float64], seen: NDArray[np.float64]) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Pair lines with the pieces that continue them, each piece with its nearest line."""
    if not len(expected) or not len(seen):
        return np.empty(0, np.intp), np.empty(0, np.intp)
    if len(expected) == len(seen):
        own = _distance_of_pairs(expected, seen, 2.0)
        if np.isfinite(own).all():  # all lines go on, in order
            return np.arange(len(seen)), np.arange(len(seen))
    distance = _distance(expected, seen, 2.0)
    nearest = distance.argmin(axis=1)
    least = distance[np.arange(len(expected)), nearest]
    order = np.argsort(least, kind="stable")
    order = order[np.isfinite(least[order])]
    _, once = np.unique(nearest[order], return_index=True)
    follow = np.sort(order[once])
    return follow, nearest[follow]


def _chains(pieces: list[NDArray[np.float64]], centre: NDArray[np.float64], slope: float) -> list[_Chain]:
    """Link pieces of successive blocks."""
    done: list[_Chain] = []
    live: list[_Chain] = []
    # Of each live chain: edges expected at its last row, its last row, and its own slope.
    tip, last, course = np.empty((0, 2)), np.empty(0), np.empty(0)
    for row, seen in zip(centre.tolist(), pieces, strict=True):
        expected = tip + (course * (row - last))[:, None]
        follow, piece = _match(expected, seen)
        going = [live[k] for k in follow]
        done += [chain for k, chain in enumerate(live) if k not in set(follow.tolist())]
        for chain, k in zip(going, piece.tolist(), strict=True):
            chain.rows.append(row)
            chain.edges.append(seen[k])
        new = np.setdiff1d(np.arange(len(seen)), piece)
        live = going + [_Chain(row, seen[k]) for k in new]
        off = seen[piece] - expected[follow]
        course = np.concatenate(
            [course[follow] + _FOLLOW * off.mean(axis=1) / (row - last[follow]), np.full(len(new), slope)]
        )
        tip = np.concatenate([expected[follow] + 0.5 * off, seen[new]])
        last = np.full(len(live), row)
    return [c for c in done + live if len(c.rows) > 1]


def _join(chains: list[_Chain], slope: float) -> list[CoarseLine]:
    """Join chains that lie on one course, over gaps."""
    lines: list[_Chain] = []
    for chain in sorted(chains, key=lambda c: c.rows[0]):
        best, least = None, np.inf
        for line in lines:
            gap = chain.rows[0] - line.rows[-1]
            if gap <= 0:
                continue
            # A neck bends the last few blocks; a line that wanders leaves its long course.
            ways = [(course, blocks) for course in (_course(line, slope), slope) for blocks in _END_BLOCKS]
            expected = np.array([line.end(chain.rows[0], course, blocks, first=False) for course, blocks in ways])
            begin = np.array([chain.end(chain.rows[0], course, blocks, first=True) for course, blocks in ways])
            distance = float(_distance_of_pairs(expected, begin, 2.5 + 0.02 * gap).min())
            if distance < least:
                best, least = line, distance
        if best is None:
            lines.append(chain)
        else:
            best.rows += chain.rows
            best.edges += chain.edges
    return [
        CoarseLine(np.array(line.rows), np.array([e[0] for e in line.edges]), np.array([e[1] for e in line.edges]))
        for line in lines
    ]


def _course(line: _Chain, slope: float) -> float:
    """Slope of a chain's own middle, once it is long enough to have one."""
    if len(line.rows) < 6:  # noqa: PLR2004  (fewer blocks give no slope better than the picture's)
        return slope
    middle = np.array(line.edges).mean(axis=1)
    return float(np.polyfit(line.rows, middle, 1)[0])


def _covered(line: CoarseLine, width: int, centre: NDArray[np.float64]) -> float:
    """Return the share of its way through the region over which a line was seen."""
    middle = (line.left + line.right) / 2
    if len(centre) < 3 or len(line.rows) < 2:  # noqa: PLR2004  (a course needs two points)
        return 0.0
    course = np.polyval(np.polyfit(line.rows, middle, 1), centre)
    half = float(np.median(line.right - line.left)) / 2 + 3
    way = (course > half) & (course < width - 1 - half)
    if len(line.rows) < max(3, 0.1 * len(centre)):
        return 0.0
    return len(line.rows) / max(int(way.sum()), 1)
