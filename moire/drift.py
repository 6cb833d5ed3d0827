"""Lines whose frequency drifts over the page: a bent leaf, a print photographed by hand.

Each tile's own spectral maxima are found first; a smooth map k(x, y), a quadratic polynomial of
the place, is then fitted to those that go together, one map for each line.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.spectrum import hann

SIZE = 128
_TILES_AT_MOST = 500
_MAXIMA = 10
_EXCESS_NAT = 2.2
_INNER_BINS = 6.0
_CELL_CPP = 0.01
_REACH_CPP, _SHRINK, _FINAL_CPP = 0.045, 0.75, 0.006
_LINES_AT_MOST = 16
_LEAST_TILES, _LEAST_SHARE = 16, 0.12
_FLOOR = 0.03


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class DriftingLine:
    """One line followed over the page.

    Attributes
    ----------
    f, sigma : ndarray, shape (2,)
        ``(fx, fy)`` at the middle of the tiles that carry it, cycles per pixel, and its
        standard uncertainty.
    drift : float
        Largest less smallest local ``|f|`` over the tiles that carry it, over their mean.
    amplitude, excess_nat : float
        Median over those tiles: code values, ln power above the surroundings.
    weight : ndarray, shape (tile rows, tile columns)
        1 where a half-overlapped tile of `SIZE` carries it, else 0.
    """

    f: NDArray[np.float64]
    sigma: NDArray[np.float64]
    drift: float
    amplitude: float
    excess_nat: float
    weight: NDArray[np.float32]


def find_drifting_lines(image: NDArray[np.float32]) -> tuple[DriftingLine, ...]:
    """Lines that tiles agree on up to a smooth drift, those of most tiles first.

    Parameters
    ----------
    image : ndarray, shape (rows, columns)
        Code values on a 0..255 scale.
    """
    hop = SIZE // 2
    grid = (image.shape[0] // hop - 1, image.shape[1] // hop - 1)
    if min(grid) < 3:
        return ()
    stride = max(1, math.isqrt(grid[0] * grid[1] // _TILES_AT_MOST))
    tiles = np.array([(y, x) for y in range(0, grid[0], stride) for x in range(0, grid[1], stride)])
    place, f, excess, amplitude = _tile_maxima(image, tiles, hop)
    # Each maximum stands for itself and its mirror image: a line may cross from one half plane to
    # the other.
    half = len(f)
    place, f = np.concatenate([place, place]), np.concatenate([f, -f])
    found: list[DriftingLine] = []
    free = np.ones(2 * half, bool)
    middle, span = (tiles.mean(axis=0), np.maximum(np.ptp(tiles, axis=0), 1) / 2)
    where = (tiles[place] - middle) / span
    for _ in range(_LINES_AT_MOST):
        seed = _densest(f[free])
        if seed is None:
            break
        members, fit = _follow(f, where, place, free, seed)
        least = max(_LEAST_TILES, int(_LEAST_SHARE * len(tiles)))
        if len(members) < least:
            # The seed's own neighbourhood is spent: look elsewhere.
            free &= np.minimum(np.linalg.norm(f - seed, axis=1), np.linalg.norm(f + seed, axis=1)) > _CELL_CPP
            continue
        free[members] = free[(members + half) % (2 * half)] = False
        local = _basis(where[members]) @ fit
        size = np.hypot(local[:, 0], local[:, 1])
        rest = f[members] - local
        weight = np.zeros(grid, np.float32)
        for y, x in tiles[place[members]]:
            weight[
                max(0, y - stride // 2) : y + stride // 2 + 1, max(0, x - stride // 2) : x + stride // 2 + 1
            ] = 1
        found.append(
            DriftingLine(
                f=np.median(local, axis=0),
                sigma=1.5 * rest.std(axis=0) / math.sqrt(len(members)),
                drift=float((np.quantile(size, 0.98) - np.quantile(size, 0.02)) / size.mean()),
                amplitude=float(np.median(amplitude[members % half])),
                excess_nat=float(np.median(excess[members % half])),
                weight=_spread(tiles[place[members]], grid, stride),
            )
        )
    return tuple(sorted(found, key=lambda line: -float(line.weight.sum())))


def _spread(tiles: NDArray[np.int64], grid: tuple[int, int], stride: int) -> NDArray[np.float32]:
    """1 at the given tiles and at those left out around them."""
    weight = np.zeros(grid, np.float32)
    half = stride // 2
    for y, x in tiles:
        weight[max(0, y - half) : y + half + 1, max(0, x - half) : x + half + 1] = 1
    return weight


def _tile_maxima(
    image: NDArray[np.float32], tiles: NDArray[np.int64], hop: int
) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Tile index, frequency, excess and amplitude of the strongest local maxima of every tile."""
    import cv2
    from scipy import fft

    window = np.outer(hann(SIZE), hann(SIZE))
    energy = float(np.sqrt((window**2).sum()))
    ky, kx = np.meshgrid(np.fft.fftfreq(SIZE, 1 / SIZE), np.fft.fftfreq(SIZE, 1 / SIZE), indexing="ij")
    inside = ((kx > 0) | ((kx == 0) & (ky > 0))) & (np.hypot(kx, ky) >= _INNER_BINS)
    index, places, excesses, amplitudes = [], [], [], []
    for i, (y, x) in enumerate(tiles):
        tile = image[y * hop : y * hop + SIZE, x * hop : x * hop + SIZE]
        tile = (tile - float((tile * window).sum() / window.sum())) * window
        power = np.abs(fft.fft2(tile)) ** 2 / energy**2
        plane = np.log(power + _FLOOR).astype(np.float32)
        wrapped = np.pad(plane, 11, mode="wrap")
        excess = plane - cv2.blur(wrapped, (21, 21))[11:-11, 11:-11]
        peak = (plane >= cv2.dilate(wrapped, np.ones((3, 3), np.uint8))[11:-11, 11:-11]) & inside
        ys, xs = np.nonzero(peak & (excess > _EXCESS_NAT))
        best = np.argsort(-excess[ys, xs])[:_MAXIMA]
        for v, u in zip(ys[best], xs[best], strict=True):
            across = _vertex(plane[v, u - 1], plane[v, u], plane[v, (u + 1) % SIZE])
            down = _vertex(plane[v - 1, u], plane[v, u], plane[(v + 1) % SIZE, u])
            index.append(i)
            places.append(((kx[v, u] + across) / SIZE, (ky[v, u] + down) / SIZE))
            excesses.append(excess[v, u])
            amplitudes.append(2 * math.sqrt(power[v, u]) * energy / window.sum())
    f = np.array(places).reshape(-1, 2)
    return np.array(index, int), f, np.array(excesses), np.array(amplitudes)


def _vertex(left: float, middle: float, right: float) -> float:
    """Offset of a parabola's top through three log powers, in bins (good to 0.02 bin with Hann)."""
    curve = left - 2 * middle + right
    return float(np.clip(0.5 * (left - right) / curve, -0.5, 0.5)) if curve < 0 else 0.0


def _densest(f: NDArray[np.float64]) -> NDArray[np.float64] | None:
    """Centre of the cell of the frequency plane, with its neighbours, that most maxima fall in."""
    from scipy import ndimage

    if len(f) < _LEAST_TILES:
        return None
    side = round(1 / _CELL_CPP)
    votes, xs, ys = np.histogram2d(f[:, 0], f[:, 1], bins=side, range=[[-0.5, 0.5], [-0.5, 0.5]])
    votes = ndimage.uniform_filter(votes, 3, mode="wrap")
    i, j = np.unravel_index(int(np.argmax(votes)), votes.shape)
    if votes[i, j] * 9 < _LEAST_TILES / 2:
        return None
    return np.array([(xs[i] + xs[i + 1]) / 2, (ys[j] + ys[j + 1]) / 2])


def _follow(
    f: NDArray[np.float64],
    where: NDArray[np.float64],
    place: NDArray[np.int64],
    free: NDArray[np.bool_],
    seed: NDArray[np.float64],
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Members of one line, one for each tile, and their map, tightened step by step."""
    fit = np.zeros((6, 2))
    fit[0] = seed
    reach = _REACH_CPP
    members = np.empty(0, int)
    while reach > _FINAL_CPP:
        gap = np.linalg.norm(f - _basis(where) @ fit, axis=1)
        near = np.flatnonzero(free & (gap < reach))
        near = near[np.argsort(gap[near])]
        _, first = np.unique(place[near], return_index=True)
        members = near[first]
        if len(members) < _LEAST_TILES:
            break
        # Few tiles cannot hold a curved map.
        terms = 6 if len(members) > 40 else 3
        fit = np.zeros((6, 2))
        fit[:terms] = np.linalg.lstsq(_basis(where[members])[:, :terms], f[members], rcond=None)[0]
        reach *= _SHRINK
    return members, fit


def _basis(where: NDArray[np.float64]) -> NDArray[np.float64]:
    y, x = where[:, 0], where[:, 1]
    return np.stack([np.ones_like(x), x, y, x * x, x * y, y * y], axis=1)
