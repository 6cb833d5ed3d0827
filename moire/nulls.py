"""Lattice nulls: filters that average over whole cells of a screen.

The mean over the parallelogram of a screen's cell is zero at every order of the screen,
harmonics included, and needs no tuning: its transfer is sinc(f.a1) sinc(f.a2) with a1, a2 the
cell's sides. Its powers ``1 - (1 - N)^k`` keep zeros at the orders but pass more between them.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.lattice import wrap

_FOLDED_SIGMA = 0.018
_FOLDED_FLOOR = 0.07
_FAINT_POWER = 6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ScreenLattice:
    """A screen as observed: two vectors ``(fx, fy)`` in cycles per pixel, fy down the page."""

    k1: NDArray[np.float64]
    k2: NDArray[np.float64]

    @property
    def period_px(self) -> float:
        return float(2 / (np.hypot(*self.k1) + np.hypot(*self.k2)))


def null_transfer(
    shape: tuple[int, int], lattices: Sequence[ScreenLattice], shares: Sequence[float]
) -> NDArray[np.float32]:
    """Transfer of the null of several screens on the half-plane grid of `scipy.fft.rfft2`.

    Parameters
    ----------
    shape : (int, int)
        Rows and columns of the transformed array.
    lattices : sequence of ScreenLattice
    shares : sequence of float
        1 takes a screen out whole, 0 leaves it, between the two only near its orders.

    Returns
    -------
    ndarray, shape (rows, columns // 2 + 1), 0..1
    """
    fy = np.fft.fftfreq(shape[0]).astype(np.float32)[:, None]
    fx = np.fft.rfftfreq(shape[1]).astype(np.float32)[None, :]
    total = np.ones((shape[0], shape[1] // 2 + 1), np.float32)
    for lattice, share in zip(lattices, shares, strict=True):
        if share <= 0:
            continue
        cell = np.linalg.inv(np.stack([lattice.k1, lattice.k2]))
        one = np.ones_like(total)
        for a in cell.T.astype(np.float32):
            one *= _sinc(fx * a[0] + fy * a[1])
        np.clip(one, 0, 1, out=one)
        if share < 1:
            one = 1 - (1 - one) ** _FAINT_POWER
        total *= one
        for place in _folded_orders(lattice):
            distance = _wrapped(fx - place[0]) ** 2 + _wrapped(fy - place[1]) ** 2
            total *= 1 - np.exp(-distance / np.float32(2 * _FOLDED_SIGMA**2))
    return total


def _sinc(x: NDArray[np.float32]) -> NDArray[np.float32]:
    at = np.float32(np.pi) * x
    return np.where(np.abs(at) < 1e-4, np.float32(1), np.sin(at) / np.where(at == 0, np.float32(1), at))


def _wrapped(f: NDArray[np.float32]) -> NDArray[np.float32]:
    return f - np.rint(f)


def _folded_orders(lattice: ScreenLattice) -> list[NDArray[np.float64]]:
    """Places of the orders up to 2 that lie beyond the sampling grid and fold back into it."""
    out = []
    for m in range(-2, 3):
        for n in range(-2, 3):
            true = m * lattice.k1 + n * lattice.k2
            seen = wrap(true)
            beyond = bool(np.abs(true - seen).max() > 0.5)
            if 1 <= abs(m) + abs(n) <= 2 and beyond and np.hypot(*seen) > _FOLDED_FLOOR:
                out.append(seen)
    return out
