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

_ROUNDS = 3
_NOISE_CODE = 1.5


def remove_lines(
    image: NDArray[np.float32],
    frequencies: Sequence[tuple[float, float]],
    *,
    reach_px: float = 40.0,
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

    Returns
    -------
    ndarray, same shape
    """
    if not frequencies:
        return image
    lines = [np.asarray(f, float) for f in frequencies]
    out = np.empty_like(image)
    for c in range(image.shape[2]):
        out[..., c] = image[..., c] - _fit(image[..., c], lines, reach_px)
    return out


def _fit(plane: NDArray[np.float32], lines: list[NDArray[np.float64]], reach: float) -> NDArray[np.float32]:
    import cv2

    rows, columns = plane.shape
    period = max(2.0, 1 / max(min(float(np.hypot(*f)) for f in lines), 1e-3))
    model = np.zeros_like(plane)
    for _ in range(2):
        clean = plane - model
        base = cv2.bilateralFilter(clean, 0, 12 / 255, min(2.0, period / 2))
        gx, gy = (
            cv2.Sobel(base, cv2.CV_32F, 1, 0, scale=0.125),
            cv2.Sobel(base, cv2.CV_32F, 0, 1, scale=0.125),
        )
        busy = cv2.GaussianBlur(gx**2 + gy**2, (0, 0), 2)
        rest = cv2.GaussianBlur((clean - base) ** 2, (0, 0), 3)
        weight = 1 / ((_NOISE_CODE / 255) ** 2 + 4 * busy + rest)
        weight /= weight.max()
        residual = plane - base
        amplitudes = [np.zeros((rows, columns), np.complex64) for _ in lines]
        waves = [_wave(rows, columns, f) for f in lines]
        total = np.zeros_like(plane)
        level = np.maximum(_smooth(weight, reach), 1e-6)
        for _ in range(_ROUNDS if len(lines) > 1 else 1):
            for i, wave in enumerate(waves):
                total -= 2 * np.real(amplitudes[i] * wave)
                product = weight * (residual - total) * np.conj(wave)
                amplitudes[i] = (_smooth(product.real, reach) + 1j * _smooth(product.imag, reach)) / level
                total += 2 * np.real(amplitudes[i] * wave)
        model = np.zeros_like(plane)
        for f, wave, amplitude in zip(lines, waves, amplitudes, strict=True):
            model += 2 * np.real(
                _above_background(residual - total, weight, level, f, amplitude, reach) * wave
            )
    return model


def _wave(rows: int, columns: int, f: NDArray[np.float64]) -> NDArray[np.complex64]:
    along_x = np.exp(2j * np.pi * f[0] * np.arange(columns))
    along_y = np.exp(2j * np.pi * f[1] * np.arange(rows))
    return np.asarray(along_y[:, None] * along_x[None, :], np.complex64)


def _above_background(
    residual: NDArray[np.float32],
    weight: NDArray[np.float32],
    level: NDArray[np.float32],
    f: NDArray[np.float64],
    amplitude: NDArray[np.complex64],
    reach: float,
) -> NDArray[np.complex64]:
    """The part of a line's amplitude above what its neighbours in frequency hold."""
    gap = 1.5 / (2 * np.pi * reach)
    power = np.zeros(residual.shape, np.float32)
    for turn in (0.25, 0.75):
        aside = f + gap * 2 * np.array([np.cos(2 * np.pi * turn), np.sin(2 * np.pi * turn)])
        product = weight * residual * np.conj(_wave(*residual.shape, aside))
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
