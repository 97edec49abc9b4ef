"""Light and camera, step by step."""

import numpy as np
import pytest

from printmetrics.synth import camera


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(11)


# Source: Poisson variance equals its mean.
@pytest.mark.parametrize("level", [40.0, 180.0])
def test_photon_and_read_noise_have_their_variance(level: float, rng: np.random.Generator) -> None:
    seen = camera.expose(np.full((300, 300), level), rng, electrons_per_count=25.0, read_noise=0.8)
    assert seen.mean() == pytest.approx(level, abs=0.05)
    assert seen.var() == pytest.approx(level / 25 + 0.64, rel=0.03)


def test_white_noise_is_the_same_at_every_level(rng: np.random.Generator) -> None:
    image = np.repeat([[10.0], [200.0]], 50_000, axis=1)
    np.testing.assert_allclose((camera.white_noise(image, 3.0, rng) - image).std(axis=1), 3.0, rtol=0.02)


def test_row_noise_shifts_whole_rows(rng: np.random.Generator) -> None:
    seen = camera.row_noise(np.zeros((4000, 5)), 2.0, rng)
    assert np.ptp(seen, axis=1).max() == 0.0
    assert seen[:, 0].std() == pytest.approx(2.0, rel=0.05)


def test_light_is_one_in_the_middle_and_changes_by_what_is_asked() -> None:
    field = camera.light((101, 201), across=0.2, along=-0.1)
    assert field[50, 100] == 1.0
    assert field[50, -1] - field[50, 0] == pytest.approx(0.2)
    assert field[-1, 100] - field[0, 100] == pytest.approx(-0.1)
    assert camera.light((101, 201), vignette=0.3)[0, 0] == pytest.approx(0.7)


def test_sharpening_overshoots_beside_an_edge_and_keeps_plateaus() -> None:
    image = np.repeat([[0.0] * 50 + [100.0] * 50], 9, axis=0)
    seen = camera.sharpen(image, 0.5, 1.5)
    assert seen[4, 50:55].max() > 110
    np.testing.assert_allclose(seen[4, [10, 90]], [0.0, 100.0], atol=1e-6)


def test_gamma_keeps_black_and_full_and_is_undone_by_its_power() -> None:
    image = np.array([[0.0, 30.0, 255.0]])
    np.testing.assert_allclose(255 * (camera.encode_gamma(image, 2.2, 255.0) / 255) ** 2.2, image, atol=1e-9)


@pytest.mark.parametrize(("bits", "dtype"), [(8, np.uint8), (10, np.uint16), (12, np.uint16), (16, np.uint16)])
def test_codes_are_rounded_and_clipped_to_their_bits(bits: int, dtype: type) -> None:
    codes = camera.to_codes(np.array([[-3.0, 7.4, 7.6, 1e6]]), bits)
    assert codes.dtype == dtype
    assert codes.tolist() == [[0, 7, 8, 2**bits - 1]]


def test_jpeg_changes_a_picture_little_and_less_at_higher_quality(rng: np.random.Generator) -> None:
    codes = camera.to_codes(128 + 20 * rng.standard_normal((64, 64)), 8)
    errors = [np.abs(camera.jpeg(codes, q).astype(float) - codes).mean() for q in (60, 95)]
    assert 0 < errors[1] < errors[0] < 15
