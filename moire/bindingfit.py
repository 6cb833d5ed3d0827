"""Which weave's lines a spectrum has: thread frequencies and binding, fitted together.

Every weave predicts where lines may be: at fractions of its thread frequencies. A pair of observed
lines, read as two orders of a weave, gives thread frequencies; a reading is worth what it saves in
telling where all the lines are (a code length), less what it predicts and is not there.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cache

import numpy as np
from numpy.typing import NDArray

from moire.bindings import Binding, basket, binding_levels, plain, satin, twill
from moire.spectrallines import FINEST_LINE_CPP, SpectralLine
from moire.spectrum import Spectrum

_STRONGEST, _KEPT = 12, 4
_TOLERANCE_BINS = 0.8
_FURTHEST_ORDER = 8.5
_INNER_BINS = 3.5
_PRESENT_Z = 2.5
# Most cloth lies nearly level, some anyhow; what is turned further has its other set for the warp.
_TILT_DEG, _SQUARE_DEG, _STEEPEST_DEG, _ANYHOW_NAT = 5.0, 2.0, 47.0, 5.0
_FINEST_CPP = 0.62
_EVEN_NAT, _LENS_PX = 4.0, 0.45
_FOLDED = 4.0
_HALVED, _DOUBLED, _STRONG_NAT = 8.0, 10.0, 3.5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class BindingFit:
    """A reading of the lines as a weave.

    Attributes
    ----------
    binding : Binding
    warp, weft : ndarray, shape (2,)
        Thread frequencies ``(fx, fy)`` in cycles per pixel: ends repeat along `warp`.
    gain : float
        Nats saved by this reading.
    explained : float
        Share of the lines' excess that it explains.
    lines : tuple of (SpectralLine, (float, float))
        The lines that it explains and their orders, in threads.
    """

    binding: Binding
    warp: NDArray[np.float64]
    weft: NDArray[np.float64]
    gain: float
    explained: float
    lines: tuple[tuple[SpectralLine, tuple[float, float]], ...]

    @property
    def frame(self) -> NDArray[np.float64]:
        """Warp and weft frequency as columns."""
        return np.stack([self.warp, self.weft], axis=1)


@cache
def known_weaves() -> tuple[WeaveLines, ...]:
    bindings = [plain(), basket(2, 2), basket(2, 1), basket(1, 2), basket(3, 3)]
    for way in ("Z", "S"):
        bindings += [twill(up, down, way) for up, down in ((2, 1), (3, 1), (2, 2), (4, 1), (3, 3), (5, 1))]
    bindings += [satin(5, 2), satin(5, 3), satin(8, 3), satin(8, 5)]
    return (*(WeaveLines.of(b) for b in bindings), _RULED)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class WeaveLines:
    """What a binding predicts: allowed orders of one repeat, and the lowest lines it must show."""

    binding: Binding
    allowed: NDArray[np.bool_]
    lowest: tuple[tuple[float, float], ...]
    prior: float

    @staticmethod
    def of(binding: Binding) -> WeaveLines:
        levels = binding_levels(binding.matrix)
        picks, ends = levels.shape
        strong = levels.copy()
        strong[0, 0] = 0
        allowed = strong > 0.2 * strong.max()
        orders = [
            (h / ends, k / picks)
            for h in range(-ends // 2, ends // 2 + 1)
            for k in range(picks // 2 + 1)
            if (k > 0 or h > 0) and strong[k % picks, h % ends] > 0.6 * strong.max()
        ]
        orders.sort(key=lambda o: math.hypot(*o))
        allowed[0, 0] = True
        prior = {"plain": 0.0, "twill": -1.0, "basket": -2.0, "satin": -2.0}[binding.pattern]
        return WeaveLines(binding=binding, allowed=allowed, lowest=tuple(orders[:3]), prior=prior)


# Lines both ways without any binding: a table, graph paper, type on a grid, and a knit.
_RULED = WeaveLines(
    binding=Binding(pattern="unknown", structure="unbound", direction=None, matrix=np.zeros((1, 1), bool)),
    allowed=np.ones((1, 1), bool),
    lowest=(),
    prior=0.0,
)


def fit_binding(spectrum: Spectrum, lines: tuple[SpectralLine, ...]) -> tuple[BindingFit, ...]:
    """Readings of the lines as weaves, best first; empty if no two lines make a cloth."""
    if len(lines) < 2:
        return ()
    z = z_plane(spectrum)
    best: list[BindingFit] = []
    for weave in known_weaves():
        best.extend(read_as(weave, _frames(weave, lines, spectrum.size), lines, z))
    return tuple(sorted(best, key=lambda fit: -fit.gain))


def read_as(
    weave: WeaveLines, frames: NDArray[np.float64], lines: tuple[SpectralLine, ...], z: NDArray[np.float32]
) -> list[BindingFit]:
    """The best few readings of the lines as one weave, from frames of shape (n, 2, 2) to begin with."""
    if not len(frames):
        return []
    size = len(z)
    gains, _ = _gains(weave, frames, lines, size)
    return [_named(_settle(weave, frames[i], lines, size, z)) for i in _distinct(frames, gains, size)]


def _named(fit: BindingFit) -> BindingFit:
    """A twill named by its floats: even orders tell 3/1 from 2/2, the stronger threads the face.

    Warp floats show more warp ridges than weft ridges, hence the stronger thread line.
    """
    if fit.binding.pattern != "twill" or fit.binding.direction is None:
        return fit
    up, down = fit.binding.numbers
    level: dict[tuple[int, int], float] = {}
    for line, order in fit.lines:
        h, k = (round(abs(c) * (up + down)) for c in order)
        level[h, k] = max(level.get((h, k), -math.inf), line.level_nat - _seen(line.f))
    if up + down == 4:
        odd = max((v for (h, k), v in level.items() if h % 2 and k % 2), default=-math.inf)
        even = max((v for (h, k), v in level.items() if h % 4 == 2 and k % 4 == 2), default=-math.inf)
        up, down = (3, 1) if even > odd - _EVEN_NAT else (2, 2)
    n = up + down
    if level.get((0, n), -math.inf) > level.get((n, 0), -math.inf):
        up, down = min(up, down), max(up, down)
    return replace(fit, binding=twill(up, down, fit.binding.direction))


def _seen(f: NDArray[np.float64]) -> float:
    """What a usual lens and aperture leave of a line's power, in nat."""
    box = float(np.log(np.abs(np.sinc(f))).sum())
    return 2 * box - 4 * math.pi**2 * _LENS_PX**2 * float(f @ f)


def _frames(weave: WeaveLines, lines: tuple[SpectralLine, ...], size: int) -> NDArray[np.float64]:
    """Thread frequencies, shape (n, 2, 2) with warp and weft as columns, from pairs of lines."""
    orders = [*weave.lowest, (1.0, 0.0), (0.0, 1.0)] if weave.lowest else [(1.0, 0.0), (0.0, 1.0), (1.0, 1.0)]
    f = np.array([line.f for line in lines[:_STRONGEST]])
    first, second = np.triu_indices(len(f), 1)
    pairs = np.stack([f[first], f[second]], axis=-1)
    pairs = np.concatenate([pairs * np.array(s) for s in ((1, 1), (1, -1), (-1, 1), (-1, -1))])
    out = []
    for i, a in enumerate(orders):
        for j, b in enumerate(orders):
            matrix = np.array([a, b]).T
            if i != j and abs(np.linalg.det(matrix)) > 1e-6:
                out.append(pairs @ np.linalg.inv(matrix))
    return plausible(np.concatenate(out), size, _FINEST_CPP)


def plausible(frames: NDArray[np.float64], size: int, finest_cpp: float) -> NDArray[np.float64]:
    """Those of many frames that cloth on a platen may have."""
    ux, uy, vx, vy = frames[:, 0, 0], frames[:, 1, 0], frames[:, 0, 1], frames[:, 1, 1]
    steep = math.tan(math.radians(_STEEPEST_DEG))
    u, v = np.hypot(ux, uy), np.hypot(vx, vy)
    keep = (ux > 0) & (vy > 0) & (np.abs(uy) < steep * ux) & (np.abs(vx) < steep * vy)
    keep &= np.abs(ux * vx + uy * vy) < math.sin(math.radians(12)) * u * v
    keep &= (np.minimum(u, v) > _INNER_BINS / size) & (np.maximum(u, v) < finest_cpp)
    keep &= (u < 3.5 * v) & (v < 3.5 * u)
    return np.asarray(frames[keep])


def _gains(
    weave: WeaveLines, frames: NDArray[np.float64], lines: tuple[SpectralLine, ...], size: int
) -> tuple[NDArray[np.float64], NDArray[np.bool_]]:
    """Nats saved by each frame, and which lines it explains, shape (frames, lines)."""
    f = np.array([line.f for line in lines])
    weight = np.array([line.weight for line in lines])
    hit, _ = _match(weave, frames, f, size)
    density = weave.allowed.sum() / np.abs(np.linalg.det(frames))
    cells = size**2 / (math.pi * _TOLERANCE_BINS**2)
    saved = np.log(np.maximum(cells / density, 1.0))
    folds = 1.0 if weave.binding.pattern == "plain" else 2.0
    return (hit * weight).sum(axis=1) * saved + weave.prior + _prior(frames, folds, level=_lies_level(f)), hit


def _match(
    weave: WeaveLines, frames: NDArray[np.float64], f: NDArray[np.float64], size: int
) -> tuple[NDArray[np.bool_], NDArray[np.float64]]:
    """Which lines lie on allowed orders, and the orders, shape (frames, lines, 2)."""
    picks, ends = weave.allowed.shape
    repeat = np.array([ends, picks])
    at = np.einsum("nij,mj->nmi", np.linalg.inv(frames), f)
    whole = np.rint(at * repeat)
    orders = whole / repeat
    off = np.einsum("nij,nmj->nmi", frames, at - orders)
    near = np.hypot(off[..., 0], off[..., 1]) * size < _TOLERANCE_BINS
    h, k = whole[..., 0].astype(int) % ends, whole[..., 1].astype(int) % picks
    low = (np.abs(orders).max(axis=-1) < _FURTHEST_ORDER) & (np.abs(whole).max(axis=-1) > 0)
    return near & low & weave.allowed[k, h], orders


def _lies_level(f: NDArray[np.float64]) -> bool:
    """Whether strong lines lie along both axes, as the threads of level cloth do; shape (lines, 2)."""
    x, y = np.abs(f[:_STRONGEST]).T
    slope = math.tan(math.radians(_TILT_DEG))
    return bool((y < slope * x).any() and (x < slope * y).any())


def _prior(frames: NDArray[np.float64], folds: float, *, level: bool) -> NDArray[np.float64]:
    """How likely cloth lies so, in nat; `folds` is the price of threads beyond the grid's reach."""
    ux, uy, vx, vy = frames[:, 0, 0], frames[:, 1, 0], frames[:, 0, 1], frames[:, 1, 1]
    a, b = np.degrees(np.arctan2(uy, ux)), np.degrees(np.arctan2(-vx, vy))
    ratio = np.log(np.hypot(ux, uy) / np.hypot(vx, vy))
    tilt, skew = (a + b) / 2, a - b
    fine = [np.hypot(x, y) > FINEST_LINE_CPP for x, y in ((ux, uy), (vx, vy))]
    folded = folds * _FOLDED * np.add(*fine, dtype=float)
    return np.asarray(
        -0.5 * ((skew / _SQUARE_DEG) ** 2 + (ratio / 0.6) ** 2)
        - np.minimum(0.5 * (tilt / _TILT_DEG) ** 2, math.inf if level else _ANYHOW_NAT)
        - folded
    )


def _settle(
    weave: WeaveLines,
    frame: NDArray[np.float64],
    lines: tuple[SpectralLine, ...],
    size: int,
    z: NDArray[np.float32],
) -> BindingFit:
    """The frame fitted to all the lines it explains, and its final worth."""
    f = np.array([line.f for line in lines])
    weight = np.array([line.weight for line in lines])
    before = None
    for _ in range(3):
        hit, orders = _match(weave, frame[None], f, size)
        used = hit[0]
        if before is not None and (used == before).all():
            break
        before = used
        a = orders[0][used] * weight[used, None]
        if used.sum() < 2 or np.linalg.matrix_rank(a) < 2:
            break
        frame = np.linalg.lstsq(a, f[used] * weight[used, None], rcond=None)[0].T
    gains, hit = _gains(weave, frame[None], lines, size)
    _, orders = _match(weave, frame[None], f, size)
    gain = float(gains[0]) - _absent(weave, frame, z)
    if weave.lowest:
        gain -= _misnumbered(frame, lines, size)
    explained = float(weight[hit[0]].sum() / weight.sum())
    named = tuple(
        (line, (float(o[0]), float(o[1]))) for line, o, h in zip(lines, orders[0], hit[0], strict=True) if h
    )
    return BindingFit(
        binding=weave.binding, warp=frame[:, 0], weft=frame[:, 1], gain=gain, explained=explained, lines=named
    )


def _absent(weave: WeaveLines, frame: NDArray[np.float64], z: NDArray[np.float32]) -> float:
    """Price of lines that the weave should show within the band and does not."""
    size = len(z)

    def present(order: tuple[float, float]) -> bool | None:
        least = _PRESENT_Z if weave.lowest else 2 * _PRESENT_Z
        f = frame @ np.array(order)
        if np.hypot(*f) > FINEST_LINE_CPP or np.hypot(*f) * size < _INNER_BINS:
            return None
        x, y = np.rint(f * size).astype(int)
        return bool(z[np.arange(y - 1, y + 2)[:, None] % size, np.arange(x - 1, x + 2) % size].max() > least)

    price = 0.0
    first = [s for s in map(present, weave.lowest) if s is not None]
    if first:
        price += 8.0 * (not any(first)) + 2.0 * sum(not s for s in first)
    for order in ((1.0, 0.0), (0.0, 1.0)):
        # A ruling is nothing without its fundamentals; threads of one colour may hide theirs.
        price += (3.0 if weave.lowest else 25.0) * (present(order) is False)
    return price


def _misnumbered(frame: NDArray[np.float64], lines: tuple[SpectralLine, ...], size: int) -> float:
    """Price of threads counted at half or at twice their number.

    Along its own threads no binding has a line at half their frequency alone, and twice their
    frequency is never the stronger line; coloured stripes make oblique lines that fit either count.
    """

    def level(order: tuple[float, float]) -> float:
        f = frame @ np.array(order)
        near = (min(np.hypot(*(line.f - f)), np.hypot(*(line.f + f))) * size < 1.5 for line in lines)
        return max(
            (line.level_nat for line, is_near in zip(lines, near, strict=True) if is_near), default=-math.inf
        )

    price = 0.0
    strongest = lines[0].level_nat
    for half, one, two in (((0.5, 0.0), (1.0, 0.0), (2.0, 0.0)), ((0.0, 0.5), (0.0, 1.0), (0.0, 2.0))):
        # Ends drawn in by pairs do show at half their frequency, beside their own line.
        price += _HALVED * (level(one) == -math.inf and level(half) > strongest - _STRONG_NAT)
        seen = np.hypot(*(frame @ np.array(one))) * size > _INNER_BINS
        price += _DOUBLED * (seen and level(two) > max(level(one) + 1, strongest - _STRONG_NAT))
    return price


def z_plane(spectrum: Spectrum) -> NDArray[np.float32]:
    """How far each bin stands above its background, in robust standard deviations."""
    return np.maximum(spectrum.mean_relief.z, spectrum.top_relief.z)


def _distinct(frames: NDArray[np.float64], gains: NDArray[np.float64], size: int) -> list[int]:
    """The best few frames that differ by more than a bin."""
    kept: list[int] = []
    for i in np.argsort(-gains)[:60]:
        if all(np.abs(frames[i] - frames[j]).max() * size > 1 for j in kept):
            kept.append(int(i))
        if len(kept) == _KEPT:
            break
    return kept
