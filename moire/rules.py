"""Rules of the trade about scanning halftones, weighed by computation for one original."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.originals import Original
from moire.plans import Rule
from moire.units import angle_distance

# Common practice, no source.
_MARGIN = 0.02
_TIMES_ON, _TIMES_OFF = (2.0, 3.0, 4.0), (2.25, 2.75, 3.25)
_TIMES_A_THREAD = 2.2
_LOWEST, _HIGHEST, _STEPS = 0.6, 16.0, 481
_NEAR_AXIS_DEG = 1.0
_LOCKED, _LOCK_MARGIN = 0.5, 0.01


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Curve:
    """Visibility of the strongest beat at rates of direct scanning, both shape (n,), rising in ppi."""

    ppi: NDArray[np.float64]
    visibility: NDArray[np.float64]

    @property
    def free_from(self) -> float | None:
        """The rate from which no beat is seen any more, None if there is none."""
        seen = np.flatnonzero(self.visibility >= 1)
        first = seen[-1] + 1 if len(seen) else 0
        return float(self.ppi[first]) if first < len(self.ppi) else None

    def near(self, ppi: float, margin: float) -> float:
        """The worst within a share `margin` of a rate."""
        inside = np.abs(self.ppi / ppi - 1) <= margin + 1e-9
        return float(self.visibility[inside].max(initial=0.0))


def curve_rates(original: Original) -> NDArray[np.float64]:
    """Rates from which the rules can be weighed, from below the finest lattice to far above it."""
    return np.geomspace(_LOWEST, _HIGHEST, _STEPS) * original.finest_lpi


def multiple_rates(original: Original) -> NDArray[np.float64]:
    """Whole multiples of the ruling, and rates between them."""
    return np.array(sorted((*_TIMES_ON, *_TIMES_OFF))) * original.finest_lpi


def weigh_rules(original: Original, curve: Curve, exact: Curve) -> tuple[Rule, ...]:
    """Which rules hold here.

    Parameters
    ----------
    original : Original
    curve : Curve
        At the rates of `curve_rates`, with the scanner's uncertainty of scale.
    exact : Curve
        At the rates of `multiple_rates`, at exact scale.
    """
    f = original.finest_lpi
    if original.is_cloth:
        at = curve.near(_TIMES_A_THREAD * f, _MARGIN)
        return (
            Rule(
                rule="a little over two samples a thread",
                agrees=at < 1,
                words=f"at {_TIMES_A_THREAD * f:.0f} ppi the strongest beat is {at:.1f} x the eye's "
                "threshold: harmonics and bindings of the threads fold too",
            ),
        )
    return (_twice(f, curve), _multiples(original, f, curve, exact), _several_times(f, curve.free_from))


def _twice(f: float, curve: Curve) -> Rule:
    at = curve.near(2 * f, _MARGIN)
    return Rule(
        rule="twice the ruling",
        agrees=at < 1,
        words=f"at {2 * f:.0f} ppi the strongest beat is {at:.1f} x the eye's threshold; the rule is for "
        "continuous-tone originals that will be screened, not for prints that are",
    )


def _multiples(original: Original, f: float, curve: Curve, exact: Curve) -> Rule:
    on, off = (max(exact.near(k * f, 0.0) for k in times) for times in (_TIMES_ON, _TIMES_OFF))
    level = all(angle_distance(p.angle_deg, 0, 90) <= _NEAR_AXIS_DEG for p in original.planned)
    agrees = on < max(1.0, _LOCKED * off)
    if level and agrees:
        real = max(curve.near(k * f, _LOCK_MARGIN) for k in _TIMES_ON)
        words = (
            f"at 0 degrees and exact scale it locks grid and screen ({on:.1f} x the eye's threshold), "
            f"1 % off scale it does not ({real:.1f} x)"
        )
    else:
        words = (
            f"it helps only at 0 degrees and exact scale: here whole multiples show {on:.1f} x the eye's "
            f"threshold, rates between {off:.1f} x"
        )
    return Rule(rule="a whole multiple of the ruling", agrees=agrees, words=words)


def _several_times(f: float, free_from: float | None) -> Rule:
    if free_from is None:
        words = "no rate up to sixteen times the ruling is free of visible beats at this viewing condition"
    else:
        words = f"no beat is seen from {free_from:.0f} ppi up, {free_from / f:.1f} times the ruling"
    return Rule(
        rule="2.5 to 4 times the ruling, then reduce",
        agrees=free_from is not None and free_from <= 4 * f,
        words=words,
    )
