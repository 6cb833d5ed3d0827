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


def cut_patches(codes: Codes, tiles: NDArray[np.int64], *, size: int) -> NDArray[np.float32]:
    """Pixels of half-overlapped tiles, shape (tiles, size, size, channels)."""
    hop = size // 2
    return np.stack([codes[y * hop : y * hop + size, x * hop : x * hop + size] for y, x in tiles]).astype(
        np.float32
    )


def patch_phasors(
    patches: NDArray[np.float32], frequencies: NDArray[np.float64]
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
    window = hann(size) / hann(size).sum()
    means = patches.mean(axis=(1, 2))
    flat = (patches - means[:, None, None, :]).transpose(0, 3, 1, 2)
    wave = np.exp(-2j * np.pi * frequencies[:, :, None] * np.arange(size)) * window
    across, down = wave[:, 0].astype(np.complex64), wave[:, 1].astype(np.complex64)
    rows = np.ascontiguousarray(flat).reshape(-1, size) @ np.concatenate([across.real, across.imag]).T
    half = len(frequencies)
    lines = (rows[:, :half] + 1j * rows[:, half:]).reshape(tiles, channels, size, half)
    return 2 * np.einsum("tcyf,fy->ftc", lines, down), means
