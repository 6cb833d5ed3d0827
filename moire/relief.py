"""How far each bin of a log spectrum stands above its surroundings in every direction."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

_DIRECTIONS = 12
_NEAREST, _FURTHEST = 3, 6
# Standard deviation of the logarithm of an exponential variable: pi / sqrt(6).
_LOG_EXPONENTIAL_SD = 1.283


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Relief:
    """A plane's levels over its background.

    Attributes
    ----------
    excess : ndarray, shape (size, size)
        ln power above the background, nat.
    z : ndarray, shape (size, size)
        The same in robust standard deviations of the plane's own noise.
    """

    excess: NDArray[np.float32]
    z: NDArray[np.float32]


def raise_relief(plane: NDArray[np.float32], *, independent_tiles: float | None = None) -> Relief:
    """Relief of a periodic plane of log power.

    Parameters
    ----------
    plane : ndarray, shape (size, size)
        Bin (0, 0) first.
    independent_tiles : float or None
        Tiles that the plane is a mean over: its noise cannot be less than theirs.
    """
    n = plane.shape[0]
    excess = plane - _background(plane)
    radius = np.hypot(np.fft.fftfreq(n, 1 / n)[:, None], np.fft.fftfreq(n, 1 / n)[None, :])
    noise = excess[radius > n / 16]
    centre = float(np.median(noise))
    spread = 1.4826 * float(np.median(np.abs(noise - centre)))
    if independent_tiles is not None:
        spread = max(spread, _LOG_EXPONENTIAL_SD * math.sqrt(1.1 / independent_tiles))
    return Relief(excess=excess, z=(excess - np.float32(centre)) / np.float32(max(spread, 1e-6)))


def _background(plane: NDArray[np.float32]) -> NDArray[np.float32]:
    """Largest over twelve directions of the lower of two means, 3 to 6 bins out on either side.

    A streak is high on both sides in its own direction and cancels itself; a neighbouring
    peak is high on one side only and does no harm.
    """
    n, reach = plane.shape[0], _FURTHEST
    wide = np.pad(plane, reach, mode="wrap")
    radii = np.arange(_NEAREST, _FURTHEST + 1)
    best = np.full(plane.shape, -np.inf, np.float32)
    for angle in np.pi * np.arange(_DIRECTIONS) / _DIRECTIONS:
        steps = np.rint(radii * np.cos(angle)).astype(int), np.rint(radii * np.sin(angle)).astype(int)
        sides = [np.zeros(plane.shape, np.float32) for _ in range(2)]
        for side, sign in zip(sides, (1, -1), strict=True):
            for dx, dy in zip(*steps, strict=True):
                top, left = reach + sign * dy, reach + sign * dx
                side += wide[top : top + n, left : left + n]
        np.maximum(best, np.minimum(*sides), out=best)
    return best / np.float32(len(radii))
