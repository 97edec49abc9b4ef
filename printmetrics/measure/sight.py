"""What a kind gets to see: one picture in linear light, with its scale and optics."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from printmetrics.scale import Scale


@dataclass(frozen=True, slots=True, kw_only=True)
class Sight:
    """One picture, ready to be measured; never written to.

    Parameters
    ----------
    image : ndarray of uint8, uint16 or float32, shape (M, N)
        Linear light. [counts]
    saturated : ndarray of bool, shape (M, N), or None
        Pixels at either end of the camera's range; None where there are none.
    scale : Scale
        Length per pixel.
    na, wavelength_um : float or None
        Numerical aperture and wavelength, where the recipe gives them.
    """

    image: NDArray[Any]
    saturated: NDArray[np.bool_] | None
    scale: Scale
    na: float | None = None
    wavelength_um: float | None = None
