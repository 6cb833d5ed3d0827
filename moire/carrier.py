"""Where a screen is: local amplitude of its lines, and a gate that is shut where it is absent."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from moire.nulls import ScreenLattice

_DECOYS = 4
_NOISE = 0.002
_SUSPECT, _SURE = 1.8, 6.0


def local_amplitude(
    plane: NDArray[np.float32], f: NDArray[np.float64], *, sigma_px: float
) -> NDArray[np.float32]:
    """Amplitude of one line in a Gaussian neighbourhood, on a grid about a sigma apart.

    Parameters
    ----------
    plane : ndarray, shape (rows, columns)
        Zero-mean around the line, for example a picture less its low-pass.
    f : ndarray, shape (2,)
        ``(fx, fy)`` cycles per pixel.
    sigma_px : float

    Returns
    -------
    ndarray, shape (rows, columns) / step
        With step as in `grid_step`.
    """
    import cv2

    rows, columns = plane.shape
    x = np.exp(-2j * np.pi * f[0] * np.arange(columns)).astype(np.complex64)
    y = np.exp(-2j * np.pi * f[1] * np.arange(rows)).astype(np.complex64)
    product = plane * y[:, None] * x[None, :]
    step = grid_step(sigma_px)
    size = (max(1, columns // step), max(1, rows // step))
    parts = [
        cv2.GaussianBlur(
            cv2.resize(np.ascontiguousarray(part), size, interpolation=cv2.INTER_AREA),
            (0, 0),
            sigma_px / step,
        )
        for part in (product.real, product.imag)
    ]
    return np.asarray(2 * np.hypot(parts[0], parts[1]), np.float32)


def grid_step(sigma_px: float) -> int:
    """Pixels between the samples of a local amplitude."""
    return max(1, int(sigma_px / 2))


def coherent_amplitude(
    plane: NDArray[np.float32], lattices: Sequence[ScreenLattice], *, sigma_px: float
) -> NDArray[np.float32]:
    """Root sum of squares of the local amplitudes of all fundamentals, at full size."""
    import cv2

    total = None
    for lattice in lattices:
        for k in (lattice.k1, lattice.k2):
            a = local_amplitude(plane, k, sigma_px=sigma_px) ** 2
            total = a if total is None else total + a
    if total is None:
        return np.zeros_like(plane)
    rows, columns = plane.shape
    return np.asarray(cv2.resize(np.sqrt(total), (columns, rows), interpolation=cv2.INTER_LINEAR))


def presence(
    plane: NDArray[np.float32], lattice: ScreenLattice, others: Sequence[ScreenLattice]
) -> NDArray[np.float32]:
    """Where a screen is present, 0..1 at full size: 0 where its lines do not exceed decoys.

    The geometric mean of its two lines is held against the rms of four decoy lines of the same
    frequency at angles where no screen is. Places that are sure carry their less sure
    surroundings with them (hysteresis), so that dips of the dots' own beat do not open holes.
    """
    import cv2
    from skimage.filters import apply_hysteresis_threshold

    sigma = 2.5 * lattice.period_px
    lines = [local_amplitude(plane, k, sigma_px=sigma) for k in (lattice.k1, lattice.k2)]
    decoys = [local_amplitude(plane, f, sigma_px=sigma) for f in _decoys(lattice, others)]
    floor = np.sqrt(np.mean(np.square(decoys), axis=0) + np.float32(_NOISE**2))
    ratio = np.sqrt(lines[0] * lines[1]) / floor
    gate = apply_hysteresis_threshold(ratio, _SUSPECT, _SURE).astype(np.uint8)
    reach = max(1, round(2 * lattice.period_px / grid_step(sigma)))
    gate = cv2.dilate(gate, cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (2 * reach + 1, 2 * reach + 1)))
    rows, columns = plane.shape
    return np.asarray(cv2.resize(gate.astype(np.float32), (columns, rows), interpolation=cv2.INTER_LINEAR))


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
