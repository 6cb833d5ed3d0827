"""Tiles that carry a line well, one by one: its phasors there and the tone it lies on.

What concerns a line itself (its colour, its contrast) is measured where the line is strong;
a few dozen tiles tell as much as a whole page does, at a small part of the cost.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from moire.spectrum import hann

TILES_AT_MOST = 32
Codes = NDArray[np.uint8] | NDArray[np.float32]


def strong_tiles(weight: NDArray[np.floating], limit: int = TILES_AT_MOST) -> NDArray[np.int64]:
    """Rows and columns of tiles that carry a line well, evenly spread, shape (n, 2); at least one.

    Parameters
    ----------
    weight : ndarray, shape (tile rows, tile columns)
        Of half-overlapped tiles, 0..1.
    limit : int
        Tiles to return at most, of those with at least half the largest weight.
    """
    strong = np.argwhere(weight >= 0.5 * weight.max())
    return strong[np.linspace(0, len(strong) - 1, min(limit, len(strong))).astype(int)]


def cut_patches(codes: Codes, tiles: NDArray[np.int64], *, size: int) -> Codes:
    """Pixels of half-overlapped tiles, shape (tiles, size, size, channels)."""
    hop = size // 2
    cut = np.empty((len(tiles), size, size, codes.shape[2]), codes.dtype)
    for patch, (y, x) in zip(cut, tiles * hop, strict=True):
        patch[...] = codes[y : y + size, x : x + size]
    return cut


def patch_phasors(
    patches: Codes, frequencies: NDArray[np.float64]
) -> tuple[NDArray[np.complex64], NDArray[np.float32]]:
    """Complex amplitudes of lines in Hann-tapered patches, and the patches' means.

    Parameters
    ----------
    patches : ndarray, shape (tiles, size, size, channels)
    frequencies : ndarray, shape (n, 2)
        ``(fx, fy)`` in cycles per pixel.

    Returns
    -------
    phasors : ndarray, shape (n, tiles, channels)
        ``A exp(i phi)``, phase referred to each patch's own first pixel.
    means : ndarray, shape (tiles, channels)
    """
    tiles, size, _, channels = patches.shape
    n = len(frequencies)
    window = hann(size) / hann(size).sum()
    wave = np.exp(-2j * np.pi * frequencies[:, :, None] * np.arange(size)) * window
    across, down = wave[:, 0].astype(np.complex64), wave[:, 1].astype(np.complex64)
    # One product over all rows: both parts of each wave, and the plain mean.
    rows = np.concatenate([down.real, down.imag, np.full((1, size), 1 / size, np.float32)])
    sums = np.matmul(rows, patches.reshape(tiles, size, size * channels).astype(np.float32, copy=False))
    means = sums[:, -1].reshape(tiles, size, channels).mean(axis=1)
    lines = (sums[:, :n] + 1j * sums[:, n : 2 * n]).reshape(tiles, n, size, channels)
    v = np.einsum("tfxc,fx->ftc", lines, across)
    # What the mean alone leaks through the taper.
    v -= (across.sum(axis=1) * down.sum(axis=1))[:, None, None] * means
    return 2 * v, means
