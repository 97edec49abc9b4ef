"""What measuring a feature gives: readings, events, profiles, and geometry to draw."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from printmetrics.flags import Flag

if TYPE_CHECKING:
    from collections.abc import Iterable

    import numpy as np
    from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """One quantity of one item.

    Parameters
    ----------
    item : str
        ``L3``, ``L1..L2``, or ``all`` for a term of the whole feature.
    quantity : str
        Name in the catalogue.
    value : float or None
        None where the reading is withheld; then `flags` says why.
    unit : str
        UCUM.
    u_noise, u_sampling, u_common : float or None
        Standard uncertainty from pixel noise, from the sampling of a rough line, and from what all
        readings share (scale, model). None where it does not apply.
    dof : float
        Effective degrees of freedom of the combined uncertainty.
    flags : Flag
        What is doubtful.
    eval_length, sampling : float or None
        Length evaluated and sampling interval along the line. [um]
    """

    item: str
    quantity: str
    value: float | None
    unit: str
    u_noise: float | None = None
    u_sampling: float | None = None
    u_common: float | None = None
    dof: float = math.inf
    flags: Flag = Flag.NONE
    eval_length: float | None = None
    sampling: float | None = None

    @property
    def u(self) -> float | None:
        """Combined standard uncertainty, or None where it is unknown."""
        parts = [part for part in (self.u_noise, self.u_sampling, self.u_common) if part is not None]
        return math.hypot(*parts) if parts else None


@dataclass(frozen=True, slots=True, kw_only=True)
class Event:
    """A local finding with a place.

    Parameters
    ----------
    item : str
        The line, or the pair of neighbours, it belongs to.
    event : str
        ``open``, ``bridge``, ``neck``, ``bulge``, ``void`` or ``satellite``.
    x_px, y_px : float
        Its centre in the picture. [px]
    size : float
        Its extent along the line; for a bridge, the narrowest. [um]
    area : float
        Area of ink missing or in excess. [um2]
    """

    item: str
    event: str
    x_px: float
    y_px: float
    size: float
    area: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Profile:
    """A curve that belongs to an item, for plotting.

    Parameters
    ----------
    item, profile : str
        Item, and name of the curve.
    distance, value, u : ndarray of float, shape (n,)
        Abscissa, ordinate and its standard uncertainty.
    unit : str
        UCUM unit of both.
    """

    item: str
    profile: str
    distance: NDArray[np.float64]
    value: NDArray[np.float64]
    u: NDArray[np.float64]
    unit: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Shape:
    """A polyline on the picture that shows where something was measured.

    Parameters
    ----------
    item : str
        The item it belongs to.
    role : str
        ``edge``: a measured edge; ``left_out``: edge points not used; ``missing``: from where to where an expected
        line, which was not found, should run; ``region``: where was looked; ``event:neck`` and its like: outline of
        an event.
    points_px : ndarray of float, shape (n, 2)
        x and y in the whole picture; NaN rows break the line. [px]
    """

    item: str
    role: str
    points_px: NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Measured:
    """All that measuring one feature in one picture gives."""

    readings: list[Reading] = field(default_factory=list)
    events: list[Event] = field(default_factory=list)
    profiles: list[Profile] = field(default_factory=list)
    shapes: list[Shape] = field(default_factory=list)


def effective_dof(parts: Iterable[tuple[float, float]]) -> float:
    """Return the Welch-Satterthwaite effective degrees of freedom of a sum of independent parts.

    Parameters
    ----------
    parts : iterable of (float, float)
        Standard uncertainty and degrees of freedom of each part.

    Returns
    -------
    float
        Degrees of freedom, not rounded; infinite where every part is known exactly.

    References
    ----------
    .. [1] JCGM 100:2008 (GUM), annex G.4.1.

    Examples
    --------
    GUM H.1.6, end gauge.

    >>> parts = [(25.0, 18.0), (9.7, 25.6), (2.9, 50.0), (16.6, 2.0)]
    >>> round(effective_dof(parts), 1)
    16.8
    """
    parts = list(parts)
    total = sum(u * u for u, _ in parts)
    spread = sum(u**4 / dof for u, dof in parts)
    return total * total / spread if spread > 0 else math.inf


def expanded(u: float, dof: float, probability: float = 0.95) -> float:
    """Return the expanded uncertainty with Student's factor.

    Parameters
    ----------
    u : float
        Standard uncertainty.
    dof : float
        Its effective degrees of freedom, used as they are, at least 1.
    probability : float, optional
        Coverage probability.

    Returns
    -------
    float
        Half width of the interval.

    References
    ----------
    .. [1] JCGM 100:2008 (GUM), annex G.
    """
    from scipy.special import ndtri, stdtrit  # noqa: PLC0415  (keeps the start of the command line fast)

    tail = (1.0 + probability) / 2.0
    factor = stdtrit(max(dof, 1.0), tail) if math.isfinite(dof) else ndtri(tail)
    return float(factor) * u
