"""Cloth: thread frequencies and weave among the lines that no screen explains."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from moire.lattice import grid_distance, wrap
from moire.model import Weave
from moire.peaks import Peak

_AXIS_DEG = 12.0
# Where each weave's binding points put their lowest lines, as fractions of the thread frequencies
# (transform of the binding matrix).
_BINDINGS: dict[Literal["plain", "twill", "satin"], tuple[int, tuple[tuple[int, int], ...]]] = {
    "plain": (2, ((1, 1), (1, -1))),
    "twill": (12, ((3, 3), (3, -3), (4, 4), (4, -4))),
    "satin": (40, ((8, 16), (16, -8), (16, 8), (8, -16), (10, 10), (5, 15), (15, -5))),
}


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Threads:
    """Observed thread lines of a cloth.

    ``warp`` repeats across the page (ends), ``weft`` down it (picks); ``members`` are the
    lines that the cloth explains.
    """

    warp: Peak
    weft: Peak
    pattern: Literal["plain", "twill", "satin", "unknown"]
    members: tuple[Peak, ...]


def find_threads(peaks: tuple[Peak, ...], *, size: int) -> Threads | None:
    """Two thread lines near the axes with binding lines between them, or None.

    A table or a page of text also has lines on both axes; only cloth has the fractions of
    both at once that the binding of warp and weft makes.
    """
    across = _strongest(peaks, axis=0)
    down = _strongest(peaks, axis=1)
    if across is None or down is None:
        return None
    tolerance = 0.4 / size
    best: tuple[float, Literal["plain", "twill", "satin"]] | None = None
    for name, (n, orders) in _BINDINGS.items():
        energy = 0.0
        for a, b in orders:
            place = wrap((a * across.f + b * down.f) / n)
            energy += sum(p.amplitude**2 for p in peaks if grid_distance(p.f, place) < tolerance)
        if energy > 0 and (best is None or energy > best[0]):
            best = (energy, name)
    if best is None or best[0] < 0.02 * across.amplitude * down.amplitude:
        return None
    members = tuple(p for p in peaks if _is_member(p.f, across.f, down.f, tolerance))
    return Threads(warp=across, weft=down, pattern=best[1], members=members)


def measure_weave(threads: Threads, ppi: tuple[float, float]) -> Weave:
    """Thread counts of a cloth at a known sampling rate."""
    rate = np.array(ppi)
    ends = float(np.hypot(*(threads.warp.f * rate)))
    picks = float(np.hypot(*(threads.weft.f * rate)))
    sigma = float(max(threads.warp.sigma.max(), threads.weft.sigma.max())) * float(rate.max())
    lean = math.degrees(math.atan2(threads.warp.f[1] * rate[1], threads.warp.f[0] * rate[0]))
    return Weave(
        ends_per_cm=ends / 2.54,
        picks_per_cm=picks / 2.54,
        sigma_per_cm=sigma / 2.54,
        ends_per_inch=ends,
        picks_per_inch=picks,
        pattern=threads.pattern,
        skew_deg=-(lean + 90) % 180 - 90,
    )


def _strongest(peaks: tuple[Peak, ...], *, axis: int) -> Peak | None:
    limit = math.tan(math.radians(_AXIS_DEG))
    near = [p for p in peaks if abs(p.f[1 - axis]) <= limit * abs(p.f[axis])]
    return max(near, key=lambda p: p.amplitude, default=None)


def _is_member(
    f: NDArray[np.float64], warp: NDArray[np.float64], weft: NDArray[np.float64], tolerance: float
) -> bool:
    for n in (1, 2, 3, 4, 5, 8):
        orders = np.arange(-3 * n, 3 * n + 1) / n
        place = orders[:, None, None] * warp + orders[None, :, None] * weft
        if bool((grid_distance(f, place) < tolerance).any()):
            return True
    return False
