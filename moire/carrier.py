"""Where a screen is: local amplitude of its lines, and a gate that is shut where it is absent."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from moire.nulls import ScreenLattice
from moire.waves import Waves, smooth

_DECOYS = 4
_NOISE = 0.002
_SUSPECT, _SURE = 1.8, 6.0


def local_amplitudes(
    plane: NDArray[np.float32], frequencies: Sequence[NDArray[np.float64]], *, sigma_px: float
) -> NDArray[np.float32]:
    """Amplitude of each line in a Gaussian neighbourhood, on a grid less than a sigma apart.

    Parameters
    ----------
    plane : ndarray, shape (rows, columns)
        Zero-mean around the lines, for example a picture less its low-pass.
    frequencies : sequence of ndarray, shape (2,)
        ``(fx, fy)`` cycles per pixel.
    sigma_px : float

    Returns
    -------
    ndarray, shape (rows / step, columns / step, lines)
        With step as in `grid_step`, rounded up.
    """
    step = grid_step(sigma_px)
    waves = Waves(
        frequencies=np.asarray(frequencies, float), shape=(plane.shape[0], plane.shape[1]), step=step
    )
    return np.asarray(2 * np.abs(smooth(waves.analyse(plane), sigma_px / step)), np.float32)


def grid_step(sigma_px: float) -> int:
    """Pixels between the samples of a local amplitude."""
    return max(1, int(sigma_px / 1.5))


def coherent_amplitude(
    plane: NDArray[np.float32], lattices: Sequence[ScreenLattice], *, sigma_px: float
) -> NDArray[np.float32]:
    """Root sum of squares of the local amplitudes of all fundamentals, at full size."""
    if not lattices:
        return np.zeros_like(plane)
    lines = local_amplitudes(plane, [k for g in lattices for k in (g.k1, g.k2)], sigma_px=sigma_px)
    total = np.sqrt(np.einsum("yxl,yxl->yx", lines, lines))
    return _full_size(total, plane.shape, grid_step(sigma_px))


def _full_size(coarse: NDArray[np.float32], shape: tuple[int, ...], step: int) -> NDArray[np.float32]:
    """A grid of block values brought to the pixels, blocks that overhang cut."""
    import cv2

    rows, columns = coarse.shape
    whole = cv2.resize(coarse, (columns * step, rows * step), interpolation=cv2.INTER_LINEAR)
    return np.ascontiguousarray(whole[: shape[0], : shape[1]], np.float32)


def presence(
    plane: NDArray[np.float32], lattice: ScreenLattice, others: Sequence[ScreenLattice]
) -> NDArray[np.float32]:
    """Where a screen is present, 0..1 at full size: 0 where its lines do not exceed decoys.

    The geometric mean of its two lines is held against the rms of four decoy lines of the same
    frequency at angles where no screen is. Places that are sure carry their less sure
    surroundings with them (hysteresis), so that dips of the dots' own beat do not open holes.
    """
    import cv2

    sigma = 2.5 * lattice.period_px
    sought = [lattice.k1, lattice.k2, *_decoys(lattice, others)]
    found = local_amplitudes(plane, sought, sigma_px=sigma)
    floor = np.sqrt(np.mean(found[..., 2:] ** 2, axis=2) + np.float32(_NOISE**2))
    ratio = np.sqrt(found[..., 0] * found[..., 1]) / floor
    _, labels = cv2.connectedComponents((ratio > _SUSPECT).astype(np.uint8), connectivity=4)
    sure = np.zeros(int(labels.max()) + 1, np.uint8)
    sure[labels[ratio > _SURE]] = 1
    reach = max(1, round(2 * lattice.period_px / grid_step(sigma)))
    gate = cv2.dilate(
        sure[labels], cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (2 * reach + 1, 2 * reach + 1))
    )
    return _full_size(np.asarray(gate, np.float32), plane.shape, grid_step(sigma))


def _decoys(lattice: ScreenLattice, others: Sequence[ScreenLattice]) -> list[NDArray[np.float64]]:
    radius = 1 / lattice.period_px
    taken = [np.degrees(np.arctan2(k[1], k[0])) % 180 for g in (lattice, *others) for k in (g.k1, g.k2)]
    angles = np.arange(0.0, 180.0, 3.0)
    gap = np.min([np.abs((angles - t + 90) % 180 - 90) for t in taken], axis=0)
    chosen: list[float] = []
    for _ in range(_DECOYS):
        if chosen:
            gap = np.minimum(gap, np.min([np.abs((angles - c + 90) % 180 - 90) for c in chosen], axis=0))
        chosen.append(float(angles[int(np.argmax(gap))]))
    turn = np.radians(chosen)
    return [radius * np.array([np.cos(a), np.sin(a)]) for a in turn]
