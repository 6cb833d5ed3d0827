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
    fy = np.fft.fftfreq(shape[0])
    fx = np.fft.rfftfreq(shape[1])
    total = np.ones((shape[0], shape[1] // 2 + 1), np.float32)
    for lattice, share in zip(lattices, shares, strict=True):
        if share <= 0:
            continue
        cell = np.linalg.inv(np.stack([lattice.k1, lattice.k2]))
        one = _sinc(fx, fy, cell[:, 0])
        one *= _sinc(fx, fy, cell[:, 1])
        np.clip(one, 0, 1, out=one)
        if share < 1:
            one = 1 - (1 - one) ** _FAINT_POWER
        total *= one
        for place in _folded_orders(lattice):
            across, down = (_bell(f - p) for f, p in zip((fx, fy), place, strict=True))
            total *= 1 - down[:, None] * across[None, :]
    return total


def _sinc(
    fx: NDArray[np.floating], fy: NDArray[np.floating], side: NDArray[np.float64]
) -> NDArray[np.float32]:
    """sin(t) / t of t = pi f.side on the grid of both axes; the sine of a sum needs no sine a bin."""
    x, y = (np.pi * f * a for f, a in zip((fx, fy), side, strict=True))
    angle = np.add.outer(y, x).astype(np.float32)
    sin_x, cos_x, sin_y, cos_y = (v.astype(np.float32) for v in (np.sin(x), np.cos(x), np.sin(y), np.cos(y)))
    sine = np.multiply.outer(sin_y, cos_x)
    sine += np.multiply.outer(cos_y, sin_x)
    near = np.abs(angle) < 1e-3
    angle[near] = 1
    sine /= angle
    sine[near] = 1
    return sine


def _bell(f: NDArray[np.floating]) -> NDArray[np.float32]:
    """Gaussian of a folded order along one axis, periodic."""
    return np.exp(-((f - np.rint(f)) ** 2) / (2 * _FOLDED_SIGMA**2)).astype(np.float32)


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
