"""Pairs of peaks at right angles that are screens.

Pairs are taken strongest first and each is first tried as a combination of those already
accepted before it is believed to be a screen.
"""

from __future__ import annotations

from collections.abc import Iterator
from itertools import product

import numpy as np

from moire.explanation import explained
from moire.lattice import Lattice, alike, grid_distance, overlap, quarter_turn, transfer, wrap
from moire.peaks import Peak

_PAIR_BINS = 0.15
# Real scanners stretch and shear by up to about half a percent (measured on scans of prints).
_PAIR_SHARE = 0.0065
_FLOOR_SHARE = 0.02
_FLOOR_SHARE_JPEG = 0.03
# A second screen of one ink over the same tiles: no print has one.
_SAME_INK_SHARE, _SAME_INK_SHARE_JPEG = 0.12, 0.06
_SAME_INK = 0.97
# Below these, in code values, quantisation draws lattices of its own.
_LEAST_SWING, _LEAST_SWING_JPEG = 0.1, 0.25


def find_lattices(
    peaks: tuple[Peak, ...],
    *,
    size: int,
    aspect: tuple[float, float] = (1.0, 1.0),
    jpeg: bool = False,
    slack: float = 1.0,
) -> tuple[Lattice, ...]:
    """Screens' lattices that no combination of the others explains, strongest first.

    Parameters
    ----------
    peaks : tuple of Peak
        Coherent lines.
    size : int
        Tile side that the bins refer to.
    aspect : (float, float)
        ppi of each axis over a common rate; (1, 1) when unknown.
    jpeg : bool
        Whether images of the 8-px block grid are to be expected.
    slack : float
        How much further from a square than usual a pair may be.
    """
    pairs = _pairs(peaks, size, aspect, slack)
    if not pairs:
        return ()
    # As printed, before the scanner's blur: a faint low line is not a screen beside a blurred one.
    printed = {id(p): p.strength / transfer(p.k1) for p in pairs}
    share = _FLOOR_SHARE_JPEG if jpeg else _FLOOR_SHARE
    strongest = max(p.strength for p in pairs)
    floor = max(share * strongest, _LEAST_SWING_JPEG if jpeg else _LEAST_SWING)
    pairs = [p for p in pairs if printed[id(p)] >= share * max(printed.values()) and p.strength >= floor]
    pairs.sort(key=lambda p: -printed[id(p)])
    accepted: list[Lattice] = []
    for pair in pairs:
        faint = _is_faint_beside(pair, accepted, printed, jpeg)
        if not faint and not explained(pair, accepted, size=size, jpeg=jpeg):
            accepted.append(pair)
    # Backwards, weakest first: a generator may be a combination of those found after it.
    for pair in sorted(accepted, key=lambda p: p.strength):
        others = [p for p in accepted if p is not pair]
        if explained(pair, others, size=size, jpeg=jpeg):
            accepted = others
    return tuple(sorted(accepted, key=lambda p: -p.strength))


def _is_faint_beside(pair: Lattice, accepted: list[Lattice], printed: dict[int, float], jpeg: bool) -> bool:
    """Whether a far stronger screen of the same ink lies over the same tiles."""
    share = _SAME_INK_SHARE_JPEG if jpeg else _SAME_INK_SHARE
    return any(
        printed[id(pair)] < share * printed[id(g)]
        and alike(pair.colour, g.colour) > _SAME_INK
        and overlap(pair.first.weight, g.first.weight) > 0.5
        for g in accepted
    )


def half_orders(
    lattices: tuple[Lattice, ...], peaks: tuple[Peak, ...], *, size: int
) -> tuple[tuple[int, int], ...]:
    """Bins of the screens whose (1, 1) orders the given lattices would be, where no peak is yet."""
    out = []
    for g in lattices:
        for k in ((g.k1 + g.k2) / 2, (g.k1 - g.k2) / 2):
            for place in (k, wrap(k + 0.5)):
                if all(grid_distance(place, p.f) > 0.5 / size for p in peaks):
                    out.append((int(np.rint(place[0] * size)), int(np.rint(place[1] * size))))
    return tuple(out)


def missing_partners(
    peaks: tuple[Peak, ...], *, size: int, aspect: tuple[float, float] = (1.0, 1.0)
) -> tuple[tuple[int, int], ...]:
    """Bins where the second line of a lattice is to be looked for beside a lone coherent one."""
    out = []
    for p in peaks:
        if p.coherence < 0.95 or p.doubled:
            continue
        turned = wrap(quarter_turn(p.f, aspect))
        if all(grid_distance(turned, q.f) > 0.5 / size for q in peaks):
            k = np.rint(turned * size).astype(int)
            out.append((int(k[0]), int(k[1])))
    return tuple(out)


def _pairs(peaks: tuple[Peak, ...], size: int, aspect: tuple[float, float], slack: float) -> list[Lattice]:
    found = []
    for a, b, error, sense in _right_angles(peaks, size, aspect, slack):
        p, q = peaks[a], peaks[b]
        k1, k2 = p.f, sense * q.f
        bins = error * size
        ratio = max(p.amplitude, q.amplitude) / max(min(p.amplitude, q.amplitude), 1e-9)
        cosine = alike(p.colour, q.colour)
        allowed = slack * max(_PAIR_BINS, _PAIR_SHARE * size * float(np.hypot(*k1)))
        plain = bins <= allowed and ratio <= 3 and cosine > 0.90
        elliptic = bins <= allowed / 3.5 and ratio <= 9 and cosine > 0.97
        if not (plain or elliptic) or overlap(p.weight, q.weight) < 0.3:
            continue
        colour = p.colour * p.amplitude + q.colour * q.amplitude
        if colour.min() < -0.15 * abs(colour).max():
            continue
        strength = float(np.sqrt(p.amplitude * q.amplitude * p.coherence * q.coherence))
        found.append(Lattice(k1=k1, k2=k2, first=p, second=q, strength=strength, squareness_bins=bins))
    return found


def _right_angles(
    peaks: tuple[Peak, ...], size: int, aspect: tuple[float, float], slack: float
) -> Iterator[tuple[int, int, float, float]]:
    """Pairs near enough to a right angle: both indices, the gap in cycles per pixel, the sense of the second.

    Lines on the edge of the grid are left out: phase and amplitude cannot be told apart there.
    """
    f = np.array([p.f for p in peaks]).reshape(-1, 2)
    edge = np.linalg.norm(wrap(2 * f), axis=1) < 1 / size
    allowed = slack * np.maximum(_PAIR_BINS / size, _PAIR_SHARE * np.linalg.norm(f, axis=1))
    # On an uneven grid folding and turning do not commute: try the next orders too.
    shifts = np.array([(0.0, 0.0)] if aspect[0] == aspect[1] else list(product((0.0, -1.0, 1.0), repeat=2)))
    x, y = (f[:, None] + shifts).transpose(2, 0, 1)
    turned = np.stack([y * aspect[1] / aspect[0], -x * aspect[0] / aspect[1]], axis=-1)
    senses = np.array([1.0, -1.0])
    for a in range(len(peaks) - 1):
        if edge[a]:
            continue
        gap = np.linalg.norm(wrap(senses[:, None] * f[a + 1 :, None, None] - turned[a][:, None]), axis=-1)
        flat = gap.reshape(len(gap), -1)
        least = flat.min(axis=1)
        for i in np.flatnonzero(least <= allowed[a]):
            yield a, a + 1 + int(i), float(least[i]), float(senses[flat[i].argmin() % 2])
