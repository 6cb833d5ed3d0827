"""Threads counted by phase: a weave's lines demodulated together and followed from edge to edge.

The phase of a line gains one turn for each thread, so its gain from edge to edge counts threads,
however unevenly they lie. The middle of many such counts is kept (over rows for one direction,
columns for the other), and the counts of all lines must agree on two sets of threads.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from moire.bending import bend_turns, fit_bend
from moire.demodulation import (
    RestingLines,
    blur,
    bring_to_rest,
    departures_along,
    local_departures,
)
from moire.straightening import straighten

PRESENT = 0.3
_LEAST_PERIODS = 6.0
_BLOCKS = 8
_MAP_PERIODS = 6.0
_EDGE_THREADS = 5.0
_PHASE_FLOOR = 0.01
_CHOICES, _REACH = 41, 0.35
_STEADY_TURNS = 0.2


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ThreadCount:
    """Two sets of threads as counted.

    Attributes
    ----------
    warp, weft : ndarray, shape (2,)
        Mean thread frequencies ``(fx, fy)``, cycles per pixel.
    sigma : (float, float)
        Standard uncertainty of each one's length, cycles per pixel.
    jitter : (float, float)
        Apparent standard deviation of the gaps between threads, as a share of a gap.
    x, y : ndarray
        A grid of places over the picture, in pixels.
    strength : ndarray, shape (len(y), len(x))
        How strong the lines are around those places, code values.
    present : ndarray of bool, shape (len(y), len(x))
        Where the lines are.
    warp_map, weft_map : ndarray, shape (len(y), len(x), 2)
        Thread frequencies around those places, over some fifteen threads.
    bow : float
        Depth of the weft's arc as a share of the width; positive: middle lower.
    """

    warp: NDArray[np.float64]
    weft: NDArray[np.float64]
    sigma: tuple[float, float]
    jitter: tuple[float, float]
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    strength: NDArray[np.float32]
    present: NDArray[np.bool_]
    warp_map: NDArray[np.float64]
    weft_map: NDArray[np.float64]
    bow: float


def count_threads(
    image: NDArray[np.float32], frame: NDArray[np.float64], orders: NDArray[np.float64]
) -> ThreadCount | None:
    """Count two sets of threads by the phases of given lines.

    Parameters
    ----------
    image : ndarray, shape (rows, columns)
        Lightness or code values.
    frame : ndarray, shape (2, 2)
        First estimates of warp and weft frequency as columns, cycles per pixel.
    orders : ndarray, shape (n, 2)
        Lines to count by, as orders of warp and weft; they must span both.

    Returns
    -------
    ThreadCount or None
        None where the lines do not run over at least six threads both ways.
    """
    shape = (image.shape[1], image.shape[0])
    fields = bring_to_rest(image, frame, orders)
    drift = fit_bend(fields, shape)
    turns = _follow(fields, bend_turns(drift, fields, shape))
    # Seen with its threads straightened, the cloth's lines are sharp and do not slip.
    straight, known, place = straighten(image, frame, turns)
    again = bring_to_rest(straight, frame, orders)
    rest = bend_turns(fit_bend(again, shape), again, shape)
    totals = [_total_along(again, rest, known, place, axis=axis) for axis in (0, 1)]
    if totals[0] is None or totals[1] is None:
        return None
    moved = np.stack([t[0] for t in totals if t], axis=1)
    sigma = np.stack([t[1] for t in totals if t], axis=1)
    present = _present(_strength(fields))
    jitter = (_jitter(fields, present, 0), _jitter(fields, present, 1))
    # Where the sett drifts far the lines are seen only once they are straightened.
    strength = _strength(again)
    near = fields.frame.T + _slopes(turns, fields) + local_departures(again, _MAP_PERIODS, _MAP_PERIODS)
    threads = fields.frame.T + moved
    lengths = []
    for i in (0, 1):
        length = float(np.hypot(*threads[i]))
        noise = float(np.hypot(*(sigma[i] * threads[i] / length)))
        # A few threads at the edges are not seen whole; they may lie anyhow.
        across = abs(threads[i]) @ np.array(shape)
        lengths.append(math.hypot(noise, length * jitter[i] * math.sqrt(_EDGE_THREADS) / across))
    return ThreadCount(
        warp=threads[0],
        weft=threads[1],
        sigma=(lengths[0], lengths[1]),
        jitter=jitter,
        x=fields.x,
        y=fields.y,
        strength=strength,
        present=_present(strength),
        warp_map=near[..., 0, :],
        weft_map=near[..., 1, :],
        bow=float(drift[1, 2] / (np.hypot(*threads[1]) * image.shape[1])),
    )


def gap_jitter(
    image: NDArray[np.float32], frame: NDArray[np.float64], orders: NDArray[np.float64]
) -> tuple[float, float]:
    """Apparent standard deviation of the gaps of warp and weft, as a share of a gap.

    Parameters
    ----------
    image, frame, orders
        As for `count_threads`.
    """
    fields = bring_to_rest(image, frame, orders)
    present = _present(_strength(fields))
    return _jitter(fields, present, 0), _jitter(fields, present, 1)


def _slopes(turns: NDArray[np.float64], fields: RestingLines) -> NDArray[np.float64]:
    """Frequencies that turns of warp and weft add around each place, shape (rows, columns, 2, 2)."""
    import cv2

    reach = [_MAP_PERIODS * fields.period / step for step in fields.step]
    out = np.empty((*turns.shape[1:], 2, 2))
    for thread, plane in enumerate(turns):
        for axis in (0, 1):
            slope = np.gradient(plane, fields.step[axis], axis=1 - axis).astype(np.float32)
            out[..., thread, axis] = cv2.GaussianBlur(slope, (0, 0), reach[0], sigmaY=reach[1])
    return out


def _rows(planes: NDArray[Any], axis: int) -> list[NDArray[Any]]:
    """Blocks of rows (of columns for axis 1), each block running along the last axis."""
    return np.array_split(planes if axis == 0 else planes.transpose(0, 2, 1), _BLOCKS, axis=1)


def _advance(block: NDArray[np.complex64]) -> tuple[NDArray[np.complex64], int, int]:
    """Products of neighbours summed over a block's rows, and the longest run where lines are.

    They add up whatever the other set of threads does there, so a block follows the threads that
    cross it all along.
    """
    product = (block[:, :, 1:] * np.conj(block[:, :, :-1])).sum(axis=1)
    strength = np.abs(product).sum(axis=0)
    return product, *_longest(strength > PRESENT**2 * float(np.quantile(strength, 0.9)))


def _at_rest(fields: RestingLines, drift: NDArray[np.float64]) -> NDArray[np.complex64]:
    turns = np.einsum("ni,iyx->nyx", fields.orders, drift)
    return np.asarray(fields.values * np.exp(-2j * np.pi * turns), np.complex64)


def _follow(fields: RestingLines, drift: NDArray[np.float64]) -> NDArray[np.float64]:
    """Departures of both sets in turns over the grid, shape (2, rows, columns), as they lie."""
    import cv2

    still = _at_rest(fields, drift)
    out = drift.copy()
    for axis in (0, 1):
        paths = []
        for block in _rows(still, axis):
            product, a, b = _advance(block)
            path = np.zeros(block.shape[2], np.float32)
            if b > a:
                path[a + 1 : b + 1] = np.cumsum(_vote(product[:, a:b], fields, axis))
                path[b + 1 :] = path[b]
            paths.append(path - path.mean())
        rows = out.shape[1 + axis]
        smooth = cv2.resize(np.array(paths), (len(paths[0]), rows), interpolation=cv2.INTER_LINEAR)
        out[axis] += smooth if axis == 0 else smooth.T
    return out


def _total_along(
    fields: RestingLines,
    drift: NDArray[np.float64],
    known: NDArray[np.float64],
    place: NDArray[np.float64],
    *,
    axis: int,
) -> tuple[NDArray[np.float64], NDArray[np.float64]] | None:
    """Mean departure of warp and weft along one axis, per pixel, and its standard uncertainty.

    Parameters
    ----------
    fields : RestingLines
    drift, known : ndarray, shape (2, rows, columns)
        Turns of warp and weft still in the fields, and already taken out of them.
    place : ndarray, shape (2, rows, columns)
        Where the grid's points lie in the picture, pixels.
    axis : int
    """
    blocks = [_rows(a, axis) for a in (_at_rest(fields, drift), drift + known, place)]
    gains, taken, lengths = [], [], []
    for block, turns, at in zip(*blocks, strict=True):
        product, a, b = _advance(block)
        if (b - a) * fields.step[axis] < _LEAST_PERIODS * fields.period:
            continue
        gains.append(np.angle(product[:, a:b]).sum(axis=1) / (2 * np.pi))
        taken.append((turns[:, :, b] - turns[:, :, a]).mean(axis=1))
        lengths.append(float((at[axis, :, b] - at[axis, :, a]).mean()))
    if not gains:
        return None
    trust = fields.shares * _steadiness(np.array(gains))
    moved = [
        (_agreed(g, fields.orders, trust) + t) / n for g, t, n in zip(gains, taken, lengths, strict=True)
    ]
    table = np.column_stack([np.array(moved), lengths])
    weight = table[:, 2] ** 2
    middle = np.array([_weighted_median(table[:, i], weight) for i in (0, 1)])
    apart = np.abs(table[:, :2] - middle)
    spread = np.maximum(1.4826 * np.median(apart, axis=0), np.sqrt((apart**2).mean(axis=0)) / 2)
    if len(table) < 4:
        spread = np.maximum(spread, 0.2 / table[:, 2].max())
    return middle, np.hypot(spread / math.sqrt(len(table)), _PHASE_FLOOR / table[:, 2].max())


def _steadiness(gains: NDArray[np.float64]) -> NDArray[np.float64]:
    """Trust in each line by how alike its turns are in all blocks, shape (blocks, lines): slips are not."""
    spread = 1.4826 * np.median(np.abs(gains - np.median(gains, axis=0)), axis=0)
    return np.asarray(1 / (1 + (spread / _STEADY_TURNS) ** 2))


def _agreed(
    turns: NDArray[np.float64], orders: NDArray[np.float64], trust: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Turns of warp and weft on which most lines agree; a line that slipped by one is left alone."""
    weight: NDArray[np.float64] = np.sqrt(trust)
    solution: NDArray[np.floating] = np.zeros(2)
    for _ in range(12):
        solution = np.linalg.lstsq(orders * weight[:, None], turns * weight, rcond=None)[0]
        off = np.abs(turns - orders @ solution)
        weight = np.sqrt(trust / np.maximum(off, 0.02))
    return np.asarray(solution)


def _vote(product: NDArray[np.complex64], fields: RestingLines, axis: int) -> NDArray[np.float64]:
    """Turns of one set at each step that suit all lines best.

    A low order cannot slip by a whole turn, a high one is sharp.
    """
    step = fields.step[axis]
    own = np.linspace(-1, 1, _CHOICES) * _REACH * step * float(np.hypot(*fields.frame[:, axis]))
    cross = np.linspace(-1, 1, 7) * _REACH / 5 * step * float(np.hypot(*fields.frame[:, 1 - axis]))
    grid = np.stack(np.meshgrid(own, cross, indexing="ij"), axis=-1)[..., :: 1 if axis == 0 else -1]
    weight = 1 / np.sqrt(np.maximum(np.median(np.abs(product), axis=1), 1e-12))
    phase = np.exp(-2j * np.pi * np.einsum("ni,abi->nab", fields.orders, grid))
    worth = np.einsum("ns,nab->sab", product * weight[:, None], phase).real
    flat = worth.reshape(len(worth), -1)
    row, column = np.unravel_index(flat.argmax(axis=1), worth.shape[1:])
    steps = np.arange(len(worth))
    inner = np.clip(row, 1, len(own) - 2)
    low, mid, high = (worth[steps, inner + k, column] for k in (-1, 0, 1))
    curve = low - 2 * mid + high
    shift = np.where(curve < 0, 0.5 * (low - high) / np.where(curve < 0, curve, 1), 0.0)
    inside = np.where(row == inner, np.clip(shift, -0.5, 0.5), 0.0)
    return np.asarray(own[row] + inside * (own[1] - own[0]))


def _longest(present: NDArray[np.bool_]) -> tuple[int, int]:
    """Start and end of the longest run."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], present.astype(np.int8), [0]])))
    starts, ends = edges[::2], edges[1::2]
    if len(starts) == 0:
        return 0, 0
    longest = int(np.argmax(ends - starts))
    return int(starts[longest]), int(ends[longest])


def _weighted_median(values: NDArray[np.float64], weights: NDArray[np.float64]) -> float:
    order = np.argsort(values)
    share = np.cumsum(weights[order]) / weights.sum()
    return float(values[order][np.searchsorted(share, 0.5)])


def _strength(fields: RestingLines) -> NDArray[np.float32]:
    """Amplitude of all lines together around each place."""
    power = sum(np.abs(blur(v, fields, 1.0, 1.0)) ** 2 for v in fields.values)
    return np.asarray(np.sqrt(np.asarray(power)), np.float32)


def _present(strength: NDArray[np.float32]) -> NDArray[np.bool_]:
    """Where most of the lines' power stands: within reach of the strongest tenth."""
    return np.asarray(strength > PRESENT * float(np.quantile(strength, 0.9)))


def _jitter(fields: RestingLines, present: NDArray[np.bool_], which: int) -> float:
    """Apparent sd of the gaps of one set, averaged along the threads.

    Gaps of independent error j, seen through a Gaussian of s gaps, change the local frequency by
    j / sqrt(2 sqrt(pi) s).
    """
    across, down = (0.0, 8.0) if which == 0 else (8.0, 0.0)
    local = departures_along(fields, which, across, down)[..., which][present]
    if local.size < 4:
        return 0.0
    middle = float(np.median(local))
    spread = 1.4826 * float(np.median(np.abs(local - middle)))
    gaps = fields.smoothing * float(np.hypot(*fields.frame[:, which]))
    return spread / float(np.hypot(*fields.frame[:, which])) * math.sqrt(2 * math.sqrt(math.pi) * gaps)
