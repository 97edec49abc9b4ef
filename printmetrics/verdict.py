"""The verdict on a reading: conforming, nonconforming or undecided."""

from __future__ import annotations

from typing import Literal

from printmetrics.flags import DECISIVE, Flag

GUARD = 1.645
"""Guard band over the standard uncertainty: 95 % one-sided, normal."""

DECISION_RULE = (
    f"in the manner of ISO 14253-1: conforming within the limits reduced by {GUARD} u, nonconforming outside the "
    f"limits widened by {GUARD} u, undecided between; undecided too where u is unknown, the reading is withheld "
    "or a decisive flag is set; counts are compared as they are"
)

Verdict = Literal["", "conforming", "nonconforming", "undecided"]


def judge(
    quantity_is_count: bool,
    value: float | None,
    u: float | None,
    flags: Flag,
    lower: float | None,
    upper: float | None,
    guard: float = GUARD,
) -> Verdict:
    """Judge a reading against its limits.

    Parameters
    ----------
    quantity_is_count : bool
        Whether the quantity is a count, which is compared as it is.
    value : float or None
        The reading; None where it is withheld.
    u : float or None
        Standard uncertainty, in the reading's unit; None where it is unknown.
    flags : Flag
        What is doubtful about the reading.
    lower, upper : float or None
        Limits, in the reading's unit. A limit itself conforms.
    guard : float, optional
        Guard band over `u`.

    Returns
    -------
    str
        ``conforming``, ``nonconforming``, ``undecided``; empty without limits.

    Notes
    -----
    A decisive flag leaves the verdict undecided, with one exception. ``count_differs`` says that another
    number of items was found than the recipe expects, so items may be mixed up. This cannot excuse a count
    that breaks its limit: a line too few is a line too few, and an open is an open on whichever line it
    stands. A count within its limits stays undecided, because the items that were not found were not counted.

    References
    ----------
    .. [1] ISO 14253-1:2017, in its manner. The factor 1.645 is the normal distribution's, for one limit
       and 95 %; that the standard has it as its default is from memory.

    Examples
    --------
    >>> judge(False, 20.0, 0.5, Flag.NONE, 18.0, 22.0)
    'conforming'
    >>> judge(False, 21.5, 0.5, Flag.NONE, 18.0, 22.0)
    'undecided'
    """
    if lower is None and upper is None:
        return ""
    if value is None:
        return "undecided"
    decisive = flags & DECISIVE
    if quantity_is_count:
        u = 0.0
        if decisive == Flag.COUNT_DIFFERS and _outside(value, lower, upper, 0.0):
            return "nonconforming"
    if u is None or decisive:
        return "undecided"
    if _outside(value, lower, upper, guard * u):
        return "nonconforming"
    inside = (lower is None or value >= lower + guard * u) and (upper is None or value <= upper - guard * u)
    return "conforming" if inside else "undecided"


def _outside(value: float, lower: float | None, upper: float | None, margin: float) -> bool:
    return (lower is not None and value < lower - margin) or (upper is not None and value > upper + margin)
