"""What lies between neighbouring lines: pitch, space, bridges."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from printmetrics.flags import Flag
from printmetrics.measure.lines.line import NECK_BLURS, LineFigures, running_mean
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
            item=item,
            quantity=quantity,
            value=value,
            unit=CATALOGUE["lines"][quantity].unit(unit),
            eval_length=length,
            sampling=one.straight.step,
            **rest,  # type: ignore[arg-type]
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
    sampling = dof = wander = None
    u_point = 0.0
    if one.mean_u and two.mean_u and one.right and two.left:
        wander = math.sqrt(one.centre_variance + two.centre_variance)
        (u_one, dof_one), (u_two, dof_two) = one.mean_u["right"], two.mean_u["left"]
        sampling = math.hypot(u_one, u_two)
        dof = effective_dof([(noise, math.inf), (u_one, dof_one), (u_two, dof_two), (common, math.inf)])
        u_point = math.hypot(one.right.noise, two.left.noise)
    elif any(float(np.nanstd(e)) > 0 for e in (near[1], far[0])):
        flags |= Flag.SHORT_SAMPLING | Flag.OUTSIDE_VALIDITY
    readings.append(
        reading("pitch", pitch, u_noise=noise_pitch, u_sampling=wander, u_common=pitch * scale, flags=flags)
    )
    readings.append(
        reading(
            "space_mean",
            mean,
            u_noise=noise,
            u_sampling=sampling,
            u_common=common,
            dof=math.inf if dof is None else dof,
            flags=flags,
        )
    )
    readings.append(_least(reading, one, two, options, u_point, mean, bridges, shape, flags))
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
    """Edges of two lines side by side, from the mean of their axes; each place to half a step along."""
    turn = (two.slope - one.slope) / (1 + two.slope * one.slope) / 2
    # Turned by the small angle to the common axis, places along move by angle times distance from the axis.
    start = [f.s[0] + angle * float(np.nanmean(f.left)) for f, angle in ((one, turn), (two, -turn))]
    lag = round((start[1] - start[0]) / one.step)
    n = min(len(one.s) - max(lag, 0), len(two.s) - max(-lag, 0))
    if n <= 0:
        return np.full((2, 1), np.nan), np.full((2, 1), np.nan)
    pair = []
    for straight, angle, skip in ((one, turn, max(lag, 0)), (two, -turn, max(-lag, 0))):
        part = slice(skip, skip + n)
        pair.append(np.array([straight.left[part], straight.right[part]]) - angle * straight.s[part])
    return pair[0], pair[1]
