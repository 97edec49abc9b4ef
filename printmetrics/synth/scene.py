"""Scenes of printed lines whose truth is known."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from printmetrics.synth.raster import blurred_coverage
from printmetrics.synth.roughness import rough_pair

if TYPE_CHECKING:
    from collections.abc import Callable

    from numpy.typing import ArrayLike, NDArray

STEP_PX = 0.125
"""Distance between the points of an edge along its line. [px]"""

_OVERLAP = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """A line to print: straight, rough, or of any given shape.

    Parameters
    ----------
    offset : float
        Distance of its axis from the picture's middle, along the lines' normal (right or down). [px]
    width : float
        Mean of the process of which its width is a sample. [px]
    edge_sd : float, optional
        Standard deviation of each edge. [px]
    correlation_length : float, optional
        Correlation length of the edges. [px]
    exponent : float, optional
        Roughness exponent of the edges. [1]
    rho : float, optional
        Correlation between left and right edge: 1 is pure wiggle, 0 independent, -1 pure width. [1]
    left_departure, right_departure : callable, optional
        Further departure of an edge towards the right or down, as a function of the place along the line. [px]
    span : (float, float), optional
        Where the line begins and ends, along it from the picture's middle; default: beyond the picture. [px]
    """

    offset: float
    width: float
    edge_sd: float = 0.0
    correlation_length: float = 10.0
    exponent: float = 0.5
    rho: float = 0.0
    left_departure: Callable[[NDArray[np.float64]], NDArray[np.float64]] | None = None
    right_departure: Callable[[NDArray[np.float64]], NDArray[np.float64]] | None = None
    span: tuple[float, float] | None = None

    @property
    def width_sd(self) -> float:
        """Standard deviation of the width process, in px: edge_sd * sqrt(2 (1 - rho))."""
        return float(self.edge_sd * np.sqrt(2.0 * (1.0 - self.rho)))


@dataclass(frozen=True, slots=True, kw_only=True)
class Defect:
    """A defect to print.

    Parameters
    ----------
    event : {"open", "bridge", "neck", "bulge", "void", "satellite"}
        An open parts the line, with round ends. A bridge joins `line` and the next one. Neck and bulge are dents
        and bumps of one edge, Gaussian in shape. Void and satellite are round: a hole in the ink, a drop beside it,
        which ink joins to its line where it touches it.
    line : int
        Number of the line in the scene, from 0.
    at : float
        Place along the line, from the picture's middle. [px]
    size : float
        Open: length without ink. Bridge: narrowest extent along the line. Neck, bulge: full length at half depth.
        Void, satellite: diameter. [px]
    depth : float, optional
        Neck, bulge: how far the edge moves. Bridge: how far it flares where it meets the lines. [px]
    side : {"left", "right"}, optional
        Neck, bulge: which edge.
    offset : float, optional
        Void, satellite: distance of the centre from the line's axis. [px]
    """

    event: Literal["open", "bridge", "neck", "bulge", "void", "satellite"]
    line: int
    at: float
    size: float
    depth: float = 0.0
    side: Literal["left", "right"] = "right"
    offset: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Scene:
    """Parallel lines under a camera, without light falloff and noise; those are in `camera`.

    Parameters
    ----------
    shape : (int, int)
        Rows and columns of the picture.
    lines : tuple of Line
        Lines, by rising offset.
    defects : tuple of Defect, optional
        Defects.
    substrate, ink : float, optional
        Levels of web and ink. [counts]
    blur : float or tuple of (float, float), optional
        Sigma of the optics' Gaussian, without the pixel's aperture, which is always added; or weight and sigma of
        several Gaussians, for heavy tails: ``((0.85, s), (0.15, 4 * s))``. [px]
    direction : {"vertical", "horizontal"}, optional
        The axis next to which the lines run.
    tilt_deg : float, optional
        Angle from that axis, positive from +x towards +y; a vertical line with positive tilt runs to smaller x as y
        grows. [deg]
    """

    shape: tuple[int, int]
    lines: tuple[Line, ...]
    defects: tuple[Defect, ...] = ()
    substrate: float = 50.0
    ink: float = 200.0
    blur: float | tuple[tuple[float, float], ...] = 1.0
    direction: Literal["vertical", "horizontal"] = "vertical"
    tilt_deg: float = 0.0

    @property
    def gaussians(self) -> tuple[tuple[float, float], ...]:
        """Weight and sigma of the Gaussians that make up the blur."""
        return ((1.0, self.blur),) if isinstance(self.blur, int | float) else self.blur

    @property
    def axes(self) -> NDArray[np.float64]:
        """Unit vectors along the lines and along their normal (right or down), as rows of x and y."""
        c, s = np.cos(np.deg2rad(self.tilt_deg)), np.sin(np.deg2rad(self.tilt_deg))
        x, y = np.array([c, s]), np.array([-s, c])
        return np.stack([y, x]) if self.direction == "vertical" else np.stack([x, y])

    def to_picture(self, along: ArrayLike, across: ArrayLike) -> NDArray[np.float64]:
        """Turn places along and across the lines, from the picture's middle, into x and y.

        Parameters
        ----------
        along, across : array_like, shape (n,)
            Place along the lines and along their normal. [px]

        Returns
        -------
        ndarray of float, shape (n, 2)
            x and y, pixel centres at whole numbers. [px]
        """
        middle = (np.array(self.shape[::-1]) - 1.0) / 2.0
        place = np.stack(np.broadcast_arrays(np.asarray(along, float), np.asarray(across, float)), axis=-1)
        return np.asarray(middle + place @ self.axes)


@dataclass(frozen=True, slots=True, kw_only=True)
class Statistics:
    """What a piece of a line measures, exactly.

    Parameters
    ----------
    length : float
        Length of the piece. [px]
    width_mean : float
        Mean width, normal to the line, as it would be without the defects. [px]
    width_sd : float
        Standard deviation of the local width about its mean, without the defects. [px]
    left_sd, right_sd : float
        Standard deviation of an edge about its best straight line, without the defects. [px]
    width_min, width_max : float
        Extremes of the local width averaged over the neck length, defects included; bridges are not width. [px]
    width_harmonic : float
        1 / mean(1 / width), defects included; 0 where the line is open. [px]
    """

    length: float
    width_mean: float
    width_sd: float
    left_sd: float
    right_sd: float
    width_min: float
    width_max: float
    width_harmonic: float


@dataclass(frozen=True, slots=True, kw_only=True)
class LineTruth:
    """The edges as printed.

    Parameters
    ----------
    line : Line
        The line, with the parameters of its process.
    along : ndarray of float, shape (n,)
        Places along the line, every `STEP_PX`, from the picture's middle. [px]
    left, right : ndarray of float, shape (n,)
        Edges, across, from the picture's middle, defects included; equal where the line is open. [px]
    clean_left, clean_right : ndarray of float, shape (n,)
        The same without the defects. [px]
    inside : (float, float)
        Part of the line whose axis is in the picture. [px]
    """

    line: Line
    along: NDArray[np.float64]
    left: NDArray[np.float64]
    right: NDArray[np.float64]
    clean_left: NDArray[np.float64]
    clean_right: NDArray[np.float64]
    inside: tuple[float, float]

    def statistics(self, neck_length: float = 0.0, piece: tuple[float, float] | None = None) -> Statistics:
        """Return what a piece of the line measures.

        Parameters
        ----------
        neck_length : float, optional
            Length over which local width is averaged for the extremes. [px]
        piece : (float, float), optional
            From where to where along the line; default: what is inside the picture. [px]

        Returns
        -------
        Statistics
            Of that piece.
        """
        first, last = piece or self.inside
        here = (self.along >= first) & (self.along <= last)
        s, left, right = self.along[here], self.clean_left[here], self.clean_right[here]
        width, printed = right - left, (self.right - self.left)[here]
        local = _running_mean(printed, neck_length)
        with np.errstate(divide="ignore"):
            harmonic = 1.0 / np.mean(1.0 / printed)
        return Statistics(
            length=last - first,
            width_mean=float(width.mean()),
            width_sd=float(width.std()),
            left_sd=float(np.std(left - np.polynomial.Polynomial.fit(s, left, 1)(s))),
            right_sd=float(np.std(right - np.polynomial.Polynomial.fit(s, right, 1)(s))),
            width_min=float(local.min()),
            width_max=float(local.max()),
            width_harmonic=float(harmonic),
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class DefectTruth:
    """A defect as printed.

    Parameters
    ----------
    event : str
        As in `Defect`.
    item : str
        ``L1``, or ``L1..L2`` for what lies between neighbours.
    x, y : float
        Its middle in the picture. [px]
    size : float
        As in `Defect`. [px]
    area : float
        Area of ink missing or in excess. [px2]
    """

    event: str
    item: str
    x: float
    y: float
    size: float
    area: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Truth:
    """What a rendered scene shows.

    Parameters
    ----------
    scene : Scene
        The scene.
    lines : tuple of LineTruth
        Its lines as printed.
    defects : tuple of DefectTruth
        Its defects as printed.
    """

    scene: Scene
    lines: tuple[LineTruth, ...]
    defects: tuple[DefectTruth, ...]

    def edge_points(self, number: int, side: Literal["left", "right"]) -> NDArray[np.float64]:
        """Return an edge in the picture.

        Parameters
        ----------
        number : int
            Number of the line, from 0.
        side : {"left", "right"}
            Which edge; left is the one at smaller x, or top.

        Returns
        -------
        ndarray of float, shape (n, 2)
            x and y. [px]
        """
        line = self.lines[number]
        return self.scene.to_picture(line.along, line.left if side == "left" else line.right)

    def spaces(
        self, number: int, neck_length: float = 0.0, piece: tuple[float, float] | None = None
    ) -> tuple[float, float]:
        """Return mean and smallest space between a line and the next.

        Parameters
        ----------
        number : int
            Number of the first of the two lines, from 0.
        neck_length : float, optional
            Length over which local space is averaged for the smallest. [px]
        piece : (float, float), optional
            From where to where along the lines; default: where both are inside the picture. [px]

        Returns
        -------
        (float, float)
            Mean without defects, smallest with them, 0 at a bridge. Satellites do not count. [px]
        """
        one, two = self.lines[number : number + 2]
        first, last = piece or (max(one.inside[0], two.inside[0]), min(one.inside[1], two.inside[1]))
        ones, twos = (((line.along >= first) & (line.along <= last)) for line in (one, two))
        mean = float(two.clean_left[twos].mean() - one.clean_right[ones].mean())
        bridges = [defect.at for defect in self.scene.defects if defect.event == "bridge" and defect.line == number]
        if any(first <= at <= last for at in bridges):
            return mean, 0.0
        return mean, float(_running_mean(two.left[twos] - one.right[ones], neck_length).min())


def _running_mean(values: NDArray[np.float64], length: float) -> NDArray[np.float64]:
    count = max(1, round(length / STEP_PX))
    sums = np.cumsum(np.concatenate([[0.0], values]))
    return np.asarray((sums[count:] - sums[:-count]) / count)


def render(scene: Scene, rng: np.random.Generator) -> tuple[NDArray[np.float64], Truth]:
    """Print a scene and take its picture, without noise.

    Parameters
    ----------
    scene : Scene
        What to print.
    rng : numpy.random.Generator
        Source of the roughness.

    Returns
    -------
    image : ndarray of float, shape (M, N)
        Expected signal. [counts]
    truth : Truth
        What it shows.

    Raises
    ------
    ValueError
        When outlines of ink overlap where it can be seen, so that ink would count twice.

    Examples
    --------
    >>> scene = Scene(shape=(64, 48), lines=(Line(offset=0.0, width=20.0),))
    >>> image, truth = render(scene, np.random.default_rng(1))
    >>> image.shape, truth.lines[0].statistics().width_mean
    ((64, 48), 20.0)
    """
    rows, cols = scene.shape
    lines = [_draw(scene, line, rng) for line in scene.lines]
    defects: list[DefectTruth] = []
    inked: list[NDArray[np.float64]] = []
    bare: list[NDArray[np.float64]] = []
    for defect in scene.defects:
        line = lines[defect.line]
        item = f"L{defect.line + 1}"
        if defect.event in ("open", "neck", "bulge") or (defect.event == "satellite" and _touches(line, defect)):
            lines[defect.line], across, area = _reshape(line, defect)
        elif defect.event == "bridge":
            item += f"..L{defect.line + 2}"
            outline = _bridge(line, lines[defect.line + 1], defect)
            across, area = float(outline[:, 1].mean()), _area(outline)
            inked.append(outline)
        else:
            across, area = line.line.offset + defect.offset, np.pi / 4 * defect.size**2
            turn = np.linspace(0.0, 2 * np.pi, 720, endpoint=False)
            disc = np.stack([defect.at + defect.size / 2 * np.cos(turn), across + defect.size / 2 * np.sin(turn)], 1)
            (inked if defect.event == "satellite" else bare).append(disc)
        x, y = scene.to_picture(defect.at, across)
        defects.append(
            DefectTruth(event=defect.event, item=item, x=float(x), y=float(y), size=defect.size, area=float(area))
        )
    inked += [
        np.stack([np.concatenate([line.along, line.along[::-1]]), np.concatenate([line.left, line.right[::-1]])], 1)
        for line in lines
    ]
    # The raster is quickest for outlines that run down the picture: horizontal lines are rendered on their side.
    flip = slice(None, None, -1) if scene.direction == "horizontal" else slice(None)
    share = blurred_coverage(
        [scene.to_picture(*outline.T)[:, flip] for outline in inked],
        [scene.to_picture(*outline.T)[:, flip] for outline in bare],
        (cols, rows) if scene.direction == "horizontal" else (rows, cols),
        scene.gaussians,
        round(1 / STEP_PX),
    )
    share = share.T if scene.direction == "horizontal" else share
    if share.min() < -_OVERLAP or share.max() > 1 + _OVERLAP:
        msg = "outlines overlap: lines too close, a defect that reaches another line, or a void that leaves its line"
        raise ValueError(msg)
    image = scene.substrate + (scene.ink - scene.substrate) * share
    return image, Truth(scene=scene, lines=tuple(lines), defects=tuple(defects))


def _draw(scene: Scene, line: Line, rng: np.random.Generator) -> LineTruth:
    """Draw the edges of a line over the whole picture and a margin."""
    along, across = scene.axes
    rows, cols = scene.shape
    half = np.array([cols, rows]) / 2.0
    # Where the axis enters and leaves the picture: the nearest crossings of its four sides.
    crossings = [
        sorted(((side * half[k]) - line.offset * across[k]) / along[k] for side in (-1, 1))
        for k in (0, 1)
        if abs(along[k]) > 1e-9  # noqa: PLR2004  (parallel to a side: never crosses it)
    ]
    inside = max(c[0] for c in crossings), min(c[1] for c in crossings)
    if line.span:
        inside = max(inside[0], line.span[0]), min(inside[1], line.span[1])
    margin = 8 * max(sigma for _, sigma in scene.gaussians) + 8
    reach = float(np.hypot(rows, cols)) / 2 + margin
    first, last = line.span or (-reach, reach)
    # Points on the half pixels' raster: an upright line's points then fall on the borders of the bands.
    first = np.floor(first / STEP_PX) * STEP_PX
    s = first + STEP_PX * np.arange(int(np.ceil((last - first) / STEP_PX)) + 1)
    edges = np.repeat([[line.offset - line.width / 2], [line.offset + line.width / 2]], len(s), axis=1)
    if line.edge_sd > 0:
        edges += rough_pair(
            len(s), STEP_PX, sd=line.edge_sd, correlation_length=line.correlation_length, exponent=line.exponent,
            rho=line.rho, rng=rng,
        )  # fmt: skip
    for side, departure in enumerate((line.left_departure, line.right_departure)):
        if departure is not None:
            edges[side] += departure(s)
    left, right = _uncross(*edges)
    return LineTruth(
        line=line, along=s, left=left, right=right, clean_left=left, clean_right=right,
        inside=(float(inside[0]), float(inside[1])),
    )  # fmt: skip


def _uncross(left: NDArray[np.float64], right: NDArray[np.float64]) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Where the edges would pass each other there is no ink."""
    middle = (left + right) / 2
    return np.minimum(left, middle), np.maximum(right, middle)


def _reshape(line: LineTruth, defect: Defect) -> tuple[LineTruth, float, float]:
    """Move the edges for a defect that is part of the line; return the line, the place across, and the area changed."""
    s, left, right = line.along - defect.at, line.left, line.right
    middle = (left + right) / 2
    across = {"left": left, "right": right}[defect.side]
    if defect.event == "open":
        radius = line.line.width / 2
        to_end = np.clip((np.abs(s) - defect.size / 2) / radius, 0.0, 1.0)
        share = np.sqrt(1.0 - (1.0 - to_end) ** 2)
        left, right, across = middle + share * (left - middle), middle + share * (right - middle), middle
    elif defect.event == "satellite":
        # Ink wets the corner between drop and line: the edge runs around the drop, single-valued.
        chord = np.sqrt(np.maximum((defect.size / 2) ** 2 - s**2, 0.0))
        across = np.full_like(s, line.line.offset + defect.offset)
        left = np.where(chord > 0, np.minimum(left, across - chord), left)
        right = np.where(chord > 0, np.maximum(right, across + chord), right)
    else:
        sign = {"neck": -1, "bulge": 1}[defect.event] * {"left": -1, "right": 1}[defect.side]
        move = sign * defect.depth * np.exp2(-((2 * s / defect.size) ** 2))
        left, right = (left + move, right) if defect.side == "left" else (left, right + move)
        left, right = _uncross(left, right)
    area = STEP_PX * np.sum(np.abs((right - left) - (line.right - line.left)))
    return replace(line, left=left, right=right), float(across[np.argmin(np.abs(s))]), float(area)


def _touches(line: LineTruth, defect: Defect) -> bool:
    """Whether a drop reaches its line."""
    here = np.abs(line.along - defect.at) < defect.size / 2
    chord = np.sqrt((defect.size / 2) ** 2 - (line.along[here] - defect.at) ** 2)
    across = line.line.offset + defect.offset
    return bool(np.any((across + chord > line.left[here]) & (across - chord < line.right[here])))


def _bridge(one: LineTruth, two: LineTruth, defect: Defect) -> NDArray[np.float64]:
    """Outline of a bridge: it follows the facing edges exactly, so no ink is counted twice."""
    end = defect.size / 2 + defect.depth
    tau = np.linspace(0.0, 1.0, 64)
    bow = defect.size / 2 + defect.depth * (2 * tau - 1) ** 2

    def side(line: LineTruth, edge: NDArray[np.float64]) -> NDArray[np.float64]:
        # The edge's own points, so that both outlines run along the same straight pieces.
        own = line.along[(line.along > defect.at - end) & (line.along < defect.at + end)]
        places = np.concatenate([[defect.at - end], own, [defect.at + end]])
        return np.stack([places, np.interp(places, line.along, edge)], 1)

    near, far = side(one, one.right), side(two, two.left)
    bottom = np.stack([defect.at + bow, near[-1, 1] + tau * (far[-1, 1] - near[-1, 1])], 1)
    top = np.stack([defect.at - bow, near[0, 1] + tau * (far[0, 1] - near[0, 1])], 1)
    return np.concatenate([near, bottom[1:-1], far[::-1], top[-2:0:-1]])


def _area(outline: NDArray[np.float64]) -> float:
    x, y = outline.T
    return float(abs(np.sum(x * np.roll(y, -1) - y * np.roll(x, -1))) / 2)
