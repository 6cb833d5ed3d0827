"""Rules of the trade about scanning halftones, weighed by computation for one original."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from moire.originals import Original
from moire.plans import Rule
from moire.units import angle_distance

# Common practice, no source.
_WITHIN = np.array([0.98, 1.0, 1.02])
_NEAR_AXIS_DEG = 1.0
_LOCKED = 0.5

Curve = Callable[[NDArray[np.float64]], NDArray[np.float64]]


def weigh_rules(original: Original, seen_at: Curve, free_from: float | None) -> tuple[Rule, ...]:
    """Which rules hold here.

    Parameters
    ----------
    original : Original
    seen_at : callable
        Visibility of the strongest beat at rates, array to array.
    free_from : float or None
        Rate from which no beat is seen any more.
    """
    f = original.finest_lpi
    if original.is_cloth:
        at = float(seen_at(2.2 * f * _WITHIN).max())
        return (
            Rule(
                rule="a little over two samples a thread",
                agrees=at < 1,
                words=f"at {2.2 * f:.0f} ppi the strongest beat is {at:.1f} x the eye's threshold: harmonics "
                "and bindings of the threads fold too",
            ),
        )
    return (_twice(f, seen_at), _multiples(original, f, seen_at), _several_times(f, free_from))


def _twice(f: float, seen_at: Curve) -> Rule:
    at = float(seen_at(2 * f * _WITHIN).max())
    return Rule(
        rule="twice the ruling",
        agrees=at < 1,
        words=f"at {2 * f:.0f} ppi the strongest beat is {at:.1f} x the eye's threshold; the rule is for "
        "continuous-tone originals that will be screened, not for prints that are",
    )


def _multiples(original: Original, f: float, seen_at: Curve) -> Rule:
    on, off = (float(seen_at(k * f).max()) for k in (np.array([2.0, 3.0, 4.0]), np.array([2.25, 2.75, 3.25])))
    level = all(angle_distance(p.angle_deg, 0, 90) <= _NEAR_AXIS_DEG for p in original.planned)
    same = len({round(p.frequencies_lpi[0], 3) for p in original.planned}) == 1
    agrees = level and same and on < _LOCKED * off
    if level and same:
        words = (
            "the screen lies along the grid, so a whole multiple locks them: only at exact scale and angle"
        )
    else:
        words = (
            "it locks grid and screen only at 0 degrees: here whole multiples show "
            f"{on:.1f} x the eye's threshold, rates between {off:.1f} x"
        )
    return Rule(rule="a whole multiple of the ruling", agrees=agrees, words=words)


def _several_times(f: float, free_from: float | None) -> Rule:
    if free_from is None:
        words = "no rate up to six times the ruling is free of visible beats at this viewing condition"
    else:
        words = f"no beat is seen from {free_from:.0f} ppi up, {free_from / f:.1f} times the ruling"
    return Rule(
        rule="2.5 to 4 times the ruling, then reduce",
        agrees=free_from is not None and free_from <= 4 * f,
        words=words,
    )
