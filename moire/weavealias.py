"""Beats of a cloth with a pixel grid: which order of its threads has folded to a line, and how strongly.

A reduction samples the threads anew. Orders beyond half the new rate fold back; what is left of
them is the transfer of the kernel that averaged before sampling.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Kernel = Literal["nearest", "area", "box", "bilinear", "hamming", "bicubic", "lanczos"]
_HIGHEST_ORDER = 3
_OUTPUTS = 64


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
    """Share of a line's amplitude that a reduction leaves.

    Parameters
    ----------
    kernel : str
        ``nearest`` and ``area`` as in OpenCV, the others as in Pillow's ``resize``, whose kernels
        grow with the reduction.
    f_cpp : ndarray, shape (2,)
        Cycles per pixel before the reduction.
    reduction : (float, float)
    """
    return math.prod(_transfer(kernel, float(f), s) for f, s in zip(f_cpp, reduction, strict=True))


def _whole_orders() -> list[tuple[float, float]]:
    reach = range(-_HIGHEST_ORDER, _HIGHEST_ORDER + 1)
    found = [
        (float(a), float(b))
        for a in reach
        for b in reach
        if (a > 0 or (a == 0 and b > 0)) and abs(a) + abs(b) <= _HIGHEST_ORDER
    ]
    return sorted(found, key=lambda o: (abs(o[0]) + abs(o[1]), -o[0]))


def _transfer(kernel: Kernel, f: float, reduction: float) -> float:
    """Mean response over outputs, whose places among the pixels differ where the reduction is not whole."""
    total = 0j
    for i in range(_OUTPUTS):
        centre = (i + 0.5) * reduction
        if kernel == "nearest":
            at: NDArray[np.floating] = np.array([math.floor(i * reduction) + 0.5])
            weight: NDArray[np.floating] = np.ones(1)
        elif kernel == "area":
            first, last = i * reduction, (i + 1) * reduction
            pixel = np.arange(math.floor(first), math.ceil(last))
            at, weight = pixel + 0.5, np.minimum(pixel + 1, last) - np.maximum(pixel, first)
        else:
            shape, support = _SHAPES[kernel]
            reach = support * max(reduction, 1.0)
            at = np.arange(int(centre - reach + 0.5), int(centre + reach + 0.5)) + 0.5
            weight = shape(np.asarray((at - centre) / max(reduction, 1.0), np.float64))
        total += (weight * np.exp(2j * np.pi * f * (at - centre))).sum() / weight.sum()
    return float(abs(total)) / _OUTPUTS


def _bicubic(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Keys, IEEE Trans. ASSP 29 (1981) 1153, with a = -1/2."""
    r = np.abs(x)
    inner = 1.5 * r**3 - 2.5 * r**2 + 1
    return np.where(r < 1, inner, -0.5 * r**3 + 2.5 * r**2 - 4 * r + 2)


def _hamming(x: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(np.sinc(x) * (0.54 + 0.46 * np.cos(np.pi * x)))


def _lanczos(x: NDArray[np.float64]) -> NDArray[np.float64]:
    """Duchon, J. Appl. Meteorol. 18 (1979) 1016, three lobes."""
    return np.asarray(np.sinc(x) * np.sinc(x / 3))


def _box(x: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray((x > -0.5) & (x <= 0.5), float)


def _bilinear(x: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(np.maximum(1 - np.abs(x), 0))


_SHAPES: dict[str, tuple[Callable[[NDArray[np.float64]], NDArray[np.float64]], float]] = {
    "box": (_box, 0.5),
    "bilinear": (_bilinear, 1.0),
    "bicubic": (_bicubic, 2.0),
    "hamming": (_hamming, 1.0),
    "lanczos": (_lanczos, 3.0),
}
