"""Sampling: what lens and sensor leave of a frequency, and where the sampling grid folds it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class Optics:
    """Sensor box width and Gaussian lens blur, in pixels of the rate at which the sensor works."""

    aperture_px: float = 1.0
    lens_px: float = 0.35


def capture_mtf(f_cpp: Array, optics: Optics) -> Array:
    """Modulation transfer of a rectangular aperture and a Gaussian lens.

    Parameters
    ----------
    f_cpp : ndarray, shape (..., 2)
        Cycles per pixel along x and y, of any size.
    optics : Optics

    Returns
    -------
    ndarray, shape (...)
        Negative between the first two zeros of the aperture.

    Notes
    -----
    ``sinc(fx w) sinc(fy w)``, the transform of a box (R. N. Bracewell, The Fourier Transform
    and Its Applications), times the transform of a Gaussian.
    """
    box = np.sinc(f_cpp[..., 0] * optics.aperture_px) * np.sinc(f_cpp[..., 1] * optics.aperture_px)
    squared = f_cpp[..., 0] ** 2 + f_cpp[..., 1] ** 2
    return np.asarray(box * np.exp(-2 * np.pi**2 * optics.lens_px**2 * squared))


def fold_all(f_cpi: Array, rates: Array) -> tuple[Array, NDArray[np.int64]]:
    """Aliases of many frequencies at many rates, and their orders.

    Parameters
    ----------
    f_cpi, rates : ndarray, shape (..., 2)
        Cycles per inch and pixels per inch, broadcast together.

    Returns
    -------
    alias : ndarray, shape (..., 2)
        In [-R/2, R/2), cycles per inch.
    order : ndarray of int, shape (..., 2)
        ``f = alias + order * rate``, as `moire.folding.fold` gives for one.
    """
    order = np.floor(f_cpi / rates + 0.5)
    return f_cpi - order * rates, order.astype(np.int64)


def turned(vectors: Array, turn_deg: float) -> Array:
    """Frequency vectors ``(fx, fy)``, fy down, of a sheet turned counter-clockwise as seen."""
    a = np.radians(turn_deg)
    x, y = vectors[..., 0], vectors[..., 1]
    return np.stack([np.cos(a) * x + np.sin(a) * y, np.cos(a) * y - np.sin(a) * x], axis=-1)
