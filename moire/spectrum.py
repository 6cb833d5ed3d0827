"""Tiled, tapered spectra of a scan and the tile phasors of single frequencies.

The statistic is the mean of log power over tiles, not the log of the mean: one bright edge
cannot dominate it. A second one, the mean of the strongest tenth of tiles at each bin, sees
patterns that cover a small part of the page.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.relief import Relief, raise_relief

_BLANK_POWER = 0.005
_FLOOR = 0.03


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Spectrum:
    """Log power over tiles on the full frequency plane, bin (0, 0) first, periodic.

    Attributes
    ----------
    size : int
        Tile side in pixels; bin `k` is ``k / size`` cycles per pixel.
    log_power : ndarray, shape (tiles, size, size // 2 + 1)
        ln power of each tile that carried a picture, right half of its plane.
    starts : ndarray, shape (tiles, 2)
        First row and column of those tiles.
    mean, top : ndarray, shape (size, size)
        Mean of ln power, and mean of its strongest tenth, at each bin.
    mean_relief, top_relief : Relief
        How far those stand out.
    """

    size: int
    log_power: NDArray[np.float32]
    starts: NDArray[np.int64]
    mean: NDArray[np.float32]
    top: NDArray[np.float32]
    mean_relief: Relief
    top_relief: Relief

    @property
    def tiles(self) -> int:
        """Tiles that carried a picture."""
        return len(self.log_power)


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
    weight = (window / window.sum()).ravel()
    blank = np.full((0, size, size // 2 + 1), 0, np.float32)
    half, starts = [blank], [np.zeros((0, 2), int)]
    columns = tile_starts(image.shape[1], size, pitch)
    for y in tile_starts(image.shape[0], size, pitch):
        strip = image[y : y + size]
        tiles = np.stack([strip[:, x : x + size] for x in columns])
        tiles -= (tiles.reshape(len(columns), -1) @ weight)[:, None, None]
        tiles *= window
        carries = np.einsum("nij,nij->n", tiles, tiles) > _BLANK_POWER
        if carries.any():
            size_of = np.abs(fft.rfft2(tiles if carries.all() else tiles[carries]))
            half.append(np.log(size_of * size_of + np.float32(_FLOOR)))
            starts.append(np.stack([np.full(carries.sum(), y), columns[carries]], axis=1))
    log_power = np.concatenate(half)
    if not len(log_power):
        return _summed(size, log_power, np.concatenate(starts), np.full(blank.shape[1:], np.log(_FLOOR)))
    count = max(2, len(log_power) // 10)
    top = log_power
    if count < len(log_power):
        top = np.partition(log_power, len(log_power) - count, axis=0)[-count:]
    return _summed(size, log_power, np.concatenate(starts), log_power.mean(axis=0), top.mean(axis=0))


def _summed(
    size: int,
    log_power: NDArray[np.float32],
    starts: NDArray[np.int64],
    mean: NDArray[np.floating],
    top: NDArray[np.floating] | None = None,
) -> Spectrum:
    mean_plane = _full_plane(mean)
    top_plane = mean_plane if top is None else _full_plane(top)
    return Spectrum(
        size=size,
        log_power=log_power,
        starts=starts,
        mean=mean_plane,
        top=top_plane,
        mean_relief=raise_relief(mean_plane, independent_tiles=max(len(log_power), 1)),
        top_relief=raise_relief(top_plane),
    )


def tile_phasors(
    image: NDArray[np.float32], frequencies: NDArray[np.float64], *, size: int
) -> tuple[NDArray[np.complex64], NDArray[np.float64], NDArray[np.float64]]:
    """Complex amplitudes of given frequencies in half-overlapped Hann tiles.

    Parameters
    ----------
    image : ndarray, shape (rows, columns)
    frequencies : ndarray, shape (n, 2)
        ``(fx, fy)`` in cycles per pixel.
    size : int
        Tile side in pixels, even, at most the shorter side of the image.

    Returns
    -------
    phasors : ndarray, shape (n, tile rows, tile columns)
        ``A exp(i phi)`` of ``A cos(2 pi f.r + phi)``, phase referred to pixel (0, 0).
    x, y : ndarray
        Tile centres in pixels.
    """
    hop = size // 2
    ny, nx = image.shape[0] // hop, image.shape[1] // hop
    window = hann(size) / hann(size).sum()
    first_x, second_x, shift_x = _half_windows(frequencies[:, 0], window, hop, nx)
    first_y, second_y, shift_y = _half_windows(frequencies[:, 1], window, hop, ny)
    waves = np.concatenate([first_x.real, first_x.imag, second_x.real, second_x.imag]).T
    n = len(frequencies)
    level = image.mean()
    upper, lower = (np.empty((ny, nx - 1, n), np.complex64) for _ in range(2))
    for j in range(ny):
        strip = (image[j * hop : (j + 1) * hop, : nx * hop] - level).reshape(hop * nx, hop)
        parts = (strip @ waves).reshape(hop, nx, 4 * n)
        along = (parts[:, :-1, :n] + 1j * parts[:, :-1, n : 2 * n]) * shift_x.T[:-1]
        along += (parts[:, 1:, 2 * n : 3 * n] + 1j * parts[:, 1:, 3 * n :]) * shift_x.T[1:]
        upper[j] = np.einsum("yxf,fy->xf", along, first_y) * shift_y[:, j]
        lower[j] = np.einsum("yxf,fy->xf", along, second_y) * shift_y[:, j]
    x = np.arange(1, nx) * hop - 0.5
    y = np.arange(1, ny) * hop - 0.5
    return np.ascontiguousarray(2 * (upper[:-1] + lower[1:]).transpose(2, 0, 1)), x, y


def _half_windows(
    frequency: NDArray[np.float64], window: NDArray[np.float32], hop: int, segments: int
) -> tuple[NDArray[np.complex64], NDArray[np.complex64], NDArray[np.complex64]]:
    """Demodulators of the two halves of a tile and the phase of each segment's start."""
    wave = np.exp(-2j * np.pi * frequency[:, None] * np.arange(hop)).astype(np.complex64)
    shift = np.exp(-2j * np.pi * frequency[:, None] * hop * np.arange(segments)).astype(np.complex64)
    return wave * window[:hop], wave * window[hop:], shift


def _full_plane(half: NDArray[np.floating]) -> NDArray[np.float32]:
    """Full periodic plane of a real image's half-plane log power."""
    n = half.shape[0]
    full = np.empty((n, n), np.float32)
    full[:, : n // 2 + 1] = half
    rows = (-np.arange(n)) % n
    full[:, n // 2 + 1 :] = half[rows][:, 1 : n // 2][:, ::-1]
    return full
