"""Overlapping tiles: large pages in bounded memory, the same pixels as the whole."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True)
class Tile:
    """A window with its margin (``outer``) and the part that is kept (``inner``), as (x, y, w, h)."""

    outer: tuple[int, int, int, int]
    inner: tuple[int, int, int, int]


def split(width: int, height: int, *, size: int, margin: int) -> Iterator[Tile]:
    """Tiles that cover a picture; inner parts abut, outer parts reach `margin` further."""
    columns, rows = max(1, round(width / size)), max(1, round(height / size))
    x_edges = np.rint(np.linspace(0, width, columns + 1)).astype(int)
    y_edges = np.rint(np.linspace(0, height, rows + 1)).astype(int)
    for y0, y1 in pairwise(y_edges):
        for x0, x1 in pairwise(x_edges):
            left, top = max(0, x0 - margin), max(0, y0 - margin)
            right, bottom = min(width, x1 + margin), min(height, y1 + margin)
            yield Tile(
                outer=(int(left), int(top), int(right - left), int(bottom - top)),
                inner=(int(x0), int(y0), int(x1 - x0), int(y1 - y0)),
            )


def map_tiles(
    picture: NDArray[Any],
    work: Callable[[NDArray[Any]], NDArray[Any]],
    *,
    size: int,
    margin: int,
    progress: Callable[[float], None] = lambda _: None,
) -> NDArray[np.float32]:
    """Apply `work(tile)` to overlapping tiles and join the inner parts.

    Parameters
    ----------
    picture : ndarray, shape (rows, columns, channels)
    work : callable
        Gets a tile; returns an array of its shape.
    size, margin : int
        Side of the inner parts and reach beyond them, in pixels.
    progress : callable
        Told the share done, 0..1.
    """
    height, width = picture.shape[:2]
    out = np.empty(picture.shape, np.float32)
    tiles = list(split(width, height, size=size, margin=margin))
    for done, tile in enumerate(tiles, 1):
        x, y, w, h = tile.outer
        result = work(picture[y : y + h, x : x + w])
        ix, iy, iw, ih = tile.inner
        out[iy : iy + ih, ix : ix + iw] = result[iy - y : iy - y + ih, ix - x : ix - x + iw]
        progress(done / len(tiles))
    return out
