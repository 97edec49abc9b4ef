"""Linear light: gamma, colour, dark and flat field, and the ends of the range."""

import tracemalloc

import numpy as np
import pytest

from printmetrics.analysis.light import linear_light
from printmetrics.errors import PictureError


def grey(kind: type = np.uint8, low: int = 20, high: int = 200) -> np.ndarray:
    return np.random.default_rng(1).integers(low, high, (150, 70), kind)


def colour() -> np.ndarray:
    return np.random.default_rng(2).integers(20, 200, (150, 70, 3), np.uint8)


@pytest.mark.parametrize("kind", [np.uint8, np.uint16, np.float32])
def test_a_plain_grey_picture_is_not_copied(kind: type) -> None:
    pixels = np.full((4, 5), 9, kind)
    image, saturated = linear_light(pixels, 255)
    assert image is pixels
    assert saturated is None


@pytest.mark.parametrize(("kind", "full_scale"), [(np.uint8, 255), (np.uint16, 4095)])
def test_gamma_is_undone(kind: type, full_scale: int) -> None:
    # Closed form: full_scale (v / full_scale)^gamma.
    pixels = grey(kind)
    image, _ = linear_light(pixels, full_scale, gamma=2.2)
    np.testing.assert_allclose(image, full_scale * (pixels / full_scale) ** 2.2, rtol=1e-6)
    assert image.dtype == np.float32


@pytest.mark.parametrize(("code", "linear"), [(0.04045, 0.04045 / 12.92), (0.5, 0.21404114), (1.0, 1.0)])
def test_srgb_curve(code: float, linear: float) -> None:
    # Source: IEC 61966-2-1 (from memory); 0.5 -> 0.21404114 worked by hand from ((0.5 + 0.055) / 1.055)^2.4.
    pixels = np.full((2, 2), round(code * 65535), np.uint16)
    image, _ = linear_light(pixels, 65535, gamma="srgb")
    np.testing.assert_allclose(image, linear * 65535, rtol=2e-4)


def test_colour_becomes_luminance_of_linear_channels() -> None:
    # Source: ITU-R BT.709, luminance 0.2126 R + 0.7152 G + 0.0722 B of linear light.
    pixels = colour()
    image, _ = linear_light(pixels, 255, gamma=2.0)
    red, green, blue = np.moveaxis(255 * (pixels / 255) ** 2, 2, 0)
    np.testing.assert_allclose(image, 0.2126 * red + 0.7152 * green + 0.0722 * blue, rtol=1e-5)


@pytest.mark.parametrize(("channel", "at"), [("red", 0), ("green", 1), ("blue", 2)])
def test_one_channel_is_taken(channel: str, at: int) -> None:
    pixels = colour()
    image, _ = linear_light(pixels, 255, channel=channel)
    np.testing.assert_array_equal(image, pixels[..., at])


def test_equal_channels_are_grey() -> None:
    pixels = np.repeat(grey()[..., None], 3, axis=2)
    image, _ = linear_light(pixels, 255)
    np.testing.assert_array_equal(image, grey())
    assert image.dtype == np.uint8
    assert image.flags.c_contiguous


def test_a_difference_in_the_last_row_is_colour() -> None:
    pixels = np.repeat(grey()[..., None], 3, axis=2)
    pixels[-1, -1, 2] += 1
    assert linear_light(pixels, 255)[0].dtype == np.float32


@pytest.mark.parametrize("gamma", [1.0, 2.2, "srgb"])
def test_a_flat_field_gives_an_even_picture_of_an_even_field(gamma: float | str) -> None:
    flat = grey()
    image, _ = linear_light(flat.copy(), 255, gamma=gamma, flat=flat)
    np.testing.assert_allclose(image, image.mean(), rtol=1e-5)


def test_dark_and_flat_are_applied_in_linear_light() -> None:
    # Closed form: (I - dark) / (flat - dark) * mean(flat - dark), each linearised.
    pixels, dark, flat = grey(), grey(low=1, high=9), grey(low=201, high=250)
    image, _ = linear_light(pixels, 255, gamma=2.0, dark=dark, flat=flat)
    i, d, f = (255 * (a / 255.0) ** 2 for a in (pixels, dark, flat))
    np.testing.assert_allclose(image, (i - d) / (f - d) * (f - d).mean(), rtol=1e-4)


def test_dark_alone_is_taken_off() -> None:
    image, _ = linear_light(grey(), 255, dark=grey(low=1, high=30))
    np.testing.assert_array_equal(image, grey().astype(float) - grey(low=1, high=30))


def test_a_flat_field_may_be_a_float_mean_of_pictures() -> None:
    image, _ = linear_light(grey(), 255, gamma=2.0, flat=grey().astype(np.float32))
    np.testing.assert_allclose(image, image.mean(), rtol=1e-5)


def test_ends_of_the_range_are_saturated() -> None:
    pixels = grey(np.uint16)
    pixels[1, 2], pixels[3, 4] = 4095, 0
    _, saturated = linear_light(pixels, 4095)
    assert np.argwhere(saturated).tolist() == [[1, 2], [3, 4]]


def test_any_channel_that_is_used_can_saturate() -> None:
    pixels = colour()
    pixels[1, 2, 0] = 255
    pixels[3, 4, 2] = 0
    assert np.argwhere(linear_light(pixels, 255)[1]).tolist() == [[1, 2], [3, 4]]
    assert np.argwhere(linear_light(pixels, 255, channel="red")[1]).tolist() == [[1, 2]]
    assert linear_light(pixels, 255, channel="green")[1] is None


def test_a_saturated_flat_field_spoils_the_pixel() -> None:
    flat = grey(low=100, high=200)
    flat[5, 6] = 255
    assert np.argwhere(linear_light(grey(), 255, flat=flat)[1]).tolist() == [[5, 6]]


def test_float_pictures_do_not_saturate() -> None:
    assert linear_light(np.zeros((3, 3), np.float32), np.inf)[1] is None


def test_inputs_are_never_written_to() -> None:
    arrays = [colour(), colour() // 8, colour()]
    for array in arrays:
        array.setflags(write=False)
    linear_light(arrays[0], 255, gamma="srgb", dark=arrays[1] // 2, flat=np.maximum(arrays[2], 150))


@pytest.mark.parametrize("name", ["dark", "flat"])
def test_another_size_is_refused(name: str) -> None:
    with pytest.raises(PictureError, match=r"has 5 x 4 px, the picture 70 x 150 px; they must"):
        linear_light(grey(), 255, **{name: np.ones((4, 5), np.uint8)})


def test_an_unlit_flat_field_is_refused() -> None:
    flat = grey()
    flat[2:4, 7] = 10
    with pytest.raises(PictureError, match="2 pixels of the flat field are not brighter than the dark; take it again"):
        linear_light(grey(), 255, dark=np.full_like(flat, 10), flat=flat)


def test_a_flat_field_of_another_depth_is_refused() -> None:
    with pytest.raises(PictureError, match="have uint16 pixels, the picture uint8; they must be saved the same way"):
        linear_light(grey(), 255, flat=grey(np.uint16))


@pytest.mark.parametrize("gamma", [0.0, -1.0, np.nan, np.inf])
def test_a_senseless_gamma_is_refused(gamma: float) -> None:
    with pytest.raises(PictureError, match="gamma must be a positive number or 'srgb', got"):
        linear_light(grey(), 255, gamma=gamma)


def test_gamma_of_a_float_picture_is_refused() -> None:
    with pytest.raises(PictureError, match="needs a largest code"):
        linear_light(np.ones((3, 3), np.float32), np.inf, gamma=2.2)


def test_gamma_of_negative_values_is_refused() -> None:
    with pytest.raises(PictureError, match="no meaning for values below 0"):
        linear_light(np.full((3, 3), -1, np.float32), 127, gamma=2.2)


@pytest.mark.parametrize("gamma", [1.0, 2.2])
def test_memory_stays_below_six_times_the_picture(gamma: float) -> None:
    pixels = np.random.default_rng(1).integers(0, 256, (1500, 2000), np.uint8)
    dark, flat = np.ones_like(pixels), np.full_like(pixels, 200)
    tracemalloc.start()
    linear_light(pixels, 255, gamma=gamma, dark=dark, flat=flat)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 6 * pixels.nbytes
