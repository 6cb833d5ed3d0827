"""Beats: lines that are integer combinations of two screens (rosettes)."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations, product

import numpy as np
from numpy.typing import NDArray

from moire.lattice import Lattice, grid_distance, wrap

_LOWEST_CPP = 0.07
_APART_CPP = 0.02
_BELOW_SCREEN = 0.75
_LOW_ORDERS = np.array([(m, n) for m in range(-2, 3) for n in range(-2, 3) if 1 <= abs(m) + abs(n) <= 2])
_ORDER_SIZE = np.abs(_LOW_ORDERS).sum(axis=1)


def rosette_frequencies(
    screens: Sequence[tuple[NDArray[np.float64], NDArray[np.float64]]],
) -> list[NDArray[np.float64]]:
    """First-order beats between screens that are coarser than the screens themselves.

    Parameters
    ----------
    screens : sequence of (k1, k2)
        Observed vectors ``(fx, fy)`` in cycles per pixel.

    Returns
    -------
    list of ndarray
        One of each opposite pair; beats too slow to tell from tone, or closer together than a
        filter can part, are left out.
    """
    found: list[NDArray[np.float64]] = []
    for a, b in combinations(screens, 2):
        finest = max(float(np.hypot(*k)) for k in (*a, *b))
        for u, v, sign in product(a, b, (1, -1)):
            f = wrap(u + sign * v)
            slow = float(np.hypot(*f)) < _LOWEST_CPP
            coarse = float(np.hypot(*f)) < _BELOW_SCREEN * finest
            if coarse and not slow and all(grid_distance(f, g) > _APART_CPP for g in found):
                found.append(f)
    return found


def rosette_parents(
    f: NDArray[np.float64], lattices: tuple[Lattice, ...], tolerance: float
) -> tuple[int, int, str] | None:
    """The two screens whose low orders sum to a line, and the sum in words.

    Orders up to |m| + |n| = 2 of each, the k-vector sum rule (Amidror, The Theory of the
    Moire Phenomenon, ch. 2).
    """
    best: tuple[int, int, int, str] | None = None
    for (i, a), (j, b) in combinations(enumerate(lattices), 2):
        of_a, of_b = (_LOW_ORDERS @ np.stack([g.k1, g.k2]) for g in (a, b))
        gap = grid_distance(f, of_a[:, None] + of_b[None, :])
        total = np.where(gap < tolerance, _ORDER_SIZE[:, None] + _ORDER_SIZE[None, :], 99)
        first, second = np.unravel_index(int(total.argmin()), total.shape)
        least = int(total[first, second])
        if least < (99 if best is None else best[0]):
            (m, n), (p, q) = _LOW_ORDERS[first], _LOW_ORDERS[second]
            best = (least, i, j, f"({m},{n}) of one and ({p},{q}) of the other")
    return None if best is None else best[1:]
