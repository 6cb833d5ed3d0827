"""Lines whose frequency drifts over the page: a bent leaf, a print photographed by hand.

Each tile's own spectral maxima are found first; a smooth map k(x, y), a quadratic polynomial of
the place, is then fitted to those that go together, one map for each line.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.spectrum import Spectrum, hann

_MAXIMA = 10
_EXCESS_NAT = 2.2
_INNER_BINS = 6.0
_CELL_CPP = 0.01
_REACH_CPP, _SHRINK, _FINAL_CPP = 0.045, 0.75, 0.006
_LINES_AT_MOST = 16
_LEAST_TILES, _LEAST_SHARE = 16, 0.12
# A line of that many tiles puts a good part of them into one seed's cell.
_SEED_SHARE = 0.25
_AROUND = 21


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
        1 where a half-overlapped tile carries it, else 0.
    """

    f: NDArray[np.float64]
    sigma: NDArray[np.float64]
    drift: float
    amplitude: float
    excess_nat: float
    weight: NDArray[np.float32]


def find_drifting_lines(spectrum: Spectrum, grid: tuple[int, int]) -> tuple[DriftingLine, ...]:
    """Lines that tiles agree on up to a smooth drift, those of most tiles first.

    Parameters
    ----------
    spectrum : Spectrum
        Of the whole page.
    grid : (int, int)
        Rows and columns of half-overlapped tiles that the lines' weights are given on.
    """
    if min(grid) < 3 or spectrum.tiles < _LEAST_TILES:
        return ()
    place, f, excess, amplitude = _tile_maxima(spectrum)
    # Each maximum stands for itself and its mirror image: a line may cross from one half plane to
    # the other.
    half = len(f)
    place, f = np.concatenate([place, place]), np.concatenate([f, -f])
    low, high = spectrum.starts.min(axis=0), spectrum.starts.max(axis=0)
    where = (2 * spectrum.starts - low - high) / np.maximum(high - low, 1)
    basis = _basis(where)[place]
    nearest = _nearest_tiles(spectrum, grid)
    least = max(_LEAST_TILES, int(_LEAST_SHARE * spectrum.tiles))
    found = []
    free = np.ones(2 * half, bool)
    for _ in range(_LINES_AT_MOST):
        seed = _densest(f[free], least)
        if seed is None:
            break
        members, fit = _follow(f, basis, place, free, seed)
        if len(members) < least:
            # The seed's own neighbourhood is spent: look elsewhere.
            free &= np.minimum(np.linalg.norm(f - seed, axis=1), np.linalg.norm(f + seed, axis=1)) > _CELL_CPP
            continue
        free[members] = free[(members + half) % (2 * half)] = False
        local = basis[members] @ fit
        length = np.hypot(local[:, 0], local[:, 1])
        rest = f[members] - local
        carries = np.zeros(spectrum.tiles, np.float32)
        carries[place[members]] = 1
        found.append(
            DriftingLine(
                f=np.median(local, axis=0),
                sigma=1.5 * rest.std(axis=0) / math.sqrt(len(members)),
                drift=float((np.quantile(length, 0.98) - np.quantile(length, 0.02)) / length.mean()),
                amplitude=float(np.median(amplitude[members % half])),
                excess_nat=float(np.median(excess[members % half])),
                weight=np.where(nearest < 0, np.float32(0), carries[nearest]),
            )
        )
    return tuple(sorted(found, key=lambda line: -float(line.weight.sum())))


def _nearest_tiles(spectrum: Spectrum, grid: tuple[int, int]) -> NDArray[np.int64]:
    """Index of the spectrum's tile nearest to each half-overlapped one, -1 where none is near."""
    from scipy.spatial import cKDTree

    size = spectrum.size
    at = np.stack(np.meshgrid(*(np.arange(n) * (size // 2) for n in grid), indexing="ij"), axis=-1)
    gap, nearest = cKDTree(spectrum.starts).query(at, p=np.inf)
    return np.where(gap <= size, nearest, -1)


def _tile_maxima(
    spectrum: Spectrum,
) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Tile index, frequency, excess and amplitude of the strongest local maxima of every tile."""
    import cv2

    size, around = spectrum.size, _AROUND // 2
    # The right half of each plane with what lies around it: columns mirror, rows wrap.
    left = np.roll(spectrum.log_power[:, ::-1, around:0:-1], 1, axis=1)
    right = np.roll(spectrum.log_power[:, ::-1, -2 : -2 - around : -1], 1, axis=1)
    plane = np.concatenate([left, spectrum.log_power, right], axis=2)
    plane = np.concatenate([plane[:, -around:], plane, plane[:, :around]], axis=1)
    # One tall picture: the margins keep tiles apart.
    tall = plane.reshape(-1, plane.shape[2])
    excess = tall - cv2.blur(tall, (_AROUND, _AROUND))
    high = (tall >= cv2.dilate(tall, np.ones((3, 3), np.uint8))) & (excess > _EXCESS_NAT)
    inner = (slice(None), slice(around, around + size), slice(around, around + size // 2 + 1))
    ky, kx = np.meshgrid(np.fft.fftfreq(size, 1 / size), np.arange(size // 2 + 1), indexing="ij")
    inside = ((kx > 0) | (ky > 0)) & (np.hypot(kx, ky) >= _INNER_BINS)
    tile, v, u = np.nonzero(high.reshape(plane.shape)[inner] & inside)
    strength = excess.reshape(plane.shape)[inner][tile, v, u]
    order = np.lexsort((-strength, tile))
    rank = np.arange(len(tile)) - np.searchsorted(tile, tile)
    kept = order[rank < _MAXIMA]
    tile, v, u, strength = tile[kept], v[kept], u[kept], strength[kept]
    row, column = v + around, u + around
    middle = plane[tile, row, column]
    across = _vertex(plane[tile, row, column - 1], middle, plane[tile, row, column + 1])
    down = _vertex(plane[tile, row - 1, column], middle, plane[tile, row + 1, column])
    f = np.stack([(kx[v, u] + across) / size, (ky[v, u] + down) / size], axis=1)
    # Tapers of unit energy: a line of amplitude a has a peak of a sum(w) / 2.
    taper = hann(size).astype(np.float64)
    amplitude = 2 * np.exp(middle / 2) * (taper**2).sum() / taper.sum() ** 2
    return tile, f, strength.astype(np.float64), amplitude


def _vertex(
    left: NDArray[np.float32], middle: NDArray[np.float32], right: NDArray[np.float32]
) -> NDArray[np.float64]:
    """Offset of a parabola's top through three log powers, in bins (good to 0.02 bin with Hann)."""
    curve = np.minimum(left - 2 * middle + right, -1e-6)
    return np.clip(0.5 * (left - right) / curve, -0.5, 0.5).astype(np.float64)


def _densest(f: NDArray[np.float64], least: int) -> NDArray[np.float64] | None:
    """Centre of the cell of the frequency plane, with its neighbours, that most maxima fall in."""
    from scipy import ndimage

    if len(f) < _LEAST_TILES:
        return None
    side = round(1 / _CELL_CPP)
    votes, xs, ys = np.histogram2d(f[:, 0], f[:, 1], bins=side, range=[[-0.5, 0.5], [-0.5, 0.5]])
    votes = ndimage.uniform_filter(votes, 3, mode="wrap")
    i, j = np.unravel_index(int(np.argmax(votes)), votes.shape)
    if votes[i, j] * 9 < max(_LEAST_TILES / 2, _SEED_SHARE * least):
        return None
    return np.array([(xs[i] + xs[i + 1]) / 2, (ys[j] + ys[j + 1]) / 2])


def _follow(
    f: NDArray[np.float64],
    basis: NDArray[np.float64],
    place: NDArray[np.int64],
    free: NDArray[np.bool_],
    seed: NDArray[np.float64],
) -> tuple[NDArray[np.int64], NDArray[np.float64]]:
    """Members of one line, one for each tile, and their map, tightened step by step."""
    fit = np.zeros((6, 2))
    fit[0] = seed
    reach = _REACH_CPP
    members = np.empty(0, int)
    # No map strays further from its seed than a few times the first reach.
    about = np.flatnonzero(free & (np.abs(f - seed).max(axis=1) < 3 * _REACH_CPP))
    while reach > _FINAL_CPP:
        gap = np.linalg.norm(f[about] - basis[about] @ fit, axis=1)
        inside = gap < reach
        near = about[inside][np.argsort(gap[inside])]
        _, first = np.unique(place[near], return_index=True)
        members = near[first]
        if len(members) < _LEAST_TILES:
            break
        # Few tiles cannot hold a curved map.
        terms = 6 if len(members) > 40 else 3
        fit = np.zeros((6, 2))
        fit[:terms] = np.linalg.lstsq(basis[members][:, :terms], f[members], rcond=None)[0]
        reach *= _SHRINK
    return members, fit


def _basis(where: NDArray[np.float64]) -> NDArray[np.float64]:
    y, x = where[:, 0], where[:, 1]
    return np.stack([np.ones_like(x), x, y, x * x, x * y, y * y], axis=1)
