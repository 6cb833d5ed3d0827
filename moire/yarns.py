"""Yarns as they lie: uneven spacing, uneven thickness, and the hair that stands off them."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

_SPARE = 40
_HAIR_DPI = 600
_HAIRS_PER_SQ_IN = 2500


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class YarnSet:
    """One set of parallel threads.

    Attributes
    ----------
    edges_cm : ndarray, shape (threads + 1,)
        Where each thread's cell begins; `first` is the number of the first of them.
    first : int
    bulk, rate, phase : ndarray, shape (threads,)
        Each thread's own thickness, and the rate (per cm) and phase of its thick and thin places.
    """

    edges_cm: NDArray[np.float64]
    first: int
    bulk: NDArray[np.float64]
    rate: NDArray[np.float64]
    phase: NDArray[np.float64]

    def coordinate(self, at_cm: NDArray[np.floating]) -> NDArray[np.float64]:
        """Thread number as a continuous coordinate: whole numbers are the cells' edges."""
        numbers = np.arange(self.first, self.first + len(self.edges_cm))
        inside = np.interp(at_cm, self.edges_cm, numbers)
        gap = (self.edges_cm[-1] - self.edges_cm[0]) / (len(self.edges_cm) - 1)
        below = np.minimum(at_cm - self.edges_cm[0], 0)
        above = np.maximum(at_cm - self.edges_cm[-1], 0)
        return np.asarray(inside + (below + above) / gap)

    def thickness(self, number: NDArray[np.int64], along_cm: NDArray[np.floating]) -> NDArray[np.float64]:
        """Width of threads over their cells, at places along them."""
        i = (number - self.first) % len(self.bulk)
        waves = np.sin(2 * np.pi * (self.rate[i] * along_cm + self.phase[i]))
        return np.asarray(np.clip(1 + self.bulk[i] * (1 + waves), 0.3, 1.6))


def lay_yarns(
    per_cm: float, length_cm: float, *, jitter: float, thickness: float, rng: np.random.Generator
) -> YarnSet:
    """Threads with independently uneven gaps whose mean sett over the length is as asked.

    Parameters
    ----------
    per_cm, length_cm : float
    jitter : float
        Standard deviation of the gaps, as a share of a gap; gaps add up, as picks beaten up by hand do.
    thickness : float
        Standard deviation of the yarns' thickness, as a share of it.
    rng : numpy.random.Generator
    """
    count = int(np.ceil(per_cm * length_cm)) + 2 * _SPARE
    gaps = np.clip(1 + jitter * rng.standard_normal(count), 0.3, 1.7) / per_cm
    edges = np.concatenate([[0.0], np.cumsum(gaps)]) - _SPARE / per_cm
    numbers = np.arange(count + 1) - _SPARE
    asked = per_cm * length_cm
    for _ in range(3):
        start, end = np.interp([0, length_cm], edges, numbers)
        edges = edges * (end - start) / asked
    return YarnSet(
        edges_cm=edges,
        first=-_SPARE,
        bulk=thickness * rng.standard_normal(count),
        rate=rng.uniform(0.2, 2.0, count),
        phase=rng.random(count),
    )


@lru_cache(maxsize=2)
def draw_hair(width_in: float, height_in: float, seed: int) -> NDArray[np.float32]:
    """Fibres that stand off the cloth, -1..1, at 600 to the inch; curved, in every direction."""
    import cv2

    rng = np.random.default_rng((seed, 7))
    columns, rows = (max(2, round(side * _HAIR_DPI)) for side in (width_in, height_in))
    field = np.zeros((rows, columns), np.float32)
    for _ in range(round(_HAIRS_PER_SQ_IN * width_in * height_in)):
        start = rng.uniform((0, 0), (columns, rows))
        steps = np.full(12, rng.uniform(1.5, 5.0))
        headings = rng.uniform(0, 2 * np.pi) + np.cumsum(rng.normal(0, 0.25, 12))
        path = start + np.cumsum(
            steps[:, None] * np.stack([np.cos(headings), np.sin(headings)], axis=1), axis=0
        )
        level = float(rng.choice([-0.6, 1.0]))
        cv2.polylines(field, [np.rint(path * 8).astype(np.int32)], False, level, 1, cv2.LINE_AA, 3)
    return field
