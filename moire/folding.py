"""Folding: where a true frequency lands on a sampling grid, and which true ones could have.

A sampled line at ``a`` may come from any ``a + n R`` with whole numbers n per axis. With
equal rates on both axes a square screen folds to a square lattice whatever its order, so
geometry alone cannot tell; usual rulings, usual angles and the amplitude that lens and
aperture leave can weigh the candidates, and a second scan settles them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import product

import numpy as np
from numpy.typing import NDArray

from moire.units import angle_distance, fold_angle, page_angle

# Rulings in lines per inch that the trade uses most (common practice, no source; 40, 48, 60 and
# 70 lines/cm from ISO 12647-2/-3, value from memory).
USUAL_RULINGS_LPI = (55, 60, 65, 75, 85, 100, 101.6, 110, 120, 121.92, 133, 150, 152.4, 175, 177.8, 200)
USUAL_ANGLES_DEG = ((45.0, 0.45), (0.0, 0.13), (15.0, 0.13), (75.0, 0.13))
_RULING_RANGE = (40.0, 320.0)
_REACH = 3
# Without a contrast to go by, most scans are not folded (common practice, no source).
_UNSEEN_FOLD = 3.0
# Inks of one print share a ruling to a few percent (ISO 12647-2: up to 6 % apart, value from memory).
_COMMON_RULING_SD = 0.05
# The terms of a score are not independent; power of the odds that makes them honest on the prints
# used for tuning.
_TEMPER = 0.6
# Odds against each fold, as a power of e: scans are meant to be fine enough.
_FOLD_COST = 0.7
# What mixed tones and spreading ink take of the contrast that the mean tone promises, ln; as seen on
# the prints used for tuning.
_USUAL_LOSS = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class Unfolded:
    """A true lattice vector that would be seen where one was observed."""

    fx_cpi: float
    fy_cpi: float
    ruling_lpi: float
    angle_deg: float
    order: tuple[int, int]
    probability: float


def fold(
    frequency: NDArray[np.float64], ppi: tuple[float, float]
) -> tuple[NDArray[np.float64], tuple[int, int]]:
    """Alias of a true frequency and its order.

    Parameters
    ----------
    frequency : ndarray, shape (2,)
        ``(fx, fy)`` in cycles per inch.
    ppi : (float, float)
        Sampling rate per axis.

    Returns
    -------
    alias : ndarray, shape (2,)
        In [-R/2, R/2), cycles per inch.
    order : (int, int)
        ``frequency = alias + order * ppi``.

    Notes
    -----
    Sampling theorem on a lattice: Petersen and Middleton, Inf. Control 5 (1962) 279.
    """
    rate = np.asarray(ppi, float)
    order = np.floor(np.asarray(frequency, float) / rate + 0.5).astype(int)
    return frequency - order * rate, (int(order[0]), int(order[1]))


def unfold(
    k_cpp: NDArray[np.float64], ppi: tuple[float, float], *, contrast: float | None = None, alone: bool = True
) -> tuple[Unfolded, ...]:
    """True screens that could have folded to an observed vector, most probable first.

    Parameters
    ----------
    k_cpp : ndarray, shape (2,)
        Observed fundamental in cycles per pixel.
    ppi : (float, float)
        Sampling rate per axis.
    contrast : float or None
        Observed modulation (amplitude over mean, linear light, 0..1) over the one expected
        of a screen of that ink and tone without any loss; None if not measured.
    alone : bool
        Whether no other screen is there; otherwise other inks may explain a lower contrast.

    Returns
    -------
    tuple of Unfolded
        Probabilities sum to 1 over the candidates between 40 and 320 lpi.
    """
    rate = np.asarray(ppi, float)
    found: list[tuple[float, Unfolded]] = []
    for order in product(range(-_REACH, _REACH + 1), repeat=2):
        true = (k_cpp + np.array(order)) * rate
        ruling = float(np.hypot(*true))
        if not _RULING_RANGE[0] <= ruling <= _RULING_RANGE[1]:
            continue
        angle = fold_angle(page_angle(*true), 90)
        score = _log_ruling(ruling) + _log_angle(angle) - _FOLD_COST * (abs(order[0]) + abs(order[1]))
        if contrast is None and order != (0, 0):
            score -= _UNSEEN_FOLD
        if contrast is not None and contrast > 0:
            loss = np.log(contrast / _transfer_cpi(true, rate)) + _USUAL_LOSS
            score -= 0.5 * (loss / (0.4 if alone or loss > 0 else 0.9)) ** 2
        entry = Unfolded(
            fx_cpi=float(true[0]), fy_cpi=float(true[1]), ruling_lpi=ruling, angle_deg=angle,
            order=(order[0], order[1]), probability=0.0,
        )  # fmt: skip
        found.append((float(score), entry))
    if not found:
        return ()
    scores = np.array([s for s, _ in found])
    odds = np.exp(scores - scores.max())
    odds /= odds.sum()
    ranked = sorted(zip(odds, (u for _, u in found), strict=True), key=lambda pair: -pair[0])
    return tuple(
        Unfolded(
            fx_cpi=u.fx_cpi, fy_cpi=u.fy_cpi, ruling_lpi=u.ruling_lpi, angle_deg=u.angle_deg,
            order=u.order, probability=float(p),
        )
        for p, u in ranked
    )  # fmt: skip


def agree(prints: Sequence[tuple[Unfolded, ...]]) -> tuple[tuple[Unfolded, ...], ...]:
    """Candidates of several screens of one print, weighed by a ruling that they have in common.

    Parameters
    ----------
    prints : sequence of tuple of Unfolded
        One tuple for each screen, as from `unfold`.

    Returns
    -------
    tuple of tuple of Unfolded
        With probabilities given the most likely common ruling, most probable first.
    """
    filled = [options for options in prints if options]
    if len(filled) < 2:
        return tuple(prints)

    def fit(option: Unfolded, ruling: float) -> float:
        return option.probability * math.exp(
            -0.5 * (math.log(option.ruling_lpi / ruling) / _COMMON_RULING_SD) ** 2
        )

    def support(ruling: float) -> float:
        return sum(math.log(1e-9 + sum(fit(o, ruling) for o in options)) for options in filled)

    common = max((o.ruling_lpi for options in filled for o in options), key=support)
    out = []
    for options in prints:
        # A screen that fits no common ruling keeps some of its own mind.
        odds = [0.98 * fit(o, common) + 0.02 * o.probability for o in options]
        ranked = sorted(zip(odds, options, strict=True), key=lambda pair: -pair[0])
        out.append(tuple(replace(o, probability=p / sum(odds)) for p, o in ranked))
    return tuple(out)


def temper(options: tuple[Unfolded, ...]) -> tuple[Unfolded, ...]:
    """Candidates with probabilities drawn together, so that of those called 0.8 four in five are right."""
    if not options:
        return ()
    odds = np.array([o.probability for o in options]) ** _TEMPER
    return tuple(replace(o, probability=float(p)) for o, p in zip(options, odds / odds.sum(), strict=True))


def _log_ruling(ruling: float) -> float:
    usual = np.array(USUAL_RULINGS_LPI)
    spread = 0.008 * usual
    bell = np.exp(-0.5 * ((ruling - usual) / spread) ** 2) / (spread * np.sqrt(2 * np.pi))
    flat = 1 / (_RULING_RANGE[1] - _RULING_RANGE[0])
    return float(np.log(0.6 * bell.mean() + 0.4 * flat))


def _log_angle(angle: float) -> float:
    bell = sum(
        w * np.exp(-0.5 * (angle_distance(angle, a, 90) / 1.5) ** 2) / (1.5 * np.sqrt(2 * np.pi))
        for a, w in USUAL_ANGLES_DEG
    )
    return float(np.log(0.6 * bell + 0.4 / 90))


def _transfer_cpi(true: NDArray[np.float64], rate: NDArray[np.float64]) -> float:
    """MTF of a typical scanner (box aperture, 0.4 px lens) and 20 um of ink spread."""
    f = true / rate
    ruling = float(np.hypot(*true))
    spread = np.exp(-2 * np.pi**2 * (0.020 / 25.4 * ruling) ** 2)
    return max(
        float(abs(np.sinc(f[0]) * np.sinc(f[1])) * np.exp(-2 * np.pi**2 * 0.4**2 * (f @ f)) * spread), 0.003
    )
