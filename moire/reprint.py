"""Reprinting: beats of the lines left in a scan with the screen of the next print."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from moire.dots import dot_coefficients
from moire.judging import Judged
from moire.model import Viewing
from moire.naming import name_beat
from moire.originals import Original
from moire.plans import Beat
from moire.prediction import Capture
from moire.units import MM_PER_INCH, lpi_to_lpcm, page_angle, page_vector
from moire.vision import contrast_sensitivities, cycles_per_degree

_LINES, _REACH, _LISTED = 12, 2, 4
_COARSER_THAN = 0.7
_LEAST_SWING, _LEAST_LISTED = 0.1, 0.3
_TONES = (0.2, 0.4, 0.6, 0.8)
_STEP = 0.01


def reprint_beats(
    judged: Judged,
    original: Original,
    capture: Capture,
    i: int,
    screen: tuple[float, float],
    viewing: Viewing,
) -> tuple[Beat, ...]:
    """Beats that a reprint at the same size would show in the hand.

    Parameters
    ----------
    judged, original, capture
        Lines of the scan.
    i : int
        Which rate.
    screen : (float, float)
        Ruling in lines per inch and angle in degrees of the second screen.
    viewing : Viewing
        Of the reprint.

    Notes
    -----
    A line of the scan modulates the tone t that the second screen prints; its order (p, q) then
    carries side lines at ``g(p, q) +- f`` of relative strength dc(p, q)/dt.
    """
    ruling, angle = screen
    basis = np.array([page_vector(ruling, angle + turn) for turn in (0, 90)])
    slopes = _tone_slopes()
    swing = judged.lines.amplitude[i]
    found: list[Beat] = []
    for line in np.argsort(-swing)[:_LINES]:
        if swing[line] < _LEAST_SWING:
            break
        f = judged.lines.seen_cpi[i, line]
        for (p, q), slope in slopes.items():
            beat = np.array((p, q)) @ basis - f
            frequency = float(np.hypot(*beat))
            if frequency > _COARSER_THAN * ruling:
                continue
            amplitude = float(swing[line]) * slope
            u = cycles_per_degree(frequency / MM_PER_INCH, viewing.distance_mm)
            contrast = min(1.0, 3 * amplitude / (float(judged.lines.mean[i, line]) + 16))
            seen = contrast * float(contrast_sensitivities(np.array([u]))[0])
            if seen < _LEAST_LISTED:
                continue
            found.append(
                _beat(
                    name_beat(judged, original, capture, i, int(line)), (p, q), beat, amplitude, seen, screen
                )
            )
    return tuple(sorted(found, key=lambda b: -b.visibility)[:_LISTED])


def _beat(
    of: Beat,
    order: tuple[int, int],
    f: NDArray[np.float64],
    amplitude: float,
    seen: float,
    screen: tuple[float, float],
) -> Beat:
    frequency = float(np.hypot(*f))
    direction = page_angle(float(f[0]), float(f[1]))
    sigma = of.frequency_sigma_cpi
    moving = frequency > 1e-3
    return Beat(
        orders=of.orders,
        rate_order=of.rate_order,
        capture_order=of.capture_order,
        reprint_orders=order,
        frequency_cpi=frequency,
        frequency_sigma_cpi=sigma,
        period_mm=MM_PER_INCH / frequency if moving else None,
        period_px=None,
        period_mm_range=(MM_PER_INCH / (frequency + sigma), MM_PER_INCH / (frequency - sigma))
        if sigma < frequency
        else None,
        direction_deg=-((90 - direction) % 180 - 90),
        amplitude=amplitude,
        visibility=seen,
        source="reprint",
        words=f"{of.words}, against ({order[0]},{order[1]}) of the new screen "
        f"({screen[0]:g} lpi, {lpi_to_lpcm(screen[0]):.1f}/cm)",
    )


@lru_cache(maxsize=1)
def _tone_slopes() -> dict[tuple[int, int], float]:
    """Largest |dc(p, q)/dt| of a round dot over the middle tones, for low orders."""
    low = dot_coefficients("disc", tuple(t - _STEP for t in _TONES), 8)
    high = dot_coefficients("disc", tuple(t + _STEP for t in _TONES), 8)
    slope = np.abs(high - low).max(axis=0) / (2 * _STEP)
    reach = range(-_REACH, _REACH + 1)
    return {(p, q): float(slope[q, p]) for p in reach for q in reach if 1 <= abs(p) + abs(q) <= _REACH}
