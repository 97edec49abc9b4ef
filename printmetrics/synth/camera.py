"""What light and camera do to a picture: separate steps, to be combined in the order they happen."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import cv2
import numpy as np

if TYPE_CHECKING:
    from numpy.typing import NDArray


def light(
    shape: tuple[int, int], *, across: float = 0.0, along: float = 0.0, vignette: float = 0.0
) -> NDArray[np.float64]:
    """Return uneven light, to multiply a picture by.

    Parameters
    ----------
    shape : (int, int)
        Rows and columns.
    across, along : float, optional
        Change of light from the first to the last column, and row, over the light in the middle. [1]
    vignette : float, optional
        Loss in the corners, growing with the square of the distance from the middle. [1]

    Returns
    -------
    ndarray of float, shape (M, N)
        1 in the middle.
    """
    v, u = (np.linspace(-0.5, 0.5, n) for n in shape)
    u, v = u[None, :], v[:, None]
    return np.asarray((1.0 + across * u + along * v) * (1.0 - 2.0 * vignette * (u * u + v * v)))


def expose(
    image: NDArray[np.float64], rng: np.random.Generator, *, electrons_per_count: float, read_noise: float = 0.0
) -> NDArray[np.float64]:
    """Add photon noise and read noise.

    Parameters
    ----------
    image : ndarray of float, shape (M, N)
        Expected signal. [counts]
    rng : numpy.random.Generator
        Source of chance.
    electrons_per_count : float
        Photo-electrons per count; their number is Poisson.
    read_noise : float, optional
        Standard deviation of the read-out. [counts]

    Returns
    -------
    ndarray of float, shape (M, N)
        Variance: image / electrons_per_count + read_noise^2. [counts]
    """
    caught = rng.poisson(np.maximum(image, 0.0) * electrons_per_count) / electrons_per_count
    return np.asarray(caught + read_noise * rng.standard_normal(image.shape))


def white_noise(image: NDArray[np.float64], sd: float, rng: np.random.Generator) -> NDArray[np.float64]:
    """Add Gaussian noise of one strength to all pixels.

    Parameters
    ----------
    image : ndarray of float, shape (M, N)
        Signal. [counts]
    sd : float
        Standard deviation. [counts]
    rng : numpy.random.Generator
        Source of chance.

    Returns
    -------
    ndarray of float, shape (M, N)
        Signal with noise. [counts]
    """
    return np.asarray(image + sd * rng.standard_normal(image.shape))


def row_noise(image: NDArray[np.float64], sd: float, rng: np.random.Generator) -> NDArray[np.float64]:
    """Add one offset to each row, as a camera's read-out may; the same seed gives the same fixed pattern.

    Parameters
    ----------
    image : ndarray of float, shape (M, N)
        Signal. [counts]
    sd : float
        Standard deviation of a row's offset. [counts]
    rng : numpy.random.Generator
        Source of chance.

    Returns
    -------
    ndarray of float, shape (M, N)
        Signal with offsets. [counts]
    """
    return np.asarray(image + sd * rng.standard_normal((image.shape[0], 1)))


def sharpen(image: NDArray[np.float64], amount: float, sigma: float) -> NDArray[np.float64]:
    """Sharpen by adding what a Gaussian takes away, as many cameras do unasked.

    Parameters
    ----------
    image : ndarray of float, shape (M, N)
        Signal. [counts]
    amount : float
        Share of the difference that is added. [1]
    sigma : float
        Sigma of the Gaussian. [px]

    Returns
    -------
    ndarray of float, shape (M, N)
        Picture with overshoot beside its edges. [counts]
    """
    return np.asarray(image + amount * (image - cv2.GaussianBlur(image, (0, 0), sigma)))


def encode_gamma(image: NDArray[np.float64], exponent: float, full: float) -> NDArray[np.float64]:
    """Encode linear light with a camera's exponent.

    Parameters
    ----------
    image : ndarray of float, shape (M, N)
        Linear light; below zero is taken as zero. [counts]
    exponent : float
        Encoding exponent, such as 2.2; 1 leaves the picture as it is.
    full : float
        Signal that stays as it is, the camera's largest. [counts]

    Returns
    -------
    ndarray of float, shape (M, N)
        full * (image / full)^(1 / exponent). [counts]
    """
    return np.asarray(full * (np.maximum(image, 0.0) / full) ** (1.0 / exponent))


def to_codes(image: NDArray[np.float64], bits: int) -> NDArray[Any]:
    """Round to whole codes and clip to the camera's range.

    Parameters
    ----------
    image : ndarray of float, shape (M, N)
        Signal in counts of this bit depth. [counts]
    bits : int
        Bit depth, 8 to 16.

    Returns
    -------
    ndarray of uint8 or uint16, shape (M, N)
        Codes; uint8 for 8 bit.
    """
    codes = np.clip(np.rint(image), 0, 2**bits - 1)
    return codes.astype(np.uint8 if bits == 8 else np.uint16)  # noqa: PLR2004  (a byte)


def jpeg(codes: NDArray[np.uint8], quality: int) -> NDArray[Any]:
    """Send a picture through JPEG and back.

    Parameters
    ----------
    codes : ndarray of uint8, shape (M, N)
        Picture.
    quality : int
        JPEG quality, 0 to 100.

    Returns
    -------
    ndarray of uint8, shape (M, N)
        Picture with JPEG's artefacts.
    """
    _, data = cv2.imencode(".jpg", codes, [cv2.IMWRITE_JPEG_QUALITY, quality])
    return np.asarray(cv2.imdecode(data, cv2.IMREAD_GRAYSCALE))
