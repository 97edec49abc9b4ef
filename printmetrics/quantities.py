"""The catalogue: each quantity's name, dimension, definition and source, once."""

from dataclasses import dataclass
from typing import Literal

Dimension = Literal["length", "area", "angle", "ratio", "count"]


@dataclass(frozen=True, slots=True)
class Quantity:
    """One named, defined number.

    Parameters
    ----------
    name : str
        As in tables and in a recipe's limits.
    kind : str
        The kind of feature it belongs to.
    dimension : {"length", "area", "angle", "ratio", "count"}
        What it is a number of; the unit follows from it and from the scale.
    definition : str
        One sentence.
    source : str
        The standard, paper or derivation the definition follows.
    """

    name: str
    kind: str
    dimension: Dimension
    definition: str
    source: str

    def unit(self, length_unit: str = "um") -> str:
        """Return the UCUM unit.

        Parameters
        ----------
        length_unit : str, optional
            ``um``, or ``{px}`` where the scale is unknown.

        Returns
        -------
        str
            UCUM code.
        """
        if self.dimension == "length":
            return length_unit
        if self.dimension == "area":
            return {"um": "um2", "{px}": "{px2}"}[length_unit]
        return {"angle": "deg", "ratio": "1", "count": "1"}[self.dimension]


_WIDTH = "IEC 62899-402-1:2025, line pattern width; in its manner"
_ROUGH = "SEMI P47-0307, in its manner; noise and blur removed by the fitted process"
_HARDCOPY = "ISO/IEC 24790:2017 and 13660:2001, in their manner (levels from memory)"
_PROCESS = "G. Palasantzas, Phys. Rev. B 48, 14472 (1993); P. Whittle (1953); A. Sykulski et al., Biometrika 106 (2019)"
_OWN = "own definition"

_LINES: tuple[tuple[str, Dimension, str, str], ...] = (
    ("width_mean", "length", "Mean distance between the two edges, normal to the line.", _WIDTH),
    ("width_r40", "length", "Mean width at the 40 % level, counted from the dark side.", _HARDCOPY),
    ("width_min", "length", "Smallest local width, averaged over neck_length; 0 at an open.", _OWN),
    ("width_max", "length", "Largest local width, averaged over neck_length.", _OWN),
    (
        "width_harmonic",
        "length",
        "1 / mean(1/w), the width that governs resistance; 0 at an open.",
        "R = R_s * integral of dx / w(x)",
    ),
    ("lwr_3sigma", "length", "3 sd of the local width about its mean, freed of edge noise and blur.", _ROUGH),
    ("lwr_3sigma_raw", "length", "3 sd of the local width about its mean, as seen.", "SEMI P47-0307, in its manner"),
    ("ler_left_3sigma", "length", "3 sd of the left or top edge about its best line, freed likewise.", _ROUGH),
    (
        "ler_left_3sigma_raw",
        "length",
        "3 sd of the left or top edge about its best line, as seen.",
        "SEMI P47-0307, in its manner",
    ),
    ("ler_right_3sigma", "length", "3 sd of the right or bottom edge about its best line, freed likewise.", _ROUGH),
    (
        "ler_right_3sigma_raw",
        "length",
        "3 sd of the right or bottom edge about its best line, as seen.",
        "SEMI P47-0307, in its manner",
    ),
    (
        "lwr_3sigma_long",
        "length",
        "3 sd of the local width of an endlessly long line: of the fitted process.",
        _PROCESS,
    ),
    ("correlation_length", "length", "Correlation length of the local width: of the fitted process.", _PROCESS),
    ("roughness_exponent", "ratio", "Roughness exponent H of the local width: of the fitted process.", _PROCESS),
    ("edge_noise", "length", "sd of one edge point caused by pixel noise: of the fitted process.", _PROCESS),
    ("raggedness_left", "length", "1 sd of the left or top edge at the 40 % level about its best line.", _HARDCOPY),
    (
        "raggedness_right",
        "length",
        "1 sd of the right or bottom edge at the 40 % level about its best line.",
        _HARDCOPY,
    ),
    ("edge_blur", "length", "Gaussian sigma of the edge response as recorded, pixel aperture included.", _OWN),
    ("tilt", "angle", "Angle of the line to the nearest picture axis, positive from +x towards +y.", _OWN),
    ("length", "length", "Measured length along the line.", _OWN),
    ("pitch", "length", "Distance between the centre lines of neighbours, normal to the lines.", _OWN),
    ("space_mean", "length", "Mean distance between facing edges of neighbours, normal to the lines.", _WIDTH),
    ("space_min", "length", "Smallest local space, averaged over neck_length; 0 at a bridge.", _OWN),
    ("open_count", "count", "Breaks in the line.", _OWN),
    ("bridge_count", "count", "Contacts between neighbours.", _OWN),
    ("line_count", "count", "Lines found in the region.", _OWN),
)

CATALOGUE: dict[str, dict[str, Quantity]] = {
    "lines": {name: Quantity(name, "lines", dim, definition, source) for name, dim, definition, source in _LINES},
}
"""Quantities of each kind, by name, in the order of the tables."""
