"""A large cloth counted swatch by swatch, so that memory does not grow with it."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from moire.threads import PRESENT, ThreadCount, count_threads

_WHOLE_PX, _SWATCH_PX = 3072, 2048
_PLACES = 320


def count_cloth(
    image: NDArray[np.float32], frame: NDArray[np.float64], orders: NDArray[np.float64]
) -> ThreadCount | None:
    """Count two sets of threads over a picture of any size.

    Parameters
    ----------
    image, frame, orders
        As for `moire.threads.count_threads`.

    Returns
    -------
    ThreadCount or None
        None where no swatch shows six threads both ways.
    """
    if np.linalg.matrix_rank(orders) < 2:
        return None
    if max(image.shape) <= _WHOLE_PX:
        return count_threads(image, frame, orders)
    down, across = (max(1, round(side / _SWATCH_PX)) for side in image.shape)
    height, width = image.shape[0] // down, image.shape[1] // across
    counts: list[list[ThreadCount | None]] = []
    for i in range(down):
        strip = image[i * height : (i + 1) * height]
        row = (count_threads(strip[:, j * width : (j + 1) * width], frame, orders) for j in range(across))
        thin = math.ceil(max(height, width) / (_PLACES / max(down, across)))
        counts.append([None if c is None else _thinned(c, thin) for c in row])
    return _join(counts, width, height)


def _thinned(count: ThreadCount, pixels: int) -> ThreadCount:
    """The same count with its maps at places about `pixels` apart."""
    sx, sy = (max(1, round(pixels / float(at[1] - at[0]))) for at in (count.x, count.y))
    seen = np.s_[sy // 2 :: sy, sx // 2 :: sx]
    return replace(
        count,
        x=count.x[seen[1]],
        y=count.y[seen[0]],
        strength=count.strength[seen].copy(),
        present=count.present[seen].copy(),
        warp_map=count.warp_map[seen].copy(),
        weft_map=count.weft_map[seen].copy(),
    )


def _join(counts: list[list[ThreadCount | None]], width: int, height: int) -> ThreadCount | None:
    """One count of all swatches that show the cloth, the rest blank."""
    seen = [c for row in counts for c in row if c is not None]
    if not seen:
        return None
    # A swatch of bare platen finds something too, far fainter than the cloth.
    level = max(float(np.quantile(c.strength, 0.9)) for c in seen)
    counts = [
        [c if c is not None and float(np.quantile(c.strength, 0.9)) > PRESENT * level else None for c in row]
        for row in counts
    ]
    kept = [(i, j, c) for i, row in enumerate(counts) for j, c in enumerate(row) if c is not None]
    like = kept[0][2]
    blank = np.zeros(like.strength.shape, np.float32)
    strength = np.block([[blank if c is None else c.strength for c in row] for row in counts])
    share = np.array([c.present.mean() for _, _, c in kept])
    # Swatches above each other hold the same ends: they do not count them anew.
    apart = (len({j for _, j, _ in kept}), len({i for i, _, _ in kept}))
    sigma = [
        math.sqrt(float(np.average([c.sigma[k] ** 2 for _, _, c in kept], weights=share)) / apart[k])
        for k in (0, 1)
    ]
    jitter = [float(np.average([c.jitter[k] for _, _, c in kept], weights=share)) for k in (0, 1)]
    weft = np.average([c.weft for _, _, c in kept], axis=0, weights=share)
    return ThreadCount(
        warp=np.average([c.warp for _, _, c in kept], axis=0, weights=share),
        weft=weft,
        sigma=(sigma[0], sigma[1]),
        jitter=(jitter[0], jitter[1]),
        x=np.concatenate([like.x + j * width for j in range(len(counts[0]))]),
        y=np.concatenate([like.y + i * height for i in range(len(counts))]),
        strength=strength,
        present=strength > PRESENT * float(np.quantile(strength[strength > 0], 0.9)),
        warp_map=_joined([[None if c is None else c.warp_map for c in row] for row in counts], like.warp_map),
        weft_map=_joined([[None if c is None else c.weft_map for c in row] for row in counts], like.weft_map),
        bow=_bow(kept, width, len(counts[0])),
    )


def _joined(maps: list[list[NDArray[np.float64] | None]], like: NDArray[np.float64]) -> NDArray[np.float64]:
    blank = np.zeros_like(like)
    rows = [np.concatenate([blank if m is None else m for m in row], axis=1) for row in maps]
    return np.concatenate(rows)


def _bow(kept: list[tuple[int, int, ThreadCount]], width: int, across: int) -> float:
    """Depth of the weft's arc over the width: those of the swatches, and how their slopes change."""
    own = float(np.mean([c.bow for _, _, c in kept])) / across
    column = np.array([j for _, j, _ in kept], float)
    if len(set(column.tolist())) < 2:
        return own
    slope = np.array([c.weft[0] / c.weft[1] for _, _, c in kept])
    # An arc of depth b over a width w has slopes that change by 8 b / w over it.
    turn = float(np.polyfit(column, slope, 1)[0])
    return turn * across / 8
