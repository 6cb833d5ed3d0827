"""Where a screen is: local amplitude of its lines, and a gate that is shut where it is absent."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from moire.nulls import ScreenLattice

_DECOYS = 4
_NOISE = 0.004


def local_amplitude(
    plane: NDArray[np.float32], f: NDArray[np.float64], *, sigma_px: float, origin: tuple[int, int] = (0, 0)
) -> NDArray[np.float32]:
    """Amplitude of one line in a Gaussian neighbourhood, on a grid about a sigma apart.

    Parameters
    ----------
    plane : ndarray, shape (rows, columns)
        Zero-mean around the line, for example a picture less its low-pass.
    f : ndarray, shape (2,)
        ``(fx, fy)`` cycles per pixel.
    sigma_px : float
    origin : (int, int)
        Page pixel (x, y) of the plane's corner; amplitudes do not depend on it.

    Returns
    -------
    ndarray, shape (rows, columns) / step
        With step as in `grid_step`.
    """
    import cv2

    rows, columns = plane.shape
    x = np.exp(-2j * np.pi * f[0] * (np.arange(columns) + origin[0])).astype(np.complex64)
    y = np.exp(-2j * np.pi * f[1] * (np.arange(rows) + origin[1])).astype(np.complex64)
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
    """How surely a screen is present, 0..1 at full size: 0 where its lines do not exceed decoys.

    The weaker of its two lines is held against the strongest of four decoy lines of the same
    frequency at angles where no screen is.
    """
    import cv2

    period = lattice.period_px
    sigma = 2.5 * period
    lines = [local_amplitude(plane, k, sigma_px=sigma) for k in (lattice.k1, lattice.k2)]
    decoys = [local_amplitude(plane, f, sigma_px=sigma) for f in _decoys(lattice, others)]
    floor = np.sqrt(np.max(decoys, axis=0) ** 2 + np.float32(_NOISE**2))
    ratio = np.minimum(lines[0], lines[1]) / floor
    low, high = (2.5, 5.0) if period < 3 else (4.0, 10.0)
    gate = np.sqrt(np.clip((ratio - low) / (high - low), 0, 1))
    reach = max(1, round(2 * period / grid_step(sigma)))
    gate = cv2.dilate(gate, cv2.getStructuringElement(cv2.MORPH_ELLIPSE, (2 * reach + 1, 2 * reach + 1)))
    rows, columns = plane.shape
    return np.asarray(cv2.resize(gate, (columns, rows), interpolation=cv2.INTER_LINEAR), np.float32)


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
