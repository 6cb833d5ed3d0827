"""Square lattices of screens among the peaks, and what explains the peaks that remain.

Almost every extra lattice that a pair search turns up is an exact combination of the true
ones: a harmonic, a cell printed at a rational fraction, a sum of two screens, an image of
JPEG's block grid. So pairs are taken strongest first and each is first tried as such a
combination, always modulo the sampling grid, before it is believed to be a screen.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations, product

import numpy as np
from numpy.typing import NDArray

from moire.peaks import Peak

_PAIR_BINS = 0.15
# Real scanners stretch and shear by up to about half a percent (measured on scans of prints).
_PAIR_SHARE = 0.0065
_TAU_BINS = 0.06
_FLOOR_SHARE = 0.02
_FLOOR_SHARE_JPEG = 0.03
# A second screen of one ink over the same tiles: no print has one.
_SAME_INK_SHARE, _SAME_INK_SHARE_JPEG = 0.12, 0.06
_SAME_INK = 0.97
# Below these, in code values, quantisation draws lattices of its own.
_LEAST_SWING, _LEAST_SWING_JPEG = 0.1, 0.25
# Cosine of colours; what a codec leaves of chroma differs less.
_SAME_COLOUR, _SAME_COLOUR_JPEG = 0.90, 0.97
Vector = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Lattice:
    """A two-vector lattice as observed on the sampling grid.

    Attributes
    ----------
    k1, k2 : ndarray, shape (2,)
        Generators ``(fx, fy)`` in cycles per pixel.
    first, second : Peak
        The peaks they come from.
    strength : float
        Geometric mean amplitude times coherence, in code values.
    squareness_bins : float
        Distance of k2 from k1 turned by 90 degrees, in bins.
    """

    k1: Vector
    k2: Vector
    first: Peak
    second: Peak
    strength: float
    squareness_bins: float

    @property
    def colour(self) -> Vector:
        """Modulation of each channel, both lines together."""
        return self.first.colour * self.first.amplitude + self.second.colour * self.second.amplitude


def wrap(f: NDArray[np.float64]) -> NDArray[np.float64]:
    """Frequency folded into [-1/2, 1/2) cycles per pixel on each axis."""
    return f - np.floor(f + 0.5)


def grid_distance(a: NDArray[np.float64], b: NDArray[np.float64]) -> NDArray[np.float64]:
    """Distance of two frequencies modulo the sampling grid and sign, cycles per pixel."""
    same = np.linalg.norm(wrap(a - b), axis=-1)
    opposite = np.linalg.norm(wrap(a + b), axis=-1)
    return np.asarray(np.minimum(same, opposite))


def quarter_turn(f: NDArray[np.float64], aspect: tuple[float, float] = (1.0, 1.0)) -> NDArray[np.float64]:
    """Frequency turned by 90 degrees on the page.

    `aspect` is the ppi of each axis over a common rate.
    """
    return np.array([f[1] * aspect[1] / aspect[0], -f[0] * aspect[0] / aspect[1]])


def transfer(f: NDArray[np.float64]) -> float:
    """Typical scanner MTF at a frequency: box aperture and a lens of 0.45 px, floored at 0.12."""
    box = float(np.sinc(f[0]) * np.sinc(f[1]))
    return max(0.12, box * float(np.exp(-2 * np.pi**2 * 0.45**2 * (f @ f))))


def find_lattices(
    peaks: tuple[Peak, ...], *, size: int, aspect: tuple[float, float] = (1.0, 1.0), jpeg: bool = False
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
    """
    pairs = _pairs(peaks, size, aspect)
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
        and _alike(pair.colour, g.colour) > _SAME_INK
        and _overlap(pair.first.weight, g.first.weight) > 0.5
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


def _pairs(peaks: tuple[Peak, ...], size: int, aspect: tuple[float, float]) -> list[Lattice]:
    found = []
    for a, b in combinations(range(len(peaks)), 2):
        p, q = peaks[a], peaks[b]
        best = _partner_error(p.f, q.f, aspect)
        if best is None or _at_half_rate(p.f, size):
            continue
        error, k1, k2 = best
        bins = error * size
        ratio = max(p.amplitude, q.amplitude) / max(min(p.amplitude, q.amplitude), 1e-9)
        cosine = _alike(p.colour, q.colour)
        allowed = max(_PAIR_BINS, _PAIR_SHARE * size * float(np.hypot(*k1)))
        plain = bins <= allowed and ratio <= 3 and cosine > 0.90
        elliptic = bins <= allowed / 3.5 and ratio <= 9 and cosine > 0.97
        if not (plain or elliptic) or _overlap(p.weight, q.weight) < 0.3:
            continue
        colour = p.colour * p.amplitude + q.colour * q.amplitude
        if colour.min() < -0.15 * abs(colour).max():
            continue
        strength = float(np.sqrt(p.amplitude * q.amplitude * p.coherence * q.coherence))
        found.append(Lattice(k1=k1, k2=k2, first=p, second=q, strength=strength, squareness_bins=bins))
    return found


def _at_half_rate(f: Vector, size: int) -> bool:
    """Whether a line sits on the edge of the grid, where phase and amplitude cannot be told apart."""
    return bool(np.linalg.norm(wrap(2 * f)) < 1 / size)


def _partner_error(f: Vector, g: Vector, aspect: tuple[float, float]) -> tuple[float, Vector, Vector] | None:
    """How far `g` is from `f` turned by 90 degrees, and the two with one common sense."""
    if aspect[0] == aspect[1]:
        shifts = [np.zeros(2)]
    else:
        # On an uneven grid folding and turning do not commute: try the next orders too.
        shifts = [np.array(s, float) for s in product((0, -1, 1), repeat=2)]
    best = None
    for shift in shifts:
        turned = wrap(quarter_turn(f + shift, aspect))
        for sign in (1.0, -1.0):
            error = float(np.linalg.norm(wrap(sign * g - turned)))
            if best is None or error < best[0]:
                best = (error, f, sign * g)
    return best


def _alike(a: Vector, b: Vector) -> float:
    """Cosine of two colours."""
    return float(a @ b / (np.linalg.norm(a) * np.linalg.norm(b) + 1e-12))


def _overlap(a: NDArray[np.float32], b: NDArray[np.float32]) -> float:
    both, smaller = float(np.minimum(a, b).sum()), float(min(a.sum(), b.sum()))
    return both / smaller if smaller > 0 else 0.0


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
    alike = (_SAME_COLOUR_JPEG if jpeg else _SAME_COLOUR) if coloured else -1.0
    kin = [(g, s) for g, s in parents if _alike(pair.colour, g.colour) > alike]
    return any(
        (
            any(_is_order(pair, strength, g, s, tau) for g, s in (parents if jpeg else kin)),
            any(_is_suborder(pair, strength, g, s, tau) for g, s in kin),
            _is_sum(pair, strength, parents, tau, -1.0 if jpeg else alike),
            jpeg and _is_block_image(pair, strength, parents, tau),
        )
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
    pair: Lattice, strength: float, parents: list[tuple[Lattice, float]], tau: float, alike: float
) -> bool:
    # Light passes every ink: their beat has the product of their colours, and where that can be
    # seen to fit it may be as strong as they are.
    first = 1.0 if alike == _SAME_COLOUR else 0.6
    for (a, sa), (b, sb) in combinations(parents, 2):
        if _alike(pair.colour, _product(a, b)) < alike:
            continue
        place = _places(_ORDERS_2, a)[:, None, :] + _places(_ORDERS_2, b)[None, :, :]
        total = np.abs(_ORDERS_2).sum(axis=1)[:, None] + np.abs(_ORDERS_2).sum(axis=1)[None, :]
        bound = np.select([total == 2, total == 3], [first, 0.4], 0.25) * min(sa, sb)
        if (_near(pair, place, tau * (1 + total / 4)) & (strength < bound)).any():
            return True
    for trio in combinations(parents, 3):
        lattices = [t[0] for t in trio]
        if _alike(pair.colour, _product(*lattices)) < alike:
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
                if _near(pair, place, 1.5 * tau).any():
                    return True
    for (a, sa), (b, sb) in combinations(parents, 2):
        if strength < 0.3 * min(sa, sb):
            place = _places(_ORDERS_2, a)[:, None, None, :] + _places(_ORDERS_2, b)[None, :, None, :]
            if _near(pair, place + _EIGHTHS[None, None, :, :], 1.5 * tau).any():
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
