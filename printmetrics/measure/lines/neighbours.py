"""What lies between neighbouring lines: pitch, space, bridges."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from printmetrics.analysis.roughness import u_mean
from printmetrics.flags import Flag
from printmetrics.measure.lines.line import NECK_BLURS, LineFigures, centre_variance, running_mean
from printmetrics.measure.readings import Reading, effective_dof
from printmetrics.quantities import CATALOGUE

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from printmetrics.measure.lines.geometry import Straightened
    from printmetrics.measure.lines.options import LinesOptions
    from printmetrics.measure.lines.seeing import Seen
    from printmetrics.measure.sight import Sight

_SQRT3 = math.sqrt(3.0)
_STANDS_OUT = 5.0


def neighbour_readings(
    one: LineFigures, two: LineFigures, seen: Seen, sight: Sight, options: LinesOptions
) -> list[Reading]:
    """Return the readings of a pair of neighbours.

    Parameters
    ----------
    one, two : LineFigures
        Left and right, or upper and lower line.
    seen : Seen
        For the bridges between them.
    sight : Sight
        For the scale.
    options : LinesOptions
        For the neck length.

    Returns
    -------
    list of Reading
        Pitch, mean and least space, number of bridges.
    """
    item = f"{one.name}..{two.name}"
    k = seen.names.index(one.name)
    bridges = sum(d.kind == "bridge" and d.line == k for d in seen.defects)
    flags = one.flags | two.flags
    unit = sight.scale.unit

    def reading(quantity: str, value: float | None, **rest: float | Flag | None) -> Reading:
        return Reading(
            item=item, quantity=quantity, value=value, unit=CATALOGUE["lines"][quantity].unit(unit),
            eval_length=length, sampling=one.straight.step, **rest,  # type: ignore[arg-type]
        )

    near, far = _on_common_axis(one.straight, two.straight)
    length = float(np.isfinite(far[0] - near[1]).sum()) * one.straight.step
    count = reading("bridge_count", float(bridges), flags=flags)
    if length == 0.0:
        withheld = {"flags": flags | Flag.OUTSIDE_VALIDITY}
        return [*(reading(q, None, **withheld) for q in ("pitch", "space_mean", "space_min")), count]
    centre = far.mean(axis=0) - near.mean(axis=0)
    pitch = float(np.nanmean(centre))
    space = far[0] - near[1] - (one.level_shift + two.level_shift) / 2
    mean = float(np.nanmean(space))
    noise_pitch = math.sqrt(max(sum(float(f.covariance.sum()) / 4 for f in (one, two)), 0.0))
    noise = math.sqrt(float(one.covariance[1, 1] + two.covariance[0, 0]))
    scale = sight.scale.u_relative
    shape = abs(float(two.shape_shift[0] - one.shape_shift[1])) / _SQRT3
    common = math.hypot(mean * scale, shape)
    readings = []
    if one.left and one.right and two.left and two.right:
        wander = math.sqrt(centre_variance(one) + centre_variance(two))
        (u_one, dof_one), (u_two, dof_two) = u_mean(one.right, length), u_mean(two.left, length)
        sampling: float | None = math.hypot(u_one, u_two)
        dof = effective_dof([(noise, math.inf), (u_one, dof_one), (u_two, dof_two), (common, math.inf)])
        u_raw_point = math.hypot(one.right.noise, two.left.noise)
    else:
        wander, sampling, dof, u_raw_point = None, None, math.inf, 0.0  # type: ignore[assignment]
        if any(float(np.nanstd(e)) > 0 for e in (near[1], far[0])):
            flags |= Flag.SHORT_SAMPLING | Flag.OUTSIDE_VALIDITY
    readings.append(
        reading("pitch", pitch, u_noise=noise_pitch, u_sampling=wander, u_common=pitch * scale, flags=flags)
    )
    readings.append(
        reading("space_mean", mean, u_noise=noise, u_sampling=sampling, u_common=common, dof=dof, flags=flags)
    )
    readings.append(_least(reading, one, two, options, u_raw_point, mean, bridges, shape, flags))
    return [*readings, count]


def _least(reading, one, two, options, u_point, mean, bridges, shape, flags):  # type: ignore[no-untyped-def]  # noqa: ANN001, ANN202, PLR0913
    """Return the least local space: 0 at a bridge; elsewhere freed of the noise's share."""
    if bridges:
        return reading("space_min", 0.0, u_noise=0.0, flags=flags)
    near, far = _on_common_axis(one.whole, two.whole)
    space = far[0] - near[1] - (one.level_shift + two.level_shift) / 2
    neck = options.neck_length or NECK_BLURS * float((one.blur[1] + two.blur[0]) / 2)
    count = max(1, round(neck / one.straight.step))
    local = running_mean(space, count)
    u_raw = u_point / math.sqrt(count)
    least = float(np.nanmin(local))
    # The noise's share of the scatter is taken out of the depth, unless the place stands out of the noise.
    spread = float(np.nanstd(local))
    true = math.sqrt(max(spread**2 - u_raw**2, 0.0))
    freed = mean - (mean - least) * (true / spread if spread > 0 else 1.0)
    if freed - least > _STANDS_OUT * u_raw:
        freed = least
    return reading("space_min", freed, u_noise=u_raw, u_common=math.hypot(shape, 0.0), flags=flags)


def _on_common_axis(one: Straightened, two: Straightened) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Edges of two lines on the first one's grid, both from the mean of their axes."""
    slope = (one.slope + two.slope) / 2
    pairs = []
    for straight in (one, two):
        # Turn by the small angle between the line's own axis and the common one.
        turn = (slope - straight.slope) / (1 + slope * straight.slope)
        pairs.append([(straight.s + turn * t, t - turn * straight.s) for t in (straight.left, straight.right)])
    grid = one.s
    edges = []
    for pair in pairs:
        both = []
        for s, t in pair:
            good = np.isfinite(t)
            line = np.full(len(grid), np.nan)
            if good.any():
                line = np.interp(grid, s[good], t[good], left=np.nan, right=np.nan)
                place = np.searchsorted(s[good], grid)
                last = good.sum() - 1
                gap = np.minimum(
                    np.abs(grid - s[good][np.clip(place - 1, 0, last)]), np.abs(s[good][np.clip(place, 0, last)] - grid)
                )
                line[gap > 0.8 * one.step] = np.nan
            both.append(line)
        edges.append(np.array(both))
    return edges[0], edges[1]
