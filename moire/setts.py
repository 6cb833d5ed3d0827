"""Setts over a cloth: the local map, its range, and counts at five places."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from moire.threads import ThreadCount

_PLACES = ((0.25, 0.25), (0.25, 0.75), (0.5, 0.5), (0.75, 0.25), (0.75, 0.75))
_REACH = 0.12
_TAIL = 0.05
_CELL_THREADS, _CELLS_AT_MOST = 10.0, 16

Rows = tuple[tuple[float | None, ...], ...]


def sett_map(count: ThreadCount, reduction: int, ppi: tuple[float, float]) -> NDArray[np.float64]:
    """Ends and picks per cm around each place of the count's grid.

    Parameters
    ----------
    count : ThreadCount
    reduction : int
        By how many pixels the counted picture was reduced.
    ppi : (float, float)
        Of the scan.

    Returns
    -------
    ndarray, shape (rows, columns, 2)
        nan where the cloth's lines are not present.
    """
    rate = np.array(ppi) / reduction / 2.54
    both = [np.hypot(f[..., 0] * rate[0], f[..., 1] * rate[1]) for f in (count.warp_map, count.weft_map)]
    maps = np.stack(both, axis=-1)
    maps[~count.present] = np.nan
    return maps


def sett_range(maps: NDArray[np.float64]) -> tuple[tuple[float, float], tuple[float, float]]:
    """Lowest and highest (ends, picks) per cm, leaving out a twentieth of the cloth at either end."""
    low, high = np.nanquantile(maps.reshape(-1, 2), [_TAIL, 1 - _TAIL], axis=0)
    return (float(low[0]), float(low[1])), (float(high[0]), float(high[1]))


def sett_places(maps: NDArray[np.float64]) -> tuple[tuple[float, float], ...]:
    """Ends and picks per cm at five places away from the edges; those off the cloth are left out."""
    rows, columns = maps.shape[:2]
    out = []
    for y, x in _PLACES:
        top, bottom = (int(rows * (y + side * _REACH)) for side in (-1, 1))
        left, right = (int(columns * (x + side * _REACH)) for side in (-1, 1))
        here = maps[top : bottom + 1, left : right + 1].reshape(-1, 2)
        here = here[np.isfinite(here[:, 0])]
        if len(here):
            ends, picks = here.mean(axis=0)
            out.append((float(ends), float(picks)))
    return tuple(out)


def coarse_map(maps: NDArray[np.float64], count: ThreadCount) -> tuple[Rows, Rows]:
    """Ends and picks per cm in cells of some ten threads, rows from the top; None off the cloth."""
    rows, columns = maps.shape[:2]
    width, height = np.ptp(count.x), np.ptp(count.y)
    across = int(np.clip(width * np.hypot(*count.warp) / _CELL_THREADS, 1, min(_CELLS_AT_MOST, columns)))
    down = int(np.clip(height * np.hypot(*count.weft) / _CELL_THREADS, 1, min(_CELLS_AT_MOST, rows)))
    out: tuple[list[tuple[float | None, ...]], list[tuple[float | None, ...]]] = ([], [])
    for band in np.array_split(maps, down, axis=0):
        cells = np.array_split(band, across, axis=1)
        for i in (0, 1):
            seen = [c[..., i][np.isfinite(c[..., i])] for c in cells]
            enough = [len(s) > 0.3 * c[..., i].size for s, c in zip(seen, cells, strict=True)]
            out[i].append(
                tuple(round(float(s.mean()), 3) if ok else None for s, ok in zip(seen, enough, strict=True))
            )
    return tuple(out[0]), tuple(out[1])
