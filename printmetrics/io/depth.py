"""The true depth of 16 bit data: what the saturation check needs to know."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray

DEPTHS = (8, 10, 12, 14)
MIN_VARYING_BITS = 4
MIN_PLATEAU_PX = 10
PLATEAU_OVER_NEIGHBOUR = 2


def find_depth(codes: NDArray[np.uint16], declared: int | None = None) -> tuple[int, int]:
    """Return the true depth of 16 bit data and its largest code.

    Parameters
    ----------
    codes : ndarray of uint16
        Stored values, any shape. [counts]
    declared : int, optional
        Depth that a tag of the file gives; not believed where the data contradict it.

    Returns
    -------
    bits : int
        True depth; 16 without evidence of less.
    full_scale : int
        Largest code. [counts]

    Notes
    -----
    Evidence is one of:

    - a tag, and data that fit it, right-justified (below 2^k) or left-justified (low bits zero);
    - left-justified: the low 16 - k bits are zero in every pixel, while at least 4 of the others vary;
    - a saturation plateau: the largest code is exactly 2^k - 1, at least 10 pixels have it, and at least
      twice as many as the code below. A picture that is merely dark thins out towards its largest code.

    k is 8, 10, 12 or 14. Right-justified data that nowhere saturate stay 16 bit: nothing tells them from a
    dark picture, and there is no saturation to miss. The numbers 4, 10 and 2 are own choices.
    """
    used = int(np.bitwise_or.reduce(codes, axis=None))
    if declared is not None and 1 < declared < 16:  # noqa: PLR2004
        if used < 1 << declared:
            return declared, (1 << declared) - 1
        if _low_bits_zero(used, declared):
            return declared, 0xFFFF ^ _low_bits(declared)

    varying = used ^ int(np.bitwise_and.reduce(codes, axis=None))
    if varying.bit_count() >= MIN_VARYING_BITS:
        for bits in DEPTHS:
            if _low_bits_zero(used, bits):
                return bits, 0xFFFF ^ _low_bits(bits)

    largest = int(codes.max())
    for bits in DEPTHS:
        if largest == (1 << bits) - 1:
            plateau = int(np.count_nonzero(codes == largest))
            below = int(np.count_nonzero(codes == largest - 1))
            if plateau >= max(MIN_PLATEAU_PX, PLATEAU_OVER_NEIGHBOUR * below):
                return bits, largest
    return 16, 0xFFFF


def _low_bits(bits: int) -> int:
    return (1 << (16 - bits)) - 1


def _low_bits_zero(used: int, bits: int) -> bool:
    return used & _low_bits(bits) == 0
