"""Grids that are not screens: JPEG blocks, scanner banding, printed content on the axes."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.lattice import grid_distance
from moire.model import Kind
from moire.peaks import Peak
from moire.screens import on_axis

BLOCK_SCORE = 8.0
_STEP_LIMIT = 12.0
_TEXT_CPI = 14.0
# Rows or columns enough for a mean step.
_PROFILE_LINES = 700


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
    step : float
        Excess step at the block edges, code values.
    """

    period_px: int
    phase: tuple[int, int]
    score: float
    step: float


def find_block_grid(image: NDArray[np.float32], period: int = 8) -> BlockGrid:
    """Step between neighbouring columns and rows, folded by the block size.

    The second difference of the column-to-column step, clipped, is averaged down the page;
    block edges raise it at one phase of the period (ISO/IEC 10918-1 codes 8 x 8 blocks).
    """
    every = [max(1, length // _PROFILE_LINES) for length in image.shape]
    axes = [_edge_profile(image[:: every[0]], axis=1), _edge_profile(image[:, :: every[1]], axis=0)]
    results = [_fold_profile(profile, period) for profile in axes]
    score = min(r[0] for r in results)
    step = float(np.mean([r[2] for r in results]))
    return BlockGrid(period_px=period, phase=(results[0][1], results[1][1]), score=score, step=step)


def _edge_profile(image: NDArray[np.float32], *, axis: int) -> NDArray[np.float64]:
    from scipy import ndimage

    step = np.diff(image, axis=axis)
    if axis == 0:
        step = step.T
    middle = np.abs(step[:, 1:-1] - 0.5 * (step[:, :-2] + step[:, 2:]))
    profile = np.minimum(middle, _STEP_LIMIT).mean(axis=0, dtype=np.float64)
    return np.asarray(profile - ndimage.uniform_filter1d(profile, 17, mode="reflect"))


def _fold_profile(profile: NDArray[np.float64], period: int) -> tuple[float, int, float]:
    whole = len(profile) // period
    if whole < 4:
        return 0.0, 0, 0.0
    folded = profile[: whole * period].reshape(whole, period)
    level = np.median(folded, axis=0)
    best = int(np.argmax(level))
    others = np.delete(level, best)
    spread = 1.4826 * np.median(np.abs(folded - level))
    error = max(float(spread) * math.sqrt(1.57 / whole), 1e-6)
    # Profile entry j lies between columns j + 1 and j + 2.
    rise = float(level[best] - np.median(others))
    return rise / error, (best + 2) % period, rise


def sort_line(
    peak: Peak, others: tuple[Peak, ...], *, ppi: tuple[float, float] | None, blocks: BlockGrid | None
) -> tuple[Kind, str]:
    """Cause of a line that belongs to no screen, and why, in words.

    Parameters
    ----------
    peak : Peak
    others : tuple of Peak
        All unexplained lines of the scan, for combs.
    ppi : (float, float) or None
    blocks : BlockGrid or None
        A block grid already found.
    """
    f = peak.f
    if blocks is not None and _on_multiples(f, 1 / blocks.period_px, peak.bin_cpp):
        return "block-grid", f"lies on a multiple of 1/{blocks.period_px} cycles per pixel"
    spread_over = float((peak.weight > 0.3).mean())
    if on_axis(f):
        frequency = float(np.hypot(*f))
        along = 0 if abs(f[0]) > abs(f[1]) else 1
        cpi = frequency * ppi[along] if ppi else None
        comb = sum(
            1 for o in others if on_axis(o.f) and _is_multiple(float(o.f[along]), float(f[along]), o.bin_cpp)
        )
        if comb >= 2 or (cpi is not None and cpi < _TEXT_CPI) or peak.amplitude > 8:
            return "content", "on an axis with its own harmonics or at the pitch of text lines or rules"
        if peak.coherence > 0.97 and spread_over > 0.6 and not peak.doubled:
            return "banding", "a single line on a scanner axis, in step over the whole page"
        return "content", "on an axis but not in step over the page"
    if peak.coherence > 0.95 and peak.z > 8 and not peak.doubled:
        return "unexplained", "a coherent line that no screen, beat or grid explains"
    return "content", "textured subject matter: the phase wanders over the page"


def _on_multiples(f: NDArray[np.float64], unit: float, bin_cpp: float) -> bool:
    nearest = np.rint(f / unit) * unit
    return bool(grid_distance(f, nearest) < 0.12 * bin_cpp)


def _is_multiple(f: float, base: float, bin_cpp: float) -> bool:
    if base == 0:
        return False
    ratio = abs(f / base)
    return ratio > 1.5 and abs(ratio - round(ratio)) * abs(base) < 0.25 * bin_cpp
