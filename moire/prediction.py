"""The forward model from an original to the lines of its scan, for many rates at once."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from itertools import combinations, product

import numpy as np
from numpy.typing import NDArray

from moire.kernels import IMAGES, Kernel, image_responses
from moire.patterns import (
    LUMINANCE,
    PAIR_CELLS,
    Pattern,
    codes_of_light,
    light_of_one,
    light_of_two,
    lines_of_codes,
    lines_of_lightness,
    order_grid,
    whole_grid,
)
from moire.press import PAPER
from moire.sampling import Optics, capture_mtf, fold_all, turned

Array = NDArray[np.float64]

_KNOTS = 32
_ONE_REACH, _THREAD_REACH, _PAIR_REACH = 12, 4, 2
_LEAST_SWING = 0.03
_PAIR_TONES_APART = 3
_MOST_IMAGES = 2


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Capture:
    """How the sheet is sampled.

    ``rates`` has shape (n, 2). ``grid`` is None when the sensor works at each rate itself;
    else the scanner's optical rate, from which it makes the rate asked for in linear light, or
    with ``derivative`` the rate of a master that software reduces in code values.
    """

    rates: Array
    turn_deg: float = 0.0
    optics: Optics = field(default_factory=Optics)
    grid: tuple[float, float] | None = None
    kernel: Kernel = "opencv-area"
    derivative: bool = False


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Lines:
    """Predicted lines: L of them at n rates.

    Attributes
    ----------
    parts : tuple
        For each line ``((pattern, m, n), ...)``.
    true_cpi : ndarray, shape (L, 2)
        In the original as it lies, fy down.
    seen_cpi : ndarray, shape (n, L, 2)
    order, capture_order : ndarray of int, shape (n, L, 2)
        Folds by the rate, and before it by the grid (0 where there is none).
    image : ndarray of int, shape (L, 2)
        Which image of the resampling kernel; 0 for the line itself.
    amplitude, mean : ndarray, shape (n, L)
        L*, at the tone where the line shows most.
    """

    parts: tuple[tuple[tuple[int, int, int], ...], ...]
    true_cpi: Array
    seen_cpi: Array
    order: NDArray[np.int64]
    capture_order: NDArray[np.int64]
    image: NDArray[np.int64]
    amplitude: Array
    mean: Array


def predict(patterns: Sequence[Pattern], capture: Capture) -> Lines:
    """Lines of L* that a scan of the patterns shows at each rate.

    Inks of one print are taken alone, in pairs and, at first order, in threes.

    Parameters
    ----------
    patterns : sequence of Pattern
    capture : Capture

    Returns
    -------
    Lines
        Those that reach 0.03 L* at some rate, or the strongest where none does.
    """
    knots, low, weight = _knots(capture.rates)
    inks = [(i, p) for i, p in enumerate(patterns) if p.is_ink]
    blocks = [_one(i, p, capture, knots) for i, p in enumerate(patterns)]
    blocks += [_two(a, b, capture, knots) for a, b in combinations(inks, 2)]
    blocks += [_three(abc, capture, knots) for abc in combinations(inks, 3)]
    parts = [part for block in blocks for part in block.parts]
    true = np.concatenate([b.true for b in blocks])
    image = np.concatenate([b.image for b in blocks])
    amplitude = np.concatenate([b.amplitude for b in blocks], axis=1)
    mean = np.concatenate([b.mean for b in blocks], axis=1)
    highest = amplitude.max(axis=0)
    kept = np.flatnonzero(highest >= min(_LEAST_SWING, float(highest.max())))
    true, image = true[kept], image[kept]
    first = np.zeros((len(kept), 2), np.int64)
    before = true
    if capture.grid is not None:
        before, first = fold_all(true, np.array(capture.grid))
        before = before + image * np.array(capture.grid)
    seen, order = fold_all(before[None], capture.rates[:, None, :])
    share = weight[:, None]
    return Lines(
        parts=tuple(parts[i] for i in kept),
        true_cpi=true,
        seen_cpi=seen,
        order=order,
        capture_order=np.broadcast_to(first, order.shape),
        image=image,
        amplitude=(1 - share) * amplitude[low][:, kept] + share * amplitude[low + 1][:, kept],
        mean=(1 - share) * mean[low][:, kept] + share * mean[low + 1][:, kept],
    )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Block:
    parts: list[tuple[tuple[int, int, int], ...]]
    true: Array
    image: NDArray[np.int64]
    amplitude: Array
    mean: Array


def _knots(rates: Array) -> tuple[Array, NDArray[np.intp], Array]:
    """Rates at which amplitudes are computed, and each rate's place between two of them.

    Amplitudes change slowly with the rate, unlike where the lines fold to.
    """
    aspect = rates[:, 1] / rates[:, 0]
    if len(rates) <= _KNOTS or np.ptp(aspect) > 1e-9:
        return (
            np.concatenate([rates, rates[-1:]]),
            np.arange(len(rates)),
            np.zeros(len(rates)),
        )
    x = np.geomspace(rates[:, 0].min(), rates[:, 0].max(), _KNOTS)
    low = np.clip(np.searchsorted(x, rates[:, 0]) - 1, 0, _KNOTS - 2)
    weight = (rates[:, 0] - x[low]) / (x[low + 1] - x[low])
    return np.stack([x, x * aspect[0]], axis=1), low, weight


def _transfer(f: Array, capture: Capture, rate: Array) -> NDArray[np.complex128]:
    """What sensor and, where there is one, the scanner's own resampling leave of frequencies."""
    if capture.grid is None:
        return capture_mtf(f / rate, capture.optics).astype(complex)
    grid = np.array(capture.grid)
    left = capture_mtf(f / grid, capture.optics).astype(complex)
    return left if capture.derivative else left * _resampled(f, capture, rate)


def _resampled(
    f: Array, capture: Capture, rate: Array, image: tuple[int, int] = (0, 0)
) -> NDArray[np.complex128]:
    """Response of the kernel for a line itself or one of its images, along x and y."""
    grid = np.array(capture.grid)
    at = fold_all(f, grid)[0] / grid
    x = image_responses(capture.kernel, float(grid[0] / rate[0]))(at[..., 0], image[0])
    y = image_responses(capture.kernel, float(grid[1] / rate[1]))(at[..., 1], image[1])
    return np.asarray(x * y)


def _lines(
    light: NDArray[np.complex128], f: Array, axes: tuple[int, ...], capture: Capture, knots: Array
) -> tuple[Array, Array]:
    """Amplitudes (knots, tones, cells...) and mean L* (knots, tones) of light (tones, cells...)."""
    swings, means = [], []
    codes = None
    if capture.derivative:
        codes = codes_of_light(light * _transfer(f, capture, knots[0]), axes)
    for rate in knots:
        if codes is None:
            swing, mean = lines_of_lightness(light * _transfer(f, capture, rate), axes)
        else:
            swing, mean = lines_of_codes(codes * _resampled(f, capture, rate), axes)
        swings.append(swing)
        means.append(mean)
    return np.stack(swings), np.stack(means)


def _one(index: int, pattern: Pattern, capture: Capture, knots: Array) -> _Block:
    cells = pattern.amounts.shape[-1]
    basis = turned(pattern.basis_cpi, capture.turn_deg)
    orders = order_grid(cells)
    f = orders / pattern.repeat @ basis
    swing, mean = _lines(light_of_one(pattern), f, (-2, -1), capture, knots)
    reach = _ONE_REACH if pattern.repeat == 1 else _THREAD_REACH * pattern.repeat
    half = _half_plane(orders) & (np.abs(orders).max(axis=-1) <= reach)
    amplitude, tone = _worst_tone(swing[..., half], mean)
    block = _Block(
        parts=[((index, int(m), int(n)),) for m, n in orders[half]],
        true=f[half],
        image=np.zeros((int(half.sum()), 2), np.int64),
        amplitude=amplitude,
        mean=tone,
    )
    if capture.grid is None:
        return block
    grid = replace(capture, grid=None, derivative=False)
    swing, mean = _lines(light_of_one(pattern), f, (-2, -1), grid, np.array([capture.grid]))
    amplitude, tone = _worst_tone(swing[..., half], mean)
    return _with_images(block, (amplitude, tone), capture, knots)


def _two(a: tuple[int, Pattern], b: tuple[int, Pattern], capture: Capture, knots: Array) -> _Block:
    first, second = (turned(p.basis_cpi, capture.turn_deg) for _, p in (a, b))
    low, high = order_grid(PAIR_CELLS) @ first, whole_grid(PAIR_CELLS) @ second
    f = high[:, :, None, None] + low[None, None]
    count = len(a[1].amounts)
    tones = slice(count // _PAIR_TONES_APART if count > 1 else 0, None, _PAIR_TONES_APART)
    swing, mean = _lines(light_of_two(a[1], b[1], tones), f, (-4, -3, -2, -1), capture, knots)
    of_a = np.broadcast_to(order_grid(PAIR_CELLS)[None, None], f.shape)
    of_b = np.broadcast_to(whole_grid(PAIR_CELLS)[:, :, None, None], f.shape)
    total_a, total_b = np.abs(of_a).sum(axis=-1), np.abs(of_b).sum(axis=-1)
    wanted = (total_a >= 1) & (total_b >= 1) & (np.maximum(total_a, total_b) <= _PAIR_REACH)
    wanted &= _half_plane(of_a)
    amplitude, tone = _worst_tone(swing[..., wanted], mean)
    return _Block(
        parts=[
            ((a[0], int(m), int(n)), (b[0], int(p), int(q)))
            for (m, n), (p, q) in zip(of_a[wanted], of_b[wanted], strict=True)
        ],
        true=f[wanted],
        image=np.zeros((int(wanted.sum()), 2), np.int64),
        amplitude=amplitude,
        mean=tone,
    )


def _three(inks: Sequence[tuple[int, Pattern]], capture: Capture, knots: Array) -> _Block:
    """First orders of three inks: the slow bands of a set near its singular state."""
    first = [(1, 0), (0, 1), (-1, 0), (0, -1)]
    combos = [c for c in product(first, repeat=3) if c[0] in first[:2]]
    bases = [turned(p.basis_cpi, capture.turn_deg) for _, p in inks]
    f = np.array([sum(np.array(o) @ k for o, k in zip(c, bases, strict=True)) for c in combos])
    middle = inks[0][1].amounts.shape[0] // 2
    share = LUMINANCE * np.array(PAPER)
    depth = np.ones(3)
    tone = share.copy()
    for _, p in inks:
        c10 = max(abs(p.amounts[middle, 0, 1]), abs(p.amounts[middle, 1, 0]))
        depth *= p.absorbs * c10
        tone *= 1 - p.absorbs * float(p.amounts[middle, 0, 0].real)
    y = float(tone.sum())
    slope = 116 / 3 * y ** (-2 / 3)
    left = np.stack([np.abs(_transfer(f, capture, rate)) for rate in knots])
    if capture.derivative:
        left *= np.stack([np.abs(_resampled(f, capture, rate)) for rate in knots])
    return _Block(
        parts=[tuple((i, *o) for (i, _), o in zip(inks, c, strict=True)) for c in combos],
        true=f,
        image=np.zeros((len(combos), 2), np.int64),
        amplitude=2 * slope * float(share @ depth) * left,
        mean=np.full(left.shape, 116 * np.cbrt(y) - 16),
    )


def _with_images(block: _Block, level: tuple[Array, Array], capture: Capture, knots: Array) -> _Block:
    """The block and the images that the resampling kernel leaves of its lines.

    `level` is amplitude and mean before resampling, each of shape (1, lines).
    """
    amplitude, mean = level
    images = [(x, y) for x, y in product(IMAGES, IMAGES) if 0 < abs(x) + abs(y) <= _MOST_IMAGES]
    left = [
        np.stack([np.abs(_resampled(block.true, capture, rate, pair)) for rate in knots]) for pair in images
    ]
    return _Block(
        parts=block.parts * (1 + len(images)),
        true=np.concatenate([block.true] * (1 + len(images))),
        image=np.concatenate([block.image] + [np.broadcast_to(pair, block.image.shape) for pair in images]),
        amplitude=np.concatenate([block.amplitude] + [amplitude * share for share in left], axis=1),
        mean=np.concatenate([block.mean] + [np.broadcast_to(mean, block.mean.shape)] * len(images), axis=1),
    )


def _half_plane(orders: NDArray[np.int64]) -> NDArray[np.bool_]:
    """One of each opposite pair of orders, none for (0, 0)."""
    return np.asarray((orders[..., 0] > 0) | ((orders[..., 0] == 0) & (orders[..., 1] > 0)))


def _worst_tone(swing: Array, mean: Array) -> tuple[Array, Array]:
    """Amplitude and mean of each line at the tone where its contrast is highest.

    From shapes (knots, tones, lines) and (knots, tones) to (knots, lines) each.
    """
    contrast = swing / (mean[..., None] + 16)
    at = contrast.argmax(axis=1)
    amplitude = np.take_along_axis(swing, at[:, None], axis=1)[:, 0]
    return amplitude, np.take_along_axis(mean, at, axis=1)
