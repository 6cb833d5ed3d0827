"""Beats of a cloth with a pixel grid: which order of its threads has folded to a line, and how strongly.

A reduction samples the threads anew. Orders beyond half the new rate fold back; what is left of
them is the response of the kernel that averaged before sampling, the one that plans reckon with.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.kernels import Kernel, image_responses

_HIGHEST_ORDER = 3


@dataclass(frozen=True, slots=True, kw_only=True)
class WeaveAlias:
    """An order of the threads seen at a false frequency.

    ``order`` counts warp and weft frequencies, ``fold`` is (nx, ny) with true = observed + fold, in
    cycles per pixel of the reduced picture; ``off_cpp`` is how far the line lies from it, and
    ``transfer`` the share of the order's amplitude that the kernel left, nan if it is not known.
    """

    f_cpp: tuple[float, float]
    order: tuple[float, float]
    fold: tuple[int, int]
    off_cpp: float
    transfer: float


def thread_aliases(
    warp: NDArray[np.float64],
    weft: NDArray[np.float64],
    *,
    orders: tuple[tuple[float, float], ...] = (),
    reduction: tuple[float, float] = (1.0, 1.0),
    kernel: Kernel | None = None,
) -> tuple[WeaveAlias, ...]:
    """Where the threads' orders fold to.

    Parameters
    ----------
    warp, weft : ndarray, shape (2,)
        Thread frequencies ``(fx, fy)`` in cycles per pixel before the reduction.
    orders : tuple of (float, float)
        To look at, in threads; whole orders up to three in all if empty.
    reduction : (float, float)
        Pixels of the picture for one of the reduced picture, along x and y.
    kernel : str or None
        Averaging before sampling.

    Returns
    -------
    tuple of WeaveAlias
        Orders that fold, lowest first.
    """
    scale = np.asarray(reduction, float)
    out = []
    for a, b in orders or _whole_orders():
        true = (a * warp + b * weft) * scale
        fold = np.floor(true + 0.5).astype(int)
        if not fold.any():
            continue
        left = math.nan if kernel is None else kernel_transfer(kernel, a * warp + b * weft, reduction)
        place = true - fold
        out.append(
            WeaveAlias(
                f_cpp=(float(place[0]), float(place[1])),
                order=(a, b),
                fold=(int(fold[0]), int(fold[1])),
                off_cpp=0.0,
                transfer=left,
            )
        )
    return tuple(out)


def explain_alias(
    line_cpp: NDArray[np.float64], aliases: tuple[WeaveAlias, ...], *, tolerance: float
) -> WeaveAlias | None:
    """The lowest order that folds to a line within a tolerance in cycles per pixel, or None."""
    for alias in aliases:
        for sign in (1, -1):
            gap = np.asarray(line_cpp) - sign * np.array(alias.f_cpp)
            off = float(np.hypot(*(gap - np.rint(gap))))
            if off < tolerance:
                return WeaveAlias(
                    f_cpp=(float(line_cpp[0]), float(line_cpp[1])),
                    order=(sign * alias.order[0], sign * alias.order[1]),
                    fold=(sign * alias.fold[0], sign * alias.fold[1]),
                    off_cpp=off,
                    transfer=alias.transfer,
                )
    return None


def kernel_transfer(kernel: Kernel, f_cpp: NDArray[np.float64], reduction: tuple[float, float]) -> float:
    """Share of a line's amplitude that a reduction leaves at the line's own place.

    Parameters
    ----------
    kernel : str
        One of `moire.kernels.KERNELS`.
    f_cpp : ndarray, shape (2,)
        Cycles per pixel before the reduction, of any size.
    reduction : (float, float)
    """
    held = f_cpp - np.rint(f_cpp)
    shares = [image_responses(kernel, s)(np.array([f]), 0)[0] for f, s in zip(held, reduction, strict=True)]
    return float(abs(shares[0] * shares[1]))


def _whole_orders() -> list[tuple[float, float]]:
    reach = range(-_HIGHEST_ORDER, _HIGHEST_ORDER + 1)
    found = [
        (float(a), float(b))
        for a in reach
        for b in reach
        if (a > 0 or (a == 0 and b > 0)) and abs(a) + abs(b) <= _HIGHEST_ORDER
    ]
    return sorted(found, key=lambda o: (abs(o[0]) + abs(o[1]), -o[0]))
