"""What lies between neighbouring lines: pitch, space, bridges."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from printmetrics.analysis.roughness import Process, amplitude_filter, unbiased_sd
from printmetrics.flags import Flag
from printmetrics.measure.lines.line import NECK_BLURS, STANDS_OUT, LineFigures, running_mean, u_ends
from printmetrics.measure.readings import Reading, effective_dof
from printmetrics.quantities import CATALOGUE

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from printmetrics.measure.lines.geometry import Straightened
    from printmetrics.measure.lines.options import LinesOptions
    from printmetrics.measure.lines.seeing import Seen
    from printmetrics.measure.sight import Sight


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

    def reading(quantity: str, value: float | None, **rest: float | Flag | None) -> Reading:  # numpydoc ignore=GL08
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
    pitch = float(np.nanmean(far.mean(axis=0) - near.mean(axis=0)))
    shift = (one.level_shift + two.level_shift) / 2
    mean = float(np.nanmean(far[0] - near[1])) - shift
    noise_pitch = math.sqrt(max(sum(float(f.covariance.sum()) / 4 for f in (one, two)), 0.0))
    noise = math.sqrt(float(one.covariance[1, 1] + two.covariance[0, 0]))
    scale = sight.scale.u_relative
    shape = float(one.u_shape[1] + two.u_shape[0])
    common, common_pitch = math.hypot(mean * scale, shape), pitch * scale
    sampling = wander = None
    dof = dof_pitch = math.inf
    if one.mean_u and two.mean_u and one.right and two.left:
        blur = float(one.blur[1])
        ends = [u_ends(p, blur, length) for p in (one.right, two.left)]
        noise, noise_pitch = math.hypot(noise, *ends), math.hypot(noise_pitch, *ends)
        wander = math.sqrt(one.centre_variance + two.centre_variance)
        (u_one, dof_one), (u_two, dof_two) = one.mean_u["right"], two.mean_u["left"]
        sampling = math.hypot(u_one, u_two)
        dof = effective_dof([(noise, math.inf), (u_one, dof_one), (u_two, dof_two), (common, math.inf)])
        parts = [(math.sqrt(f.centre_variance), f.mean_u["left"][1] + f.mean_u["right"][1]) for f in (one, two)]
        dof_pitch = effective_dof([*parts, (math.hypot(noise_pitch, common_pitch), math.inf)])
    elif any(float(np.nanstd(e)) > 0 for e in (near[1], far[0])):
        flags |= Flag.SHORT_SAMPLING | Flag.OUTSIDE_VALIDITY
    least, u_least = _least_space(one, two, options, mean + shift)
    least -= shift
    return [
        reading(
            "pitch", pitch, u_noise=noise_pitch, u_sampling=wander, u_common=common_pitch, dof=dof_pitch, flags=flags
        ),
        reading("space_mean", mean, u_noise=noise, u_sampling=sampling, u_common=common, dof=dof, flags=flags),
        reading("space_min", 0.0, u_noise=0.0, flags=flags)
        if bridges
        else reading("space_min", None, flags=flags | Flag.OUTSIDE_VALIDITY)
        if least < 0
        else reading("space_min", least, u_noise=u_least, u_common=math.hypot(least * scale, shape), flags=flags),
        count,
    ]


def _least_space(one: LineFigures, two: LineFigures, options: LinesOptions, mean: float) -> tuple[float, float]:
    """Return the least local space and its standard uncertainty, freed of the noise's share in its depth."""
    near, far = _on_common_axis(one.whole, two.whole)
    neck = options.neck_length or NECK_BLURS * float(one.blur[1] + two.blur[0]) / 2
    count = max(1, round(neck / one.straight.step))
    local = running_mean(far[0] - near[1], count)
    if not np.isfinite(local).any():
        return -1.0, 0.0
    raw = float(np.nanmin(local))
    if one.right is None or two.left is None:
        return raw, 0.0
    if one.whole is not one.straight or two.whole is not two.straight:
        near, far = _on_common_axis(one.straight, two.straight)
    sides = ((far[0], two.left, two.straight.transfer[0]), (near[1], one.right, one.straight.transfer[1]))
    (freed, u_freed), (taken, u_taken) = (_local(*side, neck) for side in sides)
    value = float(np.nanmin(freed - taken))
    u_raw = math.hypot(two.left.noise, one.right.noise) / math.sqrt(count)
    if value - raw > STANDS_OUT * u_raw:
        return raw, u_raw
    # How deep it lies is known no better than the scatter it belongs to.
    rough = [unbiased_sd(edge, process) for edge, process, _ in sides]
    total = math.hypot(*(r.sd for r in rough))
    doubt = min(math.hypot(*(r.sd * r.u_noise for r in rough)) / total**2, 1.0) if total > 0 else 1.0
    return value, math.hypot(u_freed, u_taken, doubt * (mean - value))


def _local(
    edge: NDArray[np.float64], process: Process, transfer: NDArray[np.float64], neck: float
) -> tuple[NDArray[np.float64], float]:
    """Return an edge averaged over the neck length and freed of noise, with the uncertainty of one place."""
    (local,), (u,) = amplitude_filter(edge, process, average_over=[neck], noise_transfer=transfer)
    return local, float(u)


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
