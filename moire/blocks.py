"""The grid that a block codec leaves: steps at block edges, in place or doubled by an enlargement."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

# Pictures used for tuning, never coded, resized by any factor, stay below 1.5.
BLOCK_SCORE = 3.0
_STEP_LIMIT = 12.0
# Rows or columns enough for a mean step.
_PROFILE_LINES = 700
_CODED_PX, _DOUBLED_PX = 8, 16


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockGrid:
    """Evidence of a block transform's grid.

    Attributes
    ----------
    period_px : int
    phase : (int, int)
        First block edge along x and y.
    score : float
        Robust standard errors by which block edges stand out, the smaller of the two axes.
    """

    period_px: int
    phase: tuple[int, int]
    score: float


def find_block_grid(image: NDArray[np.float32]) -> BlockGrid | None:
    """Grid of 8 x 8 blocks (ISO/IEC 10918-1), or of 16 x 16 after a twofold enlargement, if any.

    The second difference of the step between neighbouring columns, clipped, is averaged down the
    page and folded by the period, and so for rows; block edges raise it at one phase alone. Other
    enlargements leave a comb that cannot be told from the one of resampling itself.

    Parameters
    ----------
    image : ndarray, shape (rows, columns)
        Code values on a 0..255 scale.
    """
    every = [max(1, length // _PROFILE_LINES) for length in image.shape]
    axes = [_edge_profile(image[:: every[0]], axis=1), _edge_profile(image[:, :: every[1]], axis=0)]
    grids = []
    for period in (_CODED_PX, _DOUBLED_PX):
        folded = [_fold_profile(profile, period) for profile in axes]
        score = min(r[0] for r in folded)
        grids.append(BlockGrid(period_px=period, phase=(folded[0][1], folded[1][1]), score=score))
    best = max(grids, key=lambda g: g.score)
    return best if best.score > BLOCK_SCORE else None


def _edge_profile(image: NDArray[np.float32], *, axis: int) -> NDArray[np.float64]:
    from scipy import ndimage

    step = np.diff(image, axis=axis)
    if axis == 0:
        step = step.T
    middle = np.abs(step[:, 1:-1] - 0.5 * (step[:, :-2] + step[:, 2:]))
    profile = np.minimum(middle, _STEP_LIMIT).mean(axis=0, dtype=np.float64)
    return np.asarray(profile - ndimage.uniform_filter1d(profile, 17, mode="reflect"))


def _fold_profile(profile: NDArray[np.float64], period: int) -> tuple[float, int]:
    whole = len(profile) // period
    if whole < 4:
        return 0.0, 0
    folded = profile[: whole * period].reshape(whole, period)
    level = np.median(folded, axis=0)
    best = int(np.argmax(level))
    rival = np.partition(level, -2)[-2]
    spread = 1.4826 * np.median(np.abs(folded - level))
    error = max(float(spread) * math.sqrt(1.57 / whole), 1e-6)
    # Profile entry j lies between columns j + 1 and j + 2.
    return float(level[best] - rival) / error, (best + 2) % period
