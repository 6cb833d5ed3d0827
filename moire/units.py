"""Units of the trade and how angles are counted.

Pixels are addressed (row, column), rows run down the page. Frequencies are
``(fx, fy)`` in cycles per pixel along columns and rows, so ``fy`` points down.
Angles are counted on the page: from the +x axis (right), counter-clockwise, y up.
"""

from __future__ import annotations

import math

MM_PER_INCH = 25.4
CM_PER_INCH = 2.54


def lpi_to_lpcm(ruling_lpi: float) -> float:
    """Lines per inch to lines per centimetre (1 inch = 2.54 cm exactly)."""
    return ruling_lpi / CM_PER_INCH


def lpcm_to_lpi(ruling_lpcm: float) -> float:
    """Lines per centimetre to lines per inch (1 inch = 2.54 cm exactly)."""
    return ruling_lpcm * CM_PER_INCH


def fold_angle(angle_deg: float, period_deg: float) -> float:
    """Angle folded into [0, period): 90 for a square dot screen, 180 for a line screen."""
    folded = math.fmod(angle_deg, period_deg)
    if folded < 0:
        folded += period_deg
    return 0.0 if folded >= period_deg else folded + 0.0


def angle_distance(a_deg: float, b_deg: float, period_deg: float) -> float:
    """Smallest turn between two angles that are equal modulo `period_deg`."""
    gap = fold_angle(a_deg - b_deg, period_deg)
    return min(gap, period_deg - gap)


def to_cpi(fx_cpp: float, fy_cpp: float, ppi: tuple[float, float]) -> tuple[float, float]:
    """Cycles per pixel to cycles per inch, axis by axis."""
    return fx_cpp * ppi[0], fy_cpp * ppi[1]


def page_angle(fx: float, fy: float) -> float:
    """Direction of a frequency vector on the page in degrees, (-180, 180]; `fy` points down."""
    return math.degrees(math.atan2(-fy, fx))


def page_vector(frequency: float, angle_deg: float) -> tuple[float, float]:
    """Frequency vector ``(fx, fy)``, fy down, of a magnitude and a page angle."""
    angle = math.radians(angle_deg)
    return frequency * math.cos(angle), -frequency * math.sin(angle)
