"""Settling folds with a second scan of the same original at another rate or turned.

The true lattice is one; each scan folds it by its own rate. Only the right pair of orders
gives the same true vector in both, up to one turn of the sheet that all screens share. The
odds are Bayes': a pair of orders must beat the chance that two unrelated candidates meet.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from moire.folding import Unfolded

# Rates of two scans agree to about a thousandth (common practice, no source).
_SCALE_SD = 0.0008
_TURN_SD_DEG, _TURN_LIMIT_DEG, _LEVEL_SD_DEG = 0.08, 25.0, 1.0
_UNSEEN = 0.02
_DOUBT = 0.02
# Chance density of a candidate over ln(ruling), 40 to 320 lpi, and over a quarter turn.
_CHANCE = 1 / (math.log(8) * 90)
_SURPRISE = 1 / (2 * math.pi * _SCALE_SD * _TURN_SD_DEG) / _CHANCE

Options = tuple[Unfolded, ...]


def settle(
    first: Sequence[Options], second: Sequence[Options]
) -> tuple[tuple[Options, ...], tuple[bool, ...], float | None]:
    """Candidates of the first scan's screens weighed by those of the second.

    Parameters
    ----------
    first, second : sequence of tuple of Unfolded
        One tuple for each screen seen in each scan.

    Returns
    -------
    candidates : tuple of tuple of Unfolded
        Of the first scan, with new probabilities, most probable first.
    seen_again : tuple of bool
        Whether the second scan most probably shows the screen too; otherwise it says nothing of it.
    turn_deg : float or None
        Turn from the first to the second scan, counter-clockwise, estimated with the orders; a
        square lattice leaves it open by quarter turns. None where no screen is common.
    """
    hypotheses: list[tuple[float, float | None, list[NDArray[np.float64]]]] = []
    for turn in (None, *_possible_turns(first, second)):
        odds = [_odds(options, second, turn) for options in first]
        chance = 0.0 if turn is None else _log_turn(turn)
        hypotheses.append((chance + sum(math.log(o.sum()) for o in odds if o.size), turn, odds))
    best = max(h[0] for h in hypotheses)
    weights = [math.exp(h[0] - best) for h in hypotheses]
    out, seen_again = [], []
    for i, options in enumerate(first):
        if not options:
            out.append(options)
            seen_again.append(False)
            continue
        unseen = float(_UNSEEN * _priors(options).sum())
        chance = sum(w * unseen / float(h[2][i].sum()) for w, h in zip(weights, hypotheses, strict=True))
        seen_again.append(chance / sum(weights) < 0.5)
        mixed = sum(w * h[2][i] / h[2][i].sum() for w, h in zip(weights, hypotheses, strict=True))
        ranked = sorted(zip(mixed / mixed.sum(), options, strict=True), key=lambda pair: -pair[0])
        out.append(tuple(replace(o, probability=float(p)) for p, o in ranked))
    return tuple(out), tuple(seen_again), max(hypotheses, key=lambda h: h[0])[1]


def _possible_turns(first: Sequence[Options], second: Sequence[Options]) -> list[float]:
    """Turns that bring some candidate of one scan onto one of the other, few at a place."""
    found: list[float] = []
    for a in (o for options in first for o in options):
        for b in (o for options in second for o in options):
            if abs(math.log(a.ruling_lpi / b.ruling_lpi)) < 4 * _SCALE_SD:
                turn = (b.angle_deg - a.angle_deg + 45) % 90 - 45
                if abs(turn) < _TURN_LIMIT_DEG and all(abs(turn - t) > _TURN_SD_DEG / 4 for t in found):
                    found.append(turn)
    return found


def _odds(options: Options, second: Sequence[Options], turn: float | None) -> NDArray[np.float64]:
    """Odds of each candidate: seen again in the second scan, or not."""
    prior = _priors(options)
    if turn is None:
        return prior * _UNSEEN
    seen = np.zeros(len(options))
    for others in second:
        if not others:
            continue
        for i, option in enumerate(options):
            ratio = np.array([math.log(o.ruling_lpi / option.ruling_lpi) for o in others])
            angle = np.array([o.angle_deg for o in others])
            gap = (angle - option.angle_deg - turn + 45) % 90 - 45
            fit = np.exp(-0.5 * (ratio / _SCALE_SD) ** 2 - 0.5 * (gap / _TURN_SD_DEG) ** 2)
            seen[i] = max(seen[i], float((_priors(others) * fit).sum()))
    return np.asarray(prior * (_UNSEEN + _SURPRISE * seen))


def _priors(options: Options) -> NDArray[np.float64]:
    """What one scan says, with some doubt about it."""
    given = np.array([o.probability for o in options])
    return (1 - _DOUBT) * given + _DOUBT / max(len(given), 1)


def _log_turn(turn: float) -> float:
    """Log chance of a turn within its own uncertainty: most sheets lie level."""
    level = math.exp(-0.5 * (turn / _LEVEL_SD_DEG) ** 2) / (_LEVEL_SD_DEG * math.sqrt(2 * math.pi))
    return math.log((0.5 * level + 0.5 / (2 * _TURN_LIMIT_DEG)) * 2 * _TURN_SD_DEG)
