"""Beats: lines that are integer combinations of two screens (rosettes)."""

from __future__ import annotations

from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from moire.lattice import Lattice, grid_distance, wrap


def rosette_parents(
    f: NDArray[np.float64], lattices: tuple[Lattice, ...], tolerance: float
) -> tuple[int, int, str] | None:
    """The two screens whose low orders sum to a line, and the sum in words.

    Orders up to |m| + |n| = 2 of each, the k-vector sum rule (Amidror, The Theory of the
    Moire Phenomenon, ch. 2).
    """
    orders = [(m, n) for m in range(-2, 3) for n in range(-2, 3) if 1 <= abs(m) + abs(n) <= 2]
    best: tuple[int, int, int, str] | None = None
    for (i, a), (j, b) in combinations(enumerate(lattices), 2):
        for m, n in orders:
            for p, q in orders:
                place = wrap(m * a.k1 + n * a.k2 + p * b.k1 + q * b.k2)
                total = abs(m) + abs(n) + abs(p) + abs(q)
                if grid_distance(f, place) < tolerance and (best is None or total < best[0]):
                    best = (total, i, j, f"({m},{n}) of one and ({p},{q}) of the other")
    return None if best is None else best[1:]
