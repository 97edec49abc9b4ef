"""True depth from evidence only."""

import numpy as np
import pytest

from printmetrics.io.depth import find_depth


def noisy(level: float, sd: float, shape: tuple[int, int] = (200, 300)) -> np.ndarray:
    return np.random.default_rng(7).normal(level, sd, shape)


@pytest.mark.parametrize("bits", [8, 10, 12, 14])
def test_a_saturation_plateau_gives_right_justified_depth(bits: int) -> None:
    top = 2**bits - 1
    codes = noisy(top, top / 50).clip(0, top).astype(np.uint16)
    assert find_depth(codes) == (bits, top)


@pytest.mark.parametrize("bits", [8, 10, 12, 14])
def test_zero_low_bits_give_left_justified_depth(bits: int) -> None:
    codes = noisy(2 ** (bits - 1), 2**bits / 20).clip(0, 2**bits - 1).astype(np.uint16) << (16 - bits)
    assert find_depth(codes) == (bits, (2**bits - 1) << (16 - bits))


@pytest.mark.parametrize("top", [255, 1023, 4095])
def test_a_dark_16_bit_picture_whose_brightest_pixel_is_such_a_code_stays_16_bit(top: int) -> None:
    codes = noisy(top / 2, top / 20).clip(0, top - 1).astype(np.uint16)
    codes[3, 4] = top
    assert find_depth(codes) == (16, 65535)


def test_12_bit_data_that_nowhere_saturate_stay_16_bit() -> None:
    assert find_depth(noisy(2000, 100).astype(np.uint16)) == (16, 65535)


def test_a_black_picture_is_no_evidence() -> None:
    assert find_depth(np.zeros((50, 50), np.uint16)) == (16, 65535)


def test_even_12_bit_codes_shifted_left_are_not_called_11_bit() -> None:
    codes = (noisy(1000, 100).astype(np.uint16) * 2) << 4
    assert find_depth(codes) == (12, 0xFFF0)


def test_a_declared_depth_is_believed_where_the_data_fit() -> None:
    codes = noisy(2000, 100).astype(np.uint16)
    assert find_depth(codes, declared=12) == (12, 4095)
    assert find_depth(codes << 4, declared=12) == (12, 0xFFF0)


def test_a_declared_depth_is_not_believed_against_the_data() -> None:
    codes = noisy(2000, 100).astype(np.uint16)
    codes[0, 0] = 4097
    assert find_depth(codes, declared=12) == (16, 65535)
