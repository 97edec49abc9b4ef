"""The scale: the only place where pixels become micrometres."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from printmetrics.errors import ScaleError

if TYPE_CHECKING:
    from numpy.typing import ArrayLike, NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Scale:
    """Length per pixel in x and y, with its uncertainty.

    Parameters
    ----------
    x, y : float
        Length per pixel along the picture's axes. [um/px], or 1 where the scale is unknown.
    u_relative : float
        Standard uncertainty of the scale over the scale, common to all readings. A zero is said aloud.
    unit : {"um", "{px}"}
        Unit of the lengths it gives.

    Raises
    ------
    ScaleError
        When a figure is not positive and finite, or the uncertainty is negative.
    """

    x: float
    y: float
    u_relative: float
    unit: str = "um"

    def __post_init__(self) -> None:
        """Refuse what cannot be a scale."""
        for name, value in (("x", self.x), ("y", self.y)):
            if not (math.isfinite(value) and value > 0):
                msg = (
                    f"um_per_px ({name}) must be a positive number, got {value!r}; "
                    "measure it on a ruler picture of known pitch"
                )
                raise ScaleError(msg)
        if not (math.isfinite(self.u_relative) and self.u_relative >= 0):
            msg = f"the scale's standard uncertainty must be zero or more, got {self.u_relative!r}"
            raise ScaleError(msg)

    @classmethod
    def pixels(cls) -> Scale:
        """Return the scale of a picture whose scale is unknown: lengths stay in pixels.

        Returns
        -------
        Scale
            1 per pixel, unit ``{px}``.
        """
        return cls(x=1.0, y=1.0, u_relative=0.0, unit="{px}")

    @property
    def mean(self) -> float:
        """Geometric mean of x and y, in um per px."""
        return math.sqrt(self.x * self.y)

    def to_length(self, points_px: ArrayLike) -> NDArray[np.float64]:
        """Turn points into lengths; points are corrected, pictures never resampled.

        Parameters
        ----------
        points_px : array_like, shape (..., 2)
            x and y. [px]

        Returns
        -------
        ndarray of float, shape (..., 2)
            x and y. [um]
        """
        return np.asarray(points_px, dtype=np.float64) * (self.x, self.y)

    def to_px(self, points: ArrayLike) -> NDArray[np.float64]:
        """Turn lengths back into pixels.

        Parameters
        ----------
        points : array_like, shape (..., 2)
            x and y. [um]

        Returns
        -------
        ndarray of float, shape (..., 2)
            x and y. [px]
        """
        return np.asarray(points, dtype=np.float64) / (self.x, self.y)
