"""From lattices to screens: which ink, what ruling, what angle, and is it a halftone at all."""

from __future__ import annotations

import math
from functools import lru_cache
from itertools import permutations

import numpy as np
from numpy.typing import NDArray

from moire.beats import rosette_parents
from moire.chroma import ChromaReading
from moire.lattice import Lattice, grid_distance, wrap
from moire.model import Ink, Screen
from moire.peaks import Peak
from moire.units import fold_angle, lpi_to_lpcm, page_angle

_ALIKE = 0.85
_COLOUR_NOISE = 0.1
# Tone under a screen disturbs neighbouring tiles alike, which their scatter shows too little of; and
# no sampling grid is known better than to a few millionths (both from prints used for tuning).
_SIGMA_SCALE, _GRID_SIGMA = 1.25, 4e-6
_NAMED_ODDS = 0.4
# One reading spoilt by another pattern must not force the names of the rest.
_MISFIT_LIMIT = 30.0
_TEXT_PERIOD_PX = 8.0
# What each ink absorbs of red, green and blue, relative to its main band; process inks on coated
# paper (ISO 12647-2 solids, value from memory).
SIGNATURES: dict[Ink, tuple[float, float, float]] = {
    "cyan": (1.0, 0.33, 0.125),
    "magenta": (0.19, 1.0, 0.69),
    "yellow": (0.06, 0.125, 1.0),
    "black": (1.0, 1.0, 1.0),
}


def name_inks(
    lattices: tuple[Lattice, ...], chroma: tuple[tuple[ChromaReading, ChromaReading], ...] = ()
) -> tuple[Ink, ...]:
    """Ink of each lattice by its colour alone; the angle cannot tell cyan from magenta.

    The four strongest are named together, each ink once; a further lattice takes the nearest
    ink. A grey scan shows one ink as black and cannot name several.

    Parameters
    ----------
    lattices : tuple of Lattice
        Strongest first.
    chroma : tuple of (ChromaReading, ChromaReading)
        Colours after a codec halved the chroma; empty where colour was kept.
    """
    if not lattices:
        return ()
    if len(lattices[0].first.colour) != 3:
        only: Ink = "black" if len(lattices) == 1 else "unknown"
        return (only,) * len(lattices)
    inks = list(SIGNATURES)
    if chroma:
        misfit = [[np.mean([c.misfit(SIGNATURES[ink]) for c in pair]) for ink in inks] for pair in chroma]
        odds = _joint_odds(np.array(misfit))
        return tuple(inks[int(row.argmax())] if row.max() > _NAMED_ODDS else "unknown" for row in odds)
    likeness = np.array([[_cosine(_colour(g), SIGNATURES[ink]) for ink in inks] for g in lattices])
    odds = _joint_odds((1 - likeness**2) / _COLOUR_NOISE**2)
    return tuple(
        inks[int(row.argmax())] if alike.max() > _ALIKE and row.max() > _NAMED_ODDS else "unknown"
        for row, alike in zip(odds, likeness, strict=True)
    )


def _joint_odds(misfit: NDArray[np.float64]) -> NDArray[np.float64]:
    """Odds of each ink for each lattice, the four first sharing the inks out among them.

    Parameters
    ----------
    misfit : ndarray, shape (lattices, inks)
        Squared standard errors.
    """
    least = np.minimum(misfit - misfit.min(axis=1, keepdims=True), _MISFIT_LIMIT)
    odds = np.exp(-least / 2)
    together = range(min(len(odds), odds.shape[1]))
    shared = np.zeros((len(together), odds.shape[1]))
    for inks in permutations(range(odds.shape[1]), len(together)):
        shared[together, inks] += odds[together, inks].prod()
    odds[: len(together)] = shared
    return np.asarray(odds / odds.sum(axis=1, keepdims=True))


def _colour(lattice: Lattice) -> NDArray[np.float64]:
    a, b = lattice.first, lattice.second
    return a.colour * a.amplitude + b.colour * b.amplitude


def _cosine(a: NDArray[np.float64], b: tuple[float, float, float]) -> float:
    return float(a @ np.array(b) / (np.linalg.norm(a) * np.linalg.norm(b) + 1e-12))


def measure_screen(
    k1_cpi: NDArray[np.float64],
    k2_cpi: NDArray[np.float64],
    sigma_cpi: tuple[float, float],
    *,
    ink: Ink,
) -> Screen:
    """Ruling and angle of a dot screen from its two lattice vectors.

    Parameters
    ----------
    k1_cpi, k2_cpi : ndarray, shape (2,)
        Cycles per inch, fy down the page.
    sigma_cpi : (float, float)
        Standard uncertainty of a component of each.
    ink : str
    """
    w1, w2 = 1 / max(sigma_cpi[0], 1e-9) ** 2, 1 / max(sigma_cpi[1], 1e-9) ** 2
    r1, r2 = float(np.hypot(*k1_cpi)), float(np.hypot(*k2_cpi))
    ruling = (w1 * r1 + w2 * r2) / (w1 + w2)
    a1 = fold_angle(page_angle(*k1_cpi), 90)
    a2 = fold_angle(page_angle(*k2_cpi), 90)
    gap = (a2 - a1 + 45) % 90 - 45
    angle = fold_angle(a1 + gap * w2 / (w1 + w2), 90)
    noise = 1 / math.sqrt(w1 + w2)
    # Two vectors that disagree beyond their noise show a stretch that neither alone reveals.
    ruling_sigma = max(noise, abs(r1 - r2) / 2 / math.sqrt(2)) * _SIGMA_SCALE
    angle_sigma = max(math.degrees(noise / ruling), abs(gap) / 2 / math.sqrt(2)) * _SIGMA_SCALE
    return Screen(
        ruling_lpi=ruling,
        ruling_lpi_sigma=math.hypot(ruling_sigma, _GRID_SIGMA * ruling),
        ruling_lpcm=lpi_to_lpcm(ruling),
        angle_deg=angle,
        angle_deg_sigma=math.hypot(angle_sigma, math.degrees(_GRID_SIGMA)),
        ink=ink,
        shape="dot",
    )


def measure_line_screen(k_cpi: NDArray[np.float64], sigma_cpi: float, *, ink: Ink) -> Screen:
    """Ruling and angle of a screen of lines; the angle is the direction across the lines, [0, 180)."""
    ruling = float(np.hypot(*k_cpi))
    return Screen(
        ruling_lpi=ruling,
        ruling_lpi_sigma=math.hypot(sigma_cpi * _SIGMA_SCALE, _GRID_SIGMA * ruling),
        ruling_lpcm=lpi_to_lpcm(ruling),
        angle_deg=fold_angle(page_angle(*k_cpi), 180),
        angle_deg_sigma=math.degrees(math.hypot(sigma_cpi * _SIGMA_SCALE / ruling, _GRID_SIGMA)),
        ink=ink,
        shape="line",
    )


def name_line_ink(colour: NDArray[np.float64]) -> Ink:
    """Nearest ink by colour of a single line; black in a grey scan."""
    if len(colour) != 3:
        return "black"
    best = max(SIGNATURES, key=lambda ink: _cosine(colour, SIGNATURES[ink]))
    return best if _cosine(colour, SIGNATURES[best]) > _ALIKE else "unknown"


def is_halftone(lattice: Lattice, lattices: tuple[Lattice, ...], peaks: tuple[Peak, ...], size: int) -> bool:
    """Vote on whether a square lattice is print or cloth.

    Print: its fundamentals dominate every line over the same tiles that neither a screen nor a sum
    of two explains, in step or not, and at least one of: the screens explain most of the energy, the
    (1,1) order is present, or the square is exact. Cloth has its strongest lines elsewhere. Long
    periods on an axis are text lines or rules and do not count.
    """
    tolerance = 0.35 / size
    others = [
        p.amplitude * max(p.coherence, 0.5)
        for p in peaks
        if not any(_belongs(p, g, tolerance) for g in lattices)
        and rosette_parents(p.f, lattices, tolerance) is None
        and not (on_axis(p.f) and np.hypot(*p.f) < 1 / _TEXT_PERIOD_PX)
        and _shares_tiles(p, lattice)
    ]
    dominance = lattice.strength / max(max(others, default=0.0), 1e-9)
    mine = sum(p.amplitude**2 for p in peaks if any(_belongs(p, g, tolerance) for g in lattices))
    share = mine / max(sum(p.amplitude**2 for p in peaks), 1e-9)
    diagonal = any(
        grid_distance(p.f, wrap(lattice.k1 + sign * lattice.k2)) < tolerance
        for p in peaks
        for sign in (1, -1)
    )
    exact = lattice.squareness_bins < 0.3
    if on_axis(lattice.k1) and not exact:
        return False
    return dominance > 0.6 and (share > 0.35 or diagonal or exact)


def _shares_tiles(peak: Peak, lattice: Lattice) -> bool:
    both = float(np.minimum(peak.weight, lattice.first.weight).sum())
    return both > 0.3 * float(lattice.first.weight.sum())


def on_axis(f: NDArray[np.float64], within_deg: float = 1.0) -> bool:
    """Whether a frequency lies along a pixel axis."""
    return bool(min(abs(f[0]), abs(f[1])) < math.tan(math.radians(within_deg)) * max(abs(f[0]), abs(f[1])))


def _belongs(peak: Peak, lattice: Lattice, tolerance: float) -> bool:
    return order_of(peak.f, lattice, tolerance, limit=4) is not None


def order_of(
    f: NDArray[np.float64], lattice: Lattice, tolerance: float, *, limit: int
) -> tuple[int, int] | None:
    """Integer order (m, n) of a line on a lattice, folded on the sampling grid, lowest first."""
    orders, total = _orders_up_to(limit)
    place = wrap(orders[:, :1] * lattice.k1 + orders[:, 1:] * lattice.k2)
    near = np.flatnonzero(grid_distance(f, place) < tolerance * (1 + total / 4))
    return (int(orders[near[0], 0]), int(orders[near[0], 1])) if near.size else None


@lru_cache(maxsize=8)
def _orders_up_to(limit: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Orders (m, n) with 1 <= |m| + |n| <= limit, lowest first, and their sums."""
    at = np.arange(-limit, limit + 1)
    orders = np.stack(np.meshgrid(at, at, indexing="ij"), axis=-1).reshape(-1, 2)
    total = np.abs(orders).sum(axis=1)
    kept = np.flatnonzero((total >= 1) & (total <= limit))
    kept = kept[np.argsort(total[kept], kind="stable")]
    return orders[kept], total[kept]
