"""One line: its figures, and the readings that follow from them."""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import ndtri

from printmetrics.analysis.finding import MAX_TILT_DEG
from printmetrics.analysis.process import palasantzas_autocovariance
from printmetrics.analysis.roughness import Process, Record, amplitude_filter, fit_spectra, u_mean, unbiased_sd
from printmetrics.errors import FeatureError
from printmetrics.flags import Flag
from printmetrics.measure.lines.geometry import Straightened, slope_of, straighten
from printmetrics.measure.readings import Reading, effective_dof
from printmetrics.quantities import CATALOGUE

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from printmetrics.analysis.tracing import EdgeShape, Trace
    from printmetrics.measure.lines.options import LinesOptions
    from printmetrics.measure.lines.seeing import Seen
    from printmetrics.measure.sight import Sight

HARDCOPY_LEVEL = 0.4
NECK_BLURS = 4.0  # default neck_length
_LEVEL_SHARE = 0.1  # of a level's distance from mid-level that an edge unlike a Gaussian may shift it
_SATURATED = 0.01
_LOW_CONTRAST = 4.0
_RESOLVED_BLURS = 3.0
_RESOLVED_RAYLEIGH = 0.61
_SPACE_BLURS = 3.5
_SLOPE_BLUR = 0.235  # edge sigma of an aberration-free objective, in wavelength / NA
_DEFOCUSED = 2.0
_UNEVEN = 0.25
_SHARPENED = 0.004
_FEWEST_KEPT = 8  # places with both edges that must be left when rows are left out
_SKEWED = 0.004
_STEEPEST = math.tan(math.radians(MAX_TILT_DEG + 1.0))
_SURE = 3.5  # standard errors by which a skew must stand out
_SKEW_SHIFT = 35.0  # shift of an edge, in blurs, per skew: measured on gamma 1.2 and 2.2 left in
_TYPICAL_ROWS = 128
_NONLINEAR = 0.6  # rms move of an edge within one blur along it, over the blur
_END_SHARE = 0.4  # of a blur: light from beyond its end mixes into the mean of a piece
_MISMATCH = 0.25
_MATTERS = 0.04
_GAPS = 0.2
STANDS_OUT = 5.0
_SQRT3 = math.sqrt(3.0)
_SERIES = ("width", "left", "right")


@dataclass(frozen=True, slots=True, kw_only=True)
class LineFigures:
    """What readings of a line, and of its neighbours, are made from; lengths in the scale's unit.

    Parameters
    ----------
    name : str
        ``L3``.
    straight : Straightened
        Both edges along the line; rows hit by a defect are NaN.
    whole : Straightened
        The same with every row in which both edges were measured.
    covariance : ndarray of float, shape (2, 2)
        Of the mean edges, from pixel noise.
    u_point : ndarray of float, shape (2,)
        Of one edge point, from pixel noise.
    blur, u_blur : ndarray of float, shape (2,)
        Gaussian sigma of either edge, across the line, and its standard uncertainty from pixel noise.
    u_shape : ndarray of float, shape (2,)
        Standard uncertainty of either edge's mean position because its shape isn't the model's.
    count : int
        Places along the line at which both edges were measured.
    level_shift : float
        By how much the width at the recipe's edge level exceeds that at mid-level.
    flags : Flag
        What is doubtful about the line as a whole.
    width, left, right : Process or None
        Fitted processes; None where the line is too short or perfectly straight.
    mean_u : dict of str to (float, float)
        Standard uncertainty of the mean of ``width``, ``left`` and ``right`` as that of the process, and its degrees
        of freedom; empty where a fit is missing.
    """

    name: str
    straight: Straightened
    whole: Straightened
    covariance: NDArray[np.float64]
    u_point: NDArray[np.float64]
    blur: NDArray[np.float64]
    u_blur: NDArray[np.float64]
    u_shape: NDArray[np.float64]
    count: int
    level_shift: float
    flags: Flag
    width: Process | None = None
    left: Process | None = None
    right: Process | None = None
    mean_u: dict[str, tuple[float, float]] = field(default_factory=dict)

    @property
    def length(self) -> float:
        """Length measured."""
        return self.count * self.straight.step

    @property
    def centre_variance(self) -> float:
        """Variance of the mean position of the line's middle that its wander along the way brings.

        S_middle = (S_left + S_right) / 2 - S_width / 4 at frequency zero, from S_width = S_left + S_right - 2 S_LR.
        """
        left, right, width = (self.mean_u[name][0] ** 2 for name in ("left", "right", "width"))
        return max((left + right) / 2 - width / 4, (left + right) / 8)


def level_shift(blur: NDArray[np.float64], level: float, *, bright: bool) -> float:
    """Return by how much a line is wider at a level than at mid-level.

    Parameters
    ----------
    blur : ndarray of float, shape (2,)
        Gaussian sigma of either edge. [length]
    level : float
        Counted from dark (0) to bright (1).
    bright : bool
        Ink brighter than the web.

    Returns
    -------
    float
        Positive where wider. [length]

    Notes
    -----
    The level p of a Gaussian edge lies sigma * Phi^-1(p) from its middle, towards the bright side.

    Examples
    --------
    A dark line at the 40 % level reads 0.50669 sigma narrow.

    >>> round(level_shift(np.array([1.0, 1.0]), 0.4, bright=False), 5)
    -0.50669
    """
    shift = float(ndtri(level)) * float(blur.sum())
    return -shift if bright else shift


def line_figures(seen: Seen, sight: Sight, options: LinesOptions) -> list[LineFigures]:
    """Bring all traced lines into lengths, and fit their roughness.

    Parameters
    ----------
    seen : Seen
        All lines.
    sight : Sight
        For the scale and the optics.
    options : LinesOptions
        For the edge level.

    Returns
    -------
    list of LineFigures
        Figures of each line.
    """
    lines = [_geometry(seen, k, sight, options) for k in range(len(seen.traces))]
    along, across = (sight.scale.y, sight.scale.x) if seen.direction.vertical else (sight.scale.x, sight.scale.y)
    records = {}
    for k, line in enumerate(lines):
        # The same optics blur the edge along the line; so do rows added up.
        around = along * math.hypot(float(line.blur.mean()) / across, math.sqrt((seen.row_step**2 - 1) / 12))
        for name in _SERIES:
            record = _record(line, name, around)
            if record is not None:
                records[k, name] = record
    fits = dict(zip(records, fit_spectra(list(records.values())), strict=True))
    return [_with_fits(line, *(fits.get((k, name)) for name in _SERIES)) for k, line in enumerate(lines)]


def _with_fits(line: LineFigures, width: Process | None, left: Process | None, right: Process | None) -> LineFigures:
    fits = zip(_SERIES, (width, left, right), strict=True)
    mean_u = {name: u_mean(fit, line.length) for name, fit in fits if fit is not None}
    return replace(line, width=width, left=left, right=right, mean_u=mean_u if len(mean_u) == len(_SERIES) else {})


def _geometry(seen: Seen, k: int, sight: Sight, options: LinesOptions) -> LineFigures:
    """Bring one traced line into lengths; its roughness is yet to be fitted."""
    trace, scale = seen.traces[k], sight.scale
    along, across = (scale.y, scale.x) if seen.direction.vertical else (scale.x, scale.y)
    rows = seen.to_rows(np.arange(trace.edges.shape[1], dtype=np.float64))
    rows += seen.origin[1 if seen.direction.vertical else 0]
    start = seen.origin[0 if seen.direction.vertical else 1]
    points = np.stack([np.column_stack([rows * along, (edge + start) * across]) for edge in trace.edges])
    points = _without(points, seen.spoiled[k], least=0.0)
    clean = _without(points, seen.hit[k], least=0.25)
    slope = slope_of(clean)
    straight = straighten(clean, slope, along * seen.row_step)
    normal = across / math.hypot(1.0, slope)  # length across the line per pixel along the row
    blur = trace.blur * normal
    u_point = trace.u_row * normal
    return LineFigures(
        name=seen.names[k],
        straight=straight,
        whole=straight if clean is points else straighten(points, slope, along * seen.row_step),
        covariance=trace.covariance * normal**2,
        u_point=u_point,
        blur=blur,
        u_blur=trace.u_blur * normal,
        u_shape=np.array([_u_shape(shape, _skew(trace), b) for shape, b in zip(trace.shapes, trace.blur, strict=True)])
        * normal,
        count=int(np.isfinite(straight.width).sum()),
        level_shift=level_shift(blur, options.edge_level, bright=options.ink == "bright"),
        flags=_flags(seen, k, sight, blur, options) | (Flag.OUTSIDE_VALIDITY if abs(slope) > _STEEPEST else Flag.NONE),
    )


def _skew(trace: Trace) -> float:
    """Return the mean skew of a line's edges; 0 where it doesn't stand out of the noise."""
    skew = sum(shape.skew for shape in trace.shapes) / 2
    return skew if abs(skew) > _SURE * math.hypot(*(shape.u_skew for shape in trace.shapes)) / 2 else 0.0


def _without(points: NDArray[np.float64], rows: NDArray[np.bool_], least: float) -> NDArray[np.float64]:
    """Leave out rows of either edge, unless no more than a share of the line would be left."""
    if not rows.any():
        return points
    rest = points.copy()
    rest[rows] = np.nan
    both, kept = (np.isfinite(p[..., 1]).all(axis=0).sum() for p in (points, rest))
    return rest if kept > max(least * both, _FEWEST_KEPT) else points


def _u_shape(shape: EdgeShape, skew: float, blur: float) -> float:
    """Return the standard uncertainty of an edge's position along the row from its shape. [px]."""
    return math.hypot(abs(shape.shift) / _SQRT3, _SKEW_SHIFT * abs(skew) * blur / _SQRT3, shape.steady)


def _record(line: LineFigures, name: str, blur: float) -> Record | None:
    """Return the width or an edge as it is fitted; None where it is too short."""
    straight, side = line.straight, ("left", "right").index(name) if name != "width" else None
    values: NDArray[np.float64] = getattr(straight, name)
    known = np.isfinite(values)
    if not known.any():
        return None
    first, last = np.nonzero(known)[0][[0, -1]]
    part = values[first : last + 1]
    if side is not None:
        place = np.arange(len(part), dtype=np.float64)
        good = np.isfinite(part)
        middle = place[good].mean()
        slope = (place[good] - middle) @ part[good] / max(float(((place[good] - middle) ** 2).sum()), 1e-30)
        part = part - part[good].mean() - slope * (place - middle)
    noise = float(np.sqrt((line.u_point**2).mean())) if side is None else float(line.u_point[side])
    try:
        return Record(
            data=part,
            step=straight.step,
            blur=blur,
            noise_expected=max(noise, 1e-12),
            noise_multiplicity=2 if side is None else 1,
            noise_transfer=straight.width_transfer if side is None else straight.transfer[side],
            line_removed=side is not None,
        )
    except FeatureError:
        return None


def _flags(seen: Seen, k: int, sight: Sight, blur: NDArray[np.float64], options: LinesOptions) -> Flag:
    """Judge a line as a whole; each criterion stands in the documentation of the flags."""
    trace = seen.traces[k]
    sigma = float(trace.blur.max())
    doubts = {
        Flag.LOW_CONTRAST: trace.contrast < _LOW_CONTRAST * trace.noise,
        Flag.UNEVEN_LIGHT: trace.bare_range > _UNEVEN * trace.contrast,
        Flag.SHARPENED: np.mean([shape.overshoot for shape in trace.shapes]) > _SHARPENED,
        Flag.OUTSIDE_VALIDITY: abs(_skew(trace)) > _SKEWED,
        Flag.CUT_BY_BORDER: not trace.way.all(),
        Flag.NOT_RESOLVED: trace.width < _RESOLVED_BLURS * sigma,
        Flag.LEVELS_UNRESOLVED: _least_gap(seen, k) < _SPACE_BLURS * sigma,
        Flag.SATURATED: seen.saturated is not None and _saturated_share(seen.saturated, trace) > _SATURATED,
        Flag.COUNT_DIFFERS: _count_differs(seen, k, options),
    }
    flags = Flag.NONE
    for flag, doubtful in doubts.items():
        if doubtful:
            flags |= flag
    return flags | _optical_flags(trace.width / math.hypot(1.0, seen.direction.slope), float(blur.max()), sight)


def _optical_flags(width_px: float, blur: float, sight: Sight) -> Flag:
    """Judge width and blur against the objective, where the recipe tells it."""
    flags = Flag.NONE
    if sight.na is None or sight.wavelength_um is None or sight.scale.unit != "um":
        return flags
    optical, per_px = sight.wavelength_um / sight.na, sight.scale.mean
    if width_px * per_px < _RESOLVED_RAYLEIGH * optical:
        flags |= Flag.NOT_RESOLVED
    if blur > _DEFOCUSED * math.hypot(_SLOPE_BLUR * optical, per_px / math.sqrt(12)):
        flags |= Flag.DEFOCUSED
    return flags


def _least_gap(seen: Seen, k: int) -> float:
    """Typical space to the nearer neighbour along the row. [px]."""
    every = max(1, len(seen.traces[k].way) // _TYPICAL_ROWS)
    pairs = [(j, j + 1) for j in (k - 1, k) if j >= 0 and j + 1 < len(seen.traces)]
    gaps = [seen.traces[b].course[0, ::every] - seen.traces[a].course[1, ::every] for a, b in pairs]
    return min((float(np.median(gap)) for gap in gaps), default=math.inf)


def _count_differs(seen: Seen, k: int, options: LinesOptions) -> bool:
    """Tell whether the line is one too many, or may be another than its name says."""
    if seen.expected is None:
        return False
    return int(seen.names[k][1:]) > seen.expected or (options.centres is None and seen.count != seen.expected)


def _saturated_share(saturated: NDArray[np.bool_], trace: Trace) -> float:
    """Share of saturated pixels within 4 blurs of the line's edges."""
    reach = math.ceil(4 * float(trace.blur.max()))
    rows = np.nonzero(np.isfinite(trace.edges).all(axis=0))[0]
    shares = []
    for edge in trace.edges[:, rows]:
        columns = np.rint(edge).astype(int)[:, None] + np.arange(-reach, reach + 1)
        shares.append(saturated[rows[:, None], np.clip(columns, 0, saturated.shape[1] - 1)].mean())
    return float(max(shares))


def line_readings(line: LineFigures, seen: Seen, sight: Sight, options: LinesOptions) -> list[Reading]:
    """Return every reading of one line.

    Parameters
    ----------
    line : LineFigures
        The line.
    seen : Seen
        For its defects.
    sight : Sight
        For the scale.
    options : LinesOptions
        For edge level and neck length.

    Returns
    -------
    list of Reading
        One for each quantity of a single line; withheld ones have no value.
    """
    return _LineReadings(line, seen, sight, options).all()


class _LineReadings:
    def __init__(self, line: LineFigures, seen: Seen, sight: Sight, options: LinesOptions) -> None:
        self.line, self.seen, self.scale, self.options = line, seen, sight.scale, options
        self.width = line.straight.width
        self.count = line.count
        self.mid_mean = float(self.width[np.isfinite(self.width)].mean())
        self.u_shape = float(line.u_shape.sum())  # both edges have their shape from the same ink, light and lens
        self.mean = self.mid_mean + line.level_shift
        self.readings: list[Reading] = []
        self.rough = unbiased_sd(self.width, line.width) if line.width is not None else None
        self.rough_flags = self._rough_flags()
        names = [d for d in seen.defects if d.kind in ("open", "neck", "void")]
        own = [d for d in names if seen.names[d.line] == line.name]
        self.opens = sum(d.kind == "open" for d in own)

    def add(
        self,
        quantity: str,
        value: float | None,
        *,
        noise: float | None = None,
        sampling: float | None = None,
        model: float = 0.0,
        dof: float = math.inf,
        flags: Flag = Flag.NONE,
        scaled: bool = True,
    ) -> None:
        """Add a reading; the scale's share of the uncertainty is joined to the model's."""
        common = None
        if value is not None and noise is not None:
            common = math.hypot(model, abs(value) * self.scale.u_relative if scaled else 0.0)
        self.readings.append(
            Reading(
                item=self.line.name,
                quantity=quantity,
                value=value,
                unit=CATALOGUE["lines"][quantity].unit(self.scale.unit),
                u_noise=noise,
                u_sampling=sampling,
                u_common=common,
                dof=dof,
                flags=self.line.flags | flags,
                eval_length=self.line.length,
                sampling=self.line.straight.step,
            )
        )

    def _rough_flags(self) -> Flag:
        """Doubts about roughness: length, gaps, steep edges, and noise that isn't what the pixels' noise predicts."""
        line, process, flags = self.line, self.line.width, Flag.NONE
        if process is None or process.short:
            flags |= Flag.SHORT_SAMPLING
        if process is not None:
            predicted = float(np.sqrt((line.u_point**2).mean()))
            off = 2.0 * abs(process.noise**2 - predicted**2)
            if abs(math.log(process.noise / max(predicted, 1e-12))) > _MISMATCH and off > _MATTERS * process.sigma**2:
                flags |= Flag.OUTSIDE_VALIDITY
        blur = float(line.blur.mean())
        if any(move_within(edge, blur) > _NONLINEAR * blur for edge in (line.left, line.right) if edge is not None):
            flags |= Flag.OUTSIDE_VALIDITY
        missing = 1.0 - self.count / len(self.width)
        return flags | (Flag.OUTSIDE_VALIDITY if missing > _GAPS else Flag.NONE)

    def all(self) -> list[Reading]:
        """Make all readings."""
        self._widths()
        self._extremes()
        self._roughness()
        self._process()
        line = self.line
        self._blur()
        self._tilt()
        self.add("length", line.length, noise=line.straight.step / math.sqrt(6.0))
        self.add("open_count", float(self.opens))
        return self.readings

    def _sampling(self) -> tuple[float | None, float, Flag]:
        """Uncertainty of the mean width as that of the process, its degrees of freedom, and doubts."""
        if self.line.mean_u:
            return *self.line.mean_u["width"], Flag.NONE
        if float(np.nanstd(self.width)) == 0.0:
            return 0.0, math.inf, Flag.NONE
        return None, math.inf, Flag.SHORT_SAMPLING | Flag.OUTSIDE_VALIDITY

    def _widths(self) -> None:
        line = self.line
        pixels = math.sqrt(max(float(line.covariance[0, 0] + line.covariance[1, 1] - 2 * line.covariance[0, 1]), 0.0))
        blur = float(line.blur.mean())
        ends = u_ends(line.width, blur, line.length) if line.width else 0.0
        self.u_mean_noise = math.hypot(pixels, ends)
        sampling, sampling_dof, doubt = self._sampling()
        bright = self.options.ink == "bright"
        hardcopy = level_shift(line.blur, HARDCOPY_LEVEL, bright=bright)
        for quantity, shift in (("width_mean", line.level_shift), ("width_r40", hardcopy)):
            value = self.mid_mean + shift
            model = math.hypot(self.u_shape, _LEVEL_SHARE * shift)
            common = math.hypot(model, value * self.scale.u_relative)
            dof = effective_dof([(self.u_mean_noise, math.inf), (sampling or 0.0, sampling_dof), (common, math.inf)])
            self.add(quantity, value, noise=self.u_mean_noise, sampling=sampling, model=model, dof=dof, flags=doubt)

    def _extremes(self) -> None:
        """Extremes and the harmonic mean, freed of the noise's share; what stands out of the noise is kept as seen."""
        line, step, process = self.line, self.line.straight.step, self.line.width
        neck = self.options.neck_length or NECK_BLURS * float(line.blur.mean())
        whole = line.whole.width + line.level_shift
        count = max(1, round(neck / step))
        raw = running_mean(whole, count)
        flags = self.rough_flags & ~Flag.SHORT_SAMPLING
        base = self.width + line.level_shift
        if process is not None:
            (averaged, true), (u_local, _) = amplitude_filter(
                base, process, average_over=[neck, 0.0], noise_transfer=line.straight.width_transfer
            )
            u_raw = math.sqrt(2.0) * process.noise / math.sqrt(count)
        else:
            averaged, true, u_local, u_raw = raw, base, 0.0, 0.0
        # How deep an extreme lies is known no better than the scatter it belongs to.
        doubt = min(self.rough.u_noise / self.rough.sd, 1.0) if self.rough is not None and self.rough.sd > 0 else 1.0
        for name, pick, sign in (("width_min", np.nanmin, -1), ("width_max", np.nanmax, 1)):
            value, seen = float(pick(averaged)), float(pick(raw))
            stands_out = sign * (seen - value) > STANDS_OUT * u_raw
            u = u_raw if stands_out else math.hypot(float(u_local), doubt * (value - self.mean))
            opened = name == "width_min" and self.opens > 0
            value = 0.0 if opened else seen if stands_out else value
            if value < 0:  # narrower than nothing: the local width is not resolved
                self.add(name, None, flags=flags | Flag.OUTSIDE_VALIDITY)
                continue
            self.add(name, value, noise=0.0 if opened else u, model=0.0 if opened else self.u_shape, flags=flags)
        hit = np.isfinite(line.whole.width) & ~_covered(line.whole.s, line.straight)
        local = np.concatenate([true[np.isfinite(true)], whole[hit]])
        sampling, sampling_dof, unsure = self._sampling()
        if self.opens:
            self.add("width_harmonic", 0.0, noise=0.0, flags=unsure)
        elif local.min() <= 0:
            self.add("width_harmonic", None, flags=flags | Flag.OUTSIDE_VALIDITY)
        else:
            value = 1.0 / float(np.mean(1.0 / local))
            u_spread = 2.0 * self.rough.sd * self.rough.u_noise / self.mean if self.rough is not None else 0.0
            noise = math.hypot(self.u_mean_noise, u_spread)
            dof = effective_dof([(noise, math.inf), (sampling or 0.0, sampling_dof)])
            self.add(
                "width_harmonic",
                value,
                noise=noise,
                sampling=sampling,
                model=self.u_shape,
                dof=dof,
                flags=flags | unsure,
            )

    def _blur(self) -> None:
        """Blur of the edges; roughness finer than itself widens it, by how much is known to the half."""
        line = self.line
        seen = float(line.blur.mean())
        edges = [p for p in (line.left, line.right) if p is not None]
        finer = sum(p.sigma**2 * (1.0 - p.kept) for p in edges) / max(len(edges), 1)
        blur = math.sqrt(max(seen**2 - finer, (seen / 2) ** 2))
        self.add("edge_blur", (seen + blur) / 2, noise=float(np.hypot(*line.u_blur)) / 2, model=(seen - blur) / 2)

    def _roughness(self) -> None:
        line, straight = self.line, self.line.straight
        for prefix, values, process in (
            ("lwr", straight.width, line.width),
            ("ler_left", straight.left, line.left),
            ("ler_right", straight.right, line.right),
        ):
            side = prefix.removeprefix("ler_") if prefix != "lwr" else ""
            if process is None:
                raw = _sd(values, line_removed=bool(side))
                self.add(f"{prefix}_3sigma", None, flags=self.rough_flags | Flag.SHORT_SAMPLING)
                self.add(f"{prefix}_3sigma_raw", 3 * raw, flags=self.rough_flags)
                if side:
                    self.add(f"raggedness_{side}", raw, flags=self.rough_flags)
                continue
            rough = self.rough if self.rough is not None and not side else unbiased_sd(values, process)
            dof = max(rough.sd**2 / (2.0 * rough.u_sampling**2), 1.0) if rough.u_sampling > 0 else math.inf
            u = {"noise": rough.u_noise, "sampling": rough.u_sampling}
            # What is known of the true scatter, carried over to the scatter as seen.
            share = rough.sd / max(rough.raw, 1e-30)
            seen = {name: value * share for name, value in u.items()}
            common = {"dof": dof, "flags": self.rough_flags}
            self.add(f"{prefix}_3sigma", 3 * rough.sd, **{n: 3 * v for n, v in u.items()}, **common)  # type: ignore[arg-type]
            self.add(f"{prefix}_3sigma_raw", 3 * rough.raw, **{n: 3 * v for n, v in seen.items()}, **common)  # type: ignore[arg-type]
            if side:
                self.add(f"raggedness_{side}", rough.raw, **seen, **common)  # type: ignore[arg-type]

    def _process(self) -> None:
        """Figures of the fitted process; withheld where the line is too short, or too smooth, to tell them."""
        process = self.line.width
        names = ("lwr_3sigma_long", "correlation_length", "roughness_exponent", "edge_noise")
        if process is None or process.short:
            for name in names:
                self.add(name, None, flags=self.rough_flags | Flag.SHORT_SAMPLING)
            return
        flags = self.rough_flags
        self.add("lwr_3sigma_long", 3 * process.sigma, noise=0.0, sampling=3 * process.u_sigma, flags=flags)
        if process.resolved:
            self.add("correlation_length", process.xi, noise=0.0, sampling=process.u_xi, flags=flags)
            self.add(
                "roughness_exponent", process.hurst, noise=0.0, sampling=process.u_hurst, flags=flags, scaled=False
            )
        else:
            for name in names[1:3]:
                self.add(name, None, flags=flags | Flag.LOW_CONTRAST)
        self.add("edge_noise", process.noise, noise=process.u_noise, flags=flags)

    def _tilt(self) -> None:
        line, straight = self.line, self.line.straight
        vertical = self.seen.direction.vertical
        tilt = -math.degrees(math.atan(straight.slope)) if vertical else math.degrees(math.atan(straight.slope))
        n, length = max(self.count, 2), max(line.length, straight.step)
        lever = math.sqrt(12.0) / length
        noise = math.degrees(lever * math.sqrt(float((line.u_point**2).sum()) / 4 / n))
        sampling = math.degrees(lever * math.sqrt(line.centre_variance)) if line.mean_u else None
        self.add("tilt", tilt, noise=noise, sampling=sampling, scaled=False)


def move_within(process: Process, distance: float) -> float:
    """Return the rms difference of two places of a process some distance apart.

    Parameters
    ----------
    process : Process
        As fitted.
    distance : float
        Of the places. [length]

    Returns
    -------
    float
        sqrt(2 (C(0) - C(distance))). [length]
    """
    apart = palasantzas_autocovariance(np.array([distance]), process.sigma, process.xi, process.hurst)[0]
    return math.sqrt(max(2.0 * (process.sigma**2 - float(apart)), 0.0))


def u_ends(process: Process, blur: float, length: float) -> float:
    """Return the standard uncertainty of a piece's mean from the light that its two ends take in from beyond.

    Parameters
    ----------
    process : Process
        As fitted.
    blur : float
        Gaussian sigma along the line. [length]
    length : float
        Of the piece. [length]

    Returns
    -------
    float
        Standard uncertainty. [length]
    """
    return _END_SHARE * blur * math.sqrt(2.0) * move_within(process, blur) / length


def _sd(values: NDArray[np.float64], *, line_removed: bool) -> float:
    good = np.isfinite(values)
    y = values[good]
    if len(y) < 3:  # noqa: PLR2004  (two points lie on a line)
        return 0.0
    x = np.nonzero(good)[0].astype(np.float64)
    if line_removed:
        y = y - np.polyval(np.polyfit(x, y, 1), x)
    return float(y.std(ddof=2 if line_removed else 1))


def running_mean(values: NDArray[np.float64], count: int) -> NDArray[np.float64]:
    """Return the mean over neighbours, where at least half of them are known.

    Parameters
    ----------
    values : ndarray of float, shape (n,)
        Series; NaN where not measured.
    count : int
        Neighbours averaged over.

    Returns
    -------
    ndarray of float, shape (n,)
        NaN where too few are known.
    """
    good = np.isfinite(values)
    count = min(count, len(values))
    total = np.convolve(np.where(good, values, 0.0), np.ones(count), mode="same")
    known = np.convolve(good.astype(float), np.ones(count), mode="same")
    full = known >= (count / 2 if count < len(values) else 1)
    return np.where(full & good, total / np.maximum(known, 1), np.nan)


def _covered(s: NDArray[np.float64], straight: Straightened) -> NDArray[np.bool_]:
    """Tell which places are measured in the line without its defects."""
    at = np.rint((s - straight.s[0]) / straight.step).astype(int)
    inside = (at >= 0) & (at < len(straight.s))
    return np.asarray(inside & np.isfinite(straight.width[np.clip(at, 0, len(straight.s) - 1)]))
