"""Matched removal of isolated lines: banding, beats, interference.

Each line is demodulated to zero frequency, its slowly varying complex amplitude is averaged
with weights that ignore edges and texture, brought down to the local background, modulated
back and subtracted. Only the fitted line is ever subtracted, so detail elsewhere stays and
nothing rings at edges.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

_NOISE_CODE = 1.5


def remove_lines(
    image: NDArray[np.float32],
    frequencies: Sequence[tuple[float, float]],
    *,
    reach_px: float = 40.0,
    beside: Sequence[tuple[float, float]] = (),
) -> NDArray[np.float32]:
    """Image without the given lines.

    Parameters
    ----------
    image : ndarray, shape (rows, columns, channels)
        sRGB-encoded, 0..1.
    frequencies : sequence of (fx, fy)
        Cycles per pixel; one of each pair of opposite lines.
    reach_px : float
        Gaussian sigma over which a line's amplitude and phase may change.
    beside : sequence of (fx, fy)
        Strong lines that stay: fitted along, lest what edges make of them passes for the others.

    Returns
    -------
    ndarray, same shape
    """
    if not frequencies:
        return image
    lines = [np.asarray(f, float) for f in (*beside, *frequencies)]
    out = np.empty_like(image)
    for c in range(image.shape[2]):
        out[..., c] = image[..., c] - _fit(image[..., c], lines, reach_px, kept=len(beside))
    return out


def _fit(
    plane: NDArray[np.float32], lines: list[NDArray[np.float64]], reach: float, kept: int
) -> NDArray[np.float32]:
    """Sum of the fitted lines but the first `kept`; fitted plainly, then twice with weights."""
    import cv2

    waves = [_wave(plane.shape, f) for f in lines]
    slow = max(1 / max(min(float(np.hypot(*f)) for f in lines), 1e-3), 4.0)
    even = np.ones_like(plane)
    amplitudes = _demodulate(plane - cv2.GaussianBlur(plane, (0, 0), slow), even, waves, reach)
    for _ in range(2):
        base = np.asarray(cv2.bilateralFilter(plane - _sum(amplitudes, waves), 0, 12 / 255, 2), np.float32)
        weight = _evenness(plane - _sum(amplitudes, waves), base)
        amplitudes = _demodulate(plane - base, weight, waves, reach)
    rest = plane - base - _sum(amplitudes, waves)
    above = [
        _above_background(rest, weight, f, amplitude, reach)
        for f, amplitude in zip(lines[kept:], amplitudes[kept:], strict=True)
    ]
    return _sum(above, waves[kept:])


def _evenness(clean: NDArray[np.float32], base: NDArray[np.float32]) -> NDArray[np.float32]:
    """Weights that count flat places and leave out edges and texture."""
    import cv2

    gx, gy = cv2.Sobel(base, cv2.CV_32F, 1, 0, scale=0.125), cv2.Sobel(base, cv2.CV_32F, 0, 1, scale=0.125)
    busy = cv2.GaussianBlur(gx**2 + gy**2, (0, 0), 2)
    weight = 1 / ((_NOISE_CODE / 255) ** 2 + 4 * busy + cv2.GaussianBlur((clean - base) ** 2, (0, 0), 3))
    return np.asarray(weight / weight.max(), np.float32)


def _demodulate(
    residual: NDArray[np.float32],
    weight: NDArray[np.float32],
    waves: list[NDArray[np.complex64]],
    reach: float,
) -> list[NDArray[np.complex64]]:
    """Slowly varying complex amplitudes, each fitted to what the other lines leave."""
    level = np.maximum(_smooth(weight, reach), 1e-6)
    amplitudes: list[NDArray[np.complex64]] = [np.zeros_like(wave) for wave in waves]
    left = residual.copy()
    for i, wave in enumerate(waves):
        product = weight * left * np.conj(wave)
        fitted = (_smooth(product.real, reach) + 1j * _smooth(product.imag, reach)) / level
        amplitudes[i] = fitted.astype(np.complex64)
        left -= 2 * np.real(amplitudes[i] * wave)
    return amplitudes


def _sum(amplitudes: list[NDArray[np.complex64]], waves: list[NDArray[np.complex64]]) -> NDArray[np.float32]:
    total = np.zeros(waves[0].shape, np.float32)
    for amplitude, wave in zip(amplitudes, waves, strict=True):
        total += 2 * np.real(amplitude * wave)
    return total


def _wave(shape: tuple[int, ...], f: NDArray[np.float64]) -> NDArray[np.complex64]:
    along_x = np.exp(2j * np.pi * f[0] * np.arange(shape[1]))
    along_y = np.exp(2j * np.pi * f[1] * np.arange(shape[0]))
    return np.asarray(along_y[:, None] * along_x[None, :], np.complex64)


def _above_background(
    residual: NDArray[np.float32],
    weight: NDArray[np.float32],
    f: NDArray[np.float64],
    amplitude: NDArray[np.complex64],
    reach: float,
) -> NDArray[np.complex64]:
    """The part of a line's amplitude above what its neighbours in frequency hold."""
    level = np.maximum(_smooth(weight, reach), 1e-6)
    gap = 1.5 / (2 * np.pi * reach)
    power = np.zeros(residual.shape, np.float32)
    for turn in (0.25, 0.75):
        aside = f + gap * 2 * np.array([np.cos(2 * np.pi * turn), np.sin(2 * np.pi * turn)])
        product = weight * residual * np.conj(_wave(residual.shape, aside))
        local = (_smooth(product.real, reach) ** 2 + _smooth(product.imag, reach) ** 2) / level**2
        power += local / 2
    size2 = np.maximum(np.abs(amplitude) ** 2, 1e-12)
    return np.asarray(amplitude * np.sqrt(np.clip(1 - power / size2, 0, 1)), np.complex64)


def _smooth(plane: NDArray[np.floating], sigma: float) -> NDArray[np.float32]:
    """Gaussian of `sigma` pixels, computed on a grid coarse enough to be cheap."""
    import cv2

    step = max(1, int(sigma // 4))
    rows, columns = plane.shape
    small_size = (max(1, -(-columns // step)), max(1, -(-rows // step)))
    small = cv2.resize(np.asarray(plane, np.float32), small_size, interpolation=cv2.INTER_AREA)
    small = cv2.GaussianBlur(small, (0, 0), sigma / step, borderType=cv2.BORDER_REFLECT)
    return np.asarray(cv2.resize(small, (columns, rows), interpolation=cv2.INTER_CUBIC), np.float32)
