"""What explains a lattice without a screen of its own.

Almost every extra lattice that a pair search turns up is an exact combination of the true
ones: a harmonic, a cell printed at a rational fraction, a sum of two screens, an image of
JPEG's block grid; always modulo the sampling grid.
"""

from __future__ import annotations

from itertools import combinations, product

import numpy as np
from numpy.typing import NDArray

from moire.lattice import Lattice, Vector, alike, grid_distance, transfer

_TAU_BINS = 0.06
# Images of the block grid are many and exact: a near miss is a chance.
_IMAGE_TAU = 0.7
# Cosine of colours; what a codec leaves of chroma differs less.
_SAME_COLOUR, _SAME_COLOUR_JPEG = 0.90, 0.97


def explained(pair: Lattice, generators: list[Lattice], *, size: int, jpeg: bool) -> bool:
    """Whether a lattice is a combination of others, by place and by strength."""
    # A line whose phase wanders is two lines in one bin, and a pair that is not square has one
    # such line: its place is known less well.
    wander = 1 - min(pair.first.coherence, pair.second.coherence)
    tau = (_TAU_BINS + 0.8 * wander + 0.5 * pair.squareness_bins) / size
    strength = pair.strength / transfer(pair.k1)
    parents = [(g, g.strength / transfer(g.k1)) for g in generators]
    # An order of a screen has the ink's colour; of a doubled phase the colour has no sign. What a
    # codec leaves of colour only rules out the many rational orders.
    coloured = len(pair.colour) == 3 and not (pair.first.doubled or pair.second.doubled)
    likeness = (_SAME_COLOUR_JPEG if jpeg else _SAME_COLOUR) if coloured else -1.0
    kin = [(g, s) for g, s in parents if alike(pair.colour, g.colour) > likeness]
    return (
        any(_is_order(pair, strength, g, s, tau) for g, s in (parents if jpeg else kin))
        or any(_is_suborder(pair, strength, g, s, tau) for g, s in kin)
        or _is_sum(pair, strength, parents, tau, -1.0 if jpeg else likeness)
        or (jpeg and _is_block_image(pair, strength, parents, tau))
    )


def _near(
    pair: Lattice, place: NDArray[np.float64], tolerance: NDArray[np.float64] | float
) -> NDArray[np.bool_]:
    gap = np.minimum(grid_distance(place, pair.k1), grid_distance(place, pair.k2))
    for peak, k in ((pair.first, pair.k1), (pair.second, pair.k2)):
        if peak.doubled:
            # The doubled phase leaves the frequency open by one bin on each axis.
            for shift in product((-1, 0, 1), repeat=2):
                gap = np.minimum(gap, grid_distance(place, k + np.array(shift) * peak.bin_cpp))
    return np.asarray(gap < tolerance)


def _orders(limit: int) -> NDArray[np.int64]:
    at = np.arange(-limit, limit + 1)
    m, n = np.meshgrid(at, at)
    pairs = np.stack([m.ravel(), n.ravel()], axis=1)
    total = np.abs(pairs).sum(axis=1)
    return pairs[(total >= 1) & (total <= limit)]


def _places(orders: NDArray[np.float64] | NDArray[np.int64], g: Lattice) -> NDArray[np.float64]:
    return np.asarray(orders[:, :1] * g.k1 + orders[:, 1:] * g.k2)


def _is_order(pair: Lattice, strength: float, g: Lattice, parent: float, tau: float) -> bool:
    orders = _ORDERS_6
    total = np.abs(orders).sum(axis=1)
    near = _near(pair, _places(orders, g), tau * (1 + total / 4) + 2 * _sigma(g) * total)
    bound = 0.95 * 0.6 ** (total - 2.0) * parent
    return bool((near & (strength < bound)).any()) and pair.strength < 0.95 * g.strength


def _is_suborder(pair: Lattice, strength: float, g: Lattice, parent: float, tau: float) -> bool:
    near = _near(pair, _places(_SUBORDERS, g), tau + 3 * _sigma(g))
    return bool(near.any()) and strength < 0.3 * parent


def _is_sum(
    pair: Lattice, strength: float, parents: list[tuple[Lattice, float]], tau: float, likeness: float
) -> bool:
    # Light passes every ink: their beat has the product of their colours, and where that can be
    # seen to fit it may be as strong as they are.
    first = 1.0 if likeness == _SAME_COLOUR else 0.5
    for (a, sa), (b, sb) in combinations(parents, 2):
        if alike(pair.colour, _product(a, b)) < likeness:
            continue
        place = _places(_ORDERS_2, a)[:, None, :] + _places(_ORDERS_2, b)[None, :, :]
        total = np.abs(_ORDERS_2).sum(axis=1)[:, None] + np.abs(_ORDERS_2).sum(axis=1)[None, :]
        bound = np.select([total == 2, total == 3], [first, 0.4], 0.25) * min(sa, sb)
        if (_near(pair, place, tau * (1 + total / 4)) & (strength < bound)).any():
            return True
    for trio in combinations(parents, 3):
        lattices = [t[0] for t in trio]
        if alike(pair.colour, _product(*lattices)) < likeness:
            continue
        one = [_places(_ORDERS_1, g) for g in lattices]
        place = one[0][:, None, None, :] + one[1][None, :, None, :] + one[2][None, None, :, :]
        if strength < 0.3 * min(t[1] for t in trio) and _near(pair, place, 1.75 * tau).any():
            return True
    return False


def _product(*screens: Lattice) -> Vector:
    return np.asarray(np.prod([np.maximum(g.colour, 0) for g in screens], axis=0))


def _is_block_image(pair: Lattice, strength: float, parents: list[tuple[Lattice, float]], tau: float) -> bool:
    if _near(pair, _EIGHTHS, 1.75 * tau).any():
        return True
    for g, parent in parents:
        for orders, share in ((_ORDERS_3, 0.65), (_ORDERS_5, 0.3), (_SUBORDERS_9, 0.2)):
            if strength < share * parent:
                place = _places(orders, g)[:, None, :] + _EIGHTHS[None, :, :]
                if _near(pair, place, _IMAGE_TAU * tau).any():
                    return True
    for (a, sa), (b, sb) in combinations(parents, 2):
        if strength < 0.3 * min(sa, sb):
            place = _places(_ORDERS_2, a)[:, None, None, :] + _places(_ORDERS_2, b)[None, :, None, :]
            if _near(pair, place + _EIGHTHS[None, None, :, :], _IMAGE_TAU * tau).any():
                return True
    return False


def _sigma(g: Lattice) -> float:
    return float(min(max(g.first.sigma.max(), g.second.sigma.max()), 2e-4))


def _gaussian_rationals(norm_limit: int, size_limit: float) -> NDArray[np.float64]:
    """Orders z/w with Gaussian integers, |w|^2 up to a limit, not themselves integers."""
    found: set[tuple[int, int, int]] = set()
    reach = int(np.sqrt(norm_limit))
    for c, d in product(range(reach + 1), range(-reach, reach + 1)):
        norm = c * c + d * d
        if not 2 <= norm <= norm_limit:
            continue
        span = int(size_limit * np.sqrt(norm)) + 1
        for a, b in product(range(-span, span + 1), repeat=2):
            p, q = a * c + b * d, b * c - a * d
            if 0 < p * p + q * q <= (size_limit * norm) ** 2:
                divisor = int(np.gcd.reduce([p, q, norm]))
                if norm // divisor > 1:
                    found.add((p // divisor, q // divisor, norm // divisor))
    return np.array(sorted((p / n, q / n) for p, q, n in found))


_ORDERS_1, _ORDERS_2, _ORDERS_3 = _orders(1), _orders(2), _orders(3)
_ORDERS_5, _ORDERS_6 = _orders(5), _orders(6)
_SUBORDERS = _gaussian_rationals(40, 3.0)
_SUBORDERS_9 = _gaussian_rationals(9, 2.0)
_EIGHTHS = np.array([(u / 8, v / 8) for u in range(-4, 4) for v in range(-4, 4) if (u, v) != (0, 0)])
