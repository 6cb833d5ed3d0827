"""Tiled, tapered spectra of a scan and the tile phasors of single frequencies.

The statistic is the mean of log power over tiles, not the log of the mean: one bright edge
cannot dominate it. A second one, the mean of the strongest tenth of tiles at each bin, sees
patterns that cover a small part of the page.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

_BLANK_POWER = 0.005
_FLOOR = 0.03


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Spectrum:
    """Log power over tiles on the full frequency plane, bin (0, 0) first, periodic.

    Attributes
    ----------
    size : int
        Tile side in pixels; bin `k` is ``k / size`` cycles per pixel.
    tiles : int
        Tiles that carried a picture.
    mean, top : ndarray, shape (size, size)
        Mean of ln power, and mean of its strongest tenth, at each bin.
    """

    size: int
    tiles: int
    mean: NDArray[np.float32]
    top: NDArray[np.float32]


def hann(n: int) -> NDArray[np.float32]:
    """Periodic Hann window, `n` samples (Harris, Proc. IEEE 66 (1978) 51)."""
    return np.asarray(0.5 - 0.5 * np.cos(2 * np.pi * (np.arange(n) + 0.5) / n), np.float32)


def tile_starts(length: int, size: int, pitch: int) -> NDArray[np.int64]:
    """First pixels of tiles that cover `length`, evenly spread about `pitch` apart."""
    count = 1 + max(0, round((length - size) / pitch))
    return np.rint(np.linspace(0, length - size, count)).astype(int)


def tile_spectrum(image: NDArray[np.float32], *, size: int, pitch: int) -> Spectrum:
    """Spectrum of tiles of `size` pixels about `pitch` apart.

    Parameters
    ----------
    image : ndarray, shape (rows, columns)
        Code values on a 0..255 scale, each side at least `size`.
    size, pitch : int
        In pixels.

    Returns
    -------
    Spectrum
        Of unit-energy Hann tiles with their means removed; blank tiles are left out.
    """
    from scipy import fft

    window = np.outer(hann(size), hann(size))
    window /= np.sqrt((window**2).sum())
    weight = window / window.sum()
    half: list[NDArray[np.float32]] = []
    columns = tile_starts(image.shape[1], size, pitch)
    for y in tile_starts(image.shape[0], size, pitch):
        strip = image[y : y + size]
        tiles = np.stack([strip[:, x : x + size] for x in columns])
        tiles = (tiles - (tiles * weight).sum(axis=(1, 2), keepdims=True)) * window
        tiles = tiles[(tiles**2).sum(axis=(1, 2)) > _BLANK_POWER]
        if len(tiles):
            transform = fft.rfft2(tiles)
            half.append(np.log(transform.real**2 + transform.imag**2 + _FLOOR))
    if not half:
        blank = np.full((size, size), np.log(_FLOOR), np.float32)
        return Spectrum(size=size, tiles=0, mean=blank, top=blank)
    log_power = np.concatenate(half)
    count = max(2, len(log_power) // 10)
    top = log_power
    if count < len(log_power):
        top = np.partition(log_power, len(log_power) - count, axis=0)[-count:]
    return Spectrum(
        size=size,
        tiles=len(log_power),
        mean=_full_plane(log_power.mean(axis=0)),
        top=_full_plane(top.mean(axis=0)),
    )


def tile_phasors(
    channels: NDArray[np.float32], frequencies: NDArray[np.float64], *, size: int
) -> tuple[NDArray[np.complex64], NDArray[np.float64], NDArray[np.float64]]:
    """Complex amplitudes of given frequencies in half-overlapped Hann tiles.

    Parameters
    ----------
    channels : ndarray, shape (rows, columns, channels)
    frequencies : ndarray, shape (n, 2)
        ``(fx, fy)`` in cycles per pixel.
    size : int
        Tile side in pixels, even, at most the shorter side of the image.

    Returns
    -------
    phasors : ndarray, shape (n, tile rows, tile columns, channels)
        ``A exp(i phi)`` of ``A cos(2 pi f.r + phi)``, phase referred to pixel (0, 0).
    x, y : ndarray
        Tile centres in pixels.
    """
    hop = size // 2
    rows, columns, _ = channels.shape
    ny, nx = rows // hop, columns // hop
    window = hann(size) / hann(size).sum()
    ex = _half_windows(frequencies[:, 0], window, hop, nx)
    ey = _half_windows(frequencies[:, 1], window, hop, ny)
    out = np.empty((len(frequencies), ny - 1, nx - 1, channels.shape[2]), np.complex64)
    for c in range(channels.shape[2]):
        plane = channels[: ny * hop, : nx * hop, c]
        plane = plane - plane.mean()
        segments = plane.reshape(ny * hop * nx, hop)
        for p in range(len(frequencies)):
            first, second, shift = ex[0][p], ex[1][p], ex[2][p]
            parts = segments @ np.column_stack([first.real, first.imag, second.real, second.imag])
            parts = parts.reshape(ny, hop, nx, 4)
            along = (parts[:, :, :-1, 0] + 1j * parts[:, :, :-1, 1]) * shift[:-1]
            along += (parts[:, :, 1:, 2] + 1j * parts[:, :, 1:, 3]) * shift[1:]
            first, second, shift = ey[0][p], ey[1][p], ey[2][p]
            upper = np.tensordot(along[:-1], first, axes=(1, 0)) * shift[:-1, None]
            lower = np.tensordot(along[1:], second, axes=(1, 0)) * shift[1:, None]
            out[p, :, :, c] = 2 * (upper + lower)
    x = np.arange(1, nx) * hop - 0.5
    y = np.arange(1, ny) * hop - 0.5
    return out, x, y


def tile_means(channels: NDArray[np.float32], *, size: int) -> NDArray[np.float32]:
    """Mean of each channel in the tiles of `tile_phasors`, shape (tile rows, tile columns, channels)."""
    hop = size // 2
    ny, nx = channels.shape[0] // hop, channels.shape[1] // hop
    cells = channels[: ny * hop, : nx * hop].reshape(ny, hop, nx, hop, -1).mean(axis=(1, 3))
    return np.asarray((cells[:-1, :-1] + cells[1:, :-1] + cells[:-1, 1:] + cells[1:, 1:]) / 4)


def _half_windows(
    frequency: NDArray[np.float64], window: NDArray[np.float32], hop: int, segments: int
) -> tuple[NDArray[np.complex64], NDArray[np.complex64], NDArray[np.complex64]]:
    """Demodulators of the two halves of a tile and the phase of each segment's start."""
    wave = np.exp(-2j * np.pi * frequency[:, None] * np.arange(hop)).astype(np.complex64)
    shift = np.exp(-2j * np.pi * frequency[:, None] * hop * np.arange(segments)).astype(np.complex64)
    return wave * window[:hop], wave * window[hop:], shift


def _full_plane(half: NDArray[np.float32]) -> NDArray[np.float32]:
    """Full periodic plane of a real image's half-plane log power."""
    n = half.shape[0]
    full = np.empty((n, n), np.float32)
    full[:, : n // 2 + 1] = half
    rows = (-np.arange(n)) % n
    full[:, n // 2 + 1 :] = half[rows][:, 1 : n // 2][:, ::-1]
    return full
