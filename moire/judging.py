"""Judging: what the eye makes of predicted lines at a viewing condition."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from moire.model import Viewing
from moire.originals import Original
from moire.patterns import Pattern
from moire.prediction import Capture, Lines
from moire.units import MM_PER_INCH
from moire.vision import contrast_sensitivities, cycles_per_degree

# Scanners keep their scale to about a thousandth (common practice, no source).
SCALE_SIGMA = 0.001
# Lines closer than this are one line.
SAME_CPI = 0.02
_EYE_PEAK_CPD = 3.05

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Judged:
    """Predicted lines with what the eye makes of them, arrays of shape (rates, lines).

    ``alone``, of shape (lines,), marks those of one pattern only.
    """

    lines: Lines
    sigma_cpi: Array
    visibility: Array
    by_sampling: NDArray[np.bool_]
    alone: NDArray[np.bool_]


def judge_lines(
    lines: Lines, original: Original, capture: Capture, viewing: Viewing, *, scale_sigma: float = SCALE_SIGMA
) -> Judged:
    """Visibility of each line at each rate, the worst within two sigma of its frequency."""
    folded = lines.true_cpi[None] - lines.seen_cpi
    own = np.array([_sigma(part, original.patterns) for part in lines.parts])
    sigma = np.hypot(own[None], scale_sigma * np.hypot(folded[..., 0], folded[..., 1]))
    if viewing.condition == "print":
        size = np.hypot(lines.seen_cpi[..., 0], lines.seen_cpi[..., 1])
        per_mm, spread = size / MM_PER_INCH, sigma / MM_PER_INCH
    else:
        shown = viewing.monitor_ppi / capture.rates[:, None, :]
        seen = lines.seen_cpi * shown
        per_mm = np.hypot(seen[..., 0], seen[..., 1]) / MM_PER_INCH
        spread = sigma * shown.max(axis=-1) / MM_PER_INCH
    degree = cycles_per_degree(1.0, viewing.distance_mm)
    low, high = (per_mm - 2 * spread) * degree, (per_mm + 2 * spread) * degree
    sensitivity = contrast_sensitivities(np.clip(_EYE_PEAK_CPD, low, high))
    # A line and its own mirror image may fold together: at the worst phase they add.
    twice = 2 * lines.seen_cpi
    off = twice - np.rint(twice / capture.rates[:, None, :]) * capture.rates[:, None, :]
    on_edge = np.hypot(off[..., 0], off[..., 1]) < SAME_CPI
    swing = lines.amplitude * np.where(on_edge, 2, 1)
    modulation = np.minimum(1, 3 * swing / (lines.mean + 16))
    by_sampling = (lines.order != 0).any(axis=-1) | (lines.capture_order != 0).any(axis=-1)
    by_sampling |= (lines.image != 0).any(axis=-1)[None]
    by_sampling &= ~_locked(lines, sigma, by_sampling, on_edge, capture.rates)
    return Judged(
        lines=replace(lines, amplitude=swing),
        sigma_cpi=sigma,
        visibility=modulation * sensitivity,
        by_sampling=by_sampling,
        alone=np.array([len(parts) == 1 for parts in lines.parts]),
    )


def strongest(judged: Judged, rates: Array) -> tuple[Array, NDArray[np.intp]]:
    """Visibility of the strongest beat with the sampling grid at each rate, and which line it is.

    Lines that fall together with it are added, as they do at the worst phase.
    """
    beats = np.where(judged.by_sampling, judged.visibility, 0)
    at = beats.argmax(axis=1)
    seen = judged.lines.seen_cpi
    lead = seen[np.arange(len(seen)), at][:, None]
    same = np.zeros(beats.shape, bool)
    for sign in (1, -1):
        apart = seen - sign * lead
        apart -= np.rint(apart / rates[:, None]) * rates[:, None]
        same |= np.hypot(apart[..., 0], apart[..., 1]) < SAME_CPI
    return np.asarray((beats * same).sum(axis=1)), at


def _locked(
    lines: Lines, sigma: Array, folded: NDArray[np.bool_], on_edge: NDArray[np.bool_], rates: Array
) -> NDArray[np.bool_]:
    """Folded lines that surely fall onto an unfolded one of the same pattern, or onto themselves.

    They add to what is there and make no beat; where the frequency is uncertain they would.
    """
    sure = folded & (sigma < SAME_CPI)
    out = sure & on_edge
    candidates = np.flatnonzero(sure.any(axis=0))
    for host, parts in enumerate(lines.parts):
        own = ~folded[:, host] | on_edge[:, host]
        if len(parts) > 1 or not len(candidates) or not own.any():
            continue
        kin = [i for i in candidates if len(lines.parts[i]) == 1 and lines.parts[i][0][0] == parts[0][0]]
        mine = np.array(kin, int)
        for sign in (1, -1):
            apart = lines.seen_cpi[:, mine] - sign * lines.seen_cpi[:, host][:, None]
            apart -= np.rint(apart / rates[:, None]) * rates[:, None]
            same = np.hypot(apart[..., 0], apart[..., 1]) < SAME_CPI
            out[:, mine] |= same & sure[:, mine] & own[:, None]
    return out


def _sigma(parts: Sequence[tuple[int, int, int]], patterns: Sequence[Pattern]) -> float:
    """Standard uncertainty of a line's frequency from its patterns', cycles per inch."""
    return math.sqrt(
        sum((math.hypot(m, n) / patterns[p].repeat * patterns[p].sigma_cpi) ** 2 for p, m, n in parts)
    )
