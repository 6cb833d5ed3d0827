"""Sampling rates as files store them, and which of them count as a measurement.

Every format stores a rate in its own unit and with its own rounding; here they all
become ``(x, y)`` in pixels per inch.
"""

from __future__ import annotations

import math
from collections.abc import Iterable
from typing import Any

from moire.errors import BadRequest
from moire.model import PpiSource
from moire.units import CM_PER_INCH

Ppi = tuple[float, float]

LOWEST_PPI, HIGHEST_PPI = 10.0, 20000.0
_METRE_PER_INCH = CM_PER_INCH / 100
_PLACEHOLDER: Ppi = (72.0, 72.0)
_SNAP = 2e-5


def from_unit(x: Any, y: Any, unit: Any) -> Ppi | None:
    """Rate from the TIFF tags XResolution, YResolution and ResolutionUnit.

    Parameters
    ----------
    x, y : rational, float or None
        A rational may be a ``(numerator, denominator)`` pair.
    unit : int
        2 = inch, 3 = centimetre; anything else, 1 among them, says only the pixel's shape.

    Returns
    -------
    (float, float) or None
        Pixels per inch; None if not credible (10 to 20000 on both axes).

    References
    ----------
    TIFF 6.0 (1992), section 8; EXIF uses the same three tags.
    """
    scale = {2: 1.0, 3: CM_PER_INCH}.get(unit)
    return None if scale is None else _credible(_number(x) * scale, _number(y) * scale)


def from_metre(x: float, y: float) -> Ppi | None:
    """Rate from whole pixels per metre (PNG pHYs, BMP), None if not credible.

    A whole metre count is too coarse for most rates: 150 ppi is stored as 5906, which is
    150.0124 ppi. So a whole ppi that would be stored as this very count is the one meant.
    """
    return _credible(*(_from_metre(float(rate)) for rate in (x, y)))


def to_metre(ppi: Ppi) -> tuple[int, int]:
    """Pixels per metre, nearest whole numbers, as PNG pHYs stores them (ISO/IEC 15948)."""
    return round(ppi[0] / _METRE_PER_INCH), round(ppi[1] / _METRE_PER_INCH)


def sharper(coarse: Ppi | None, fine: Ppi | None) -> Ppi | None:
    """The rate to believe of a JFIF density, whole numbers only, and an EXIF rational.

    The density stands, but for a rational that rounds to it and so only adds decimals,
    and where the density is missing or a placeholder.
    """
    if coarse and fine and all(abs(c - f) <= 0.5 for c, f in zip(coarse, fine, strict=True)):
        return fine
    return first_measured((coarse, fine))


def first_measured(stored: Iterable[Ppi | None]) -> Ppi | None:
    """First rate that is no placeholder; failing that the first of all; None if all are None."""
    known = [ppi for ppi in stored if ppi is not None]
    return next((ppi for ppi in known if ppi != _PLACEHOLDER), known[0] if known else None)


def settle(option: Ppi | None, in_file: Ppi | None) -> tuple[Ppi | None, PpiSource | None]:
    """The rate to work with and where it came from: the option, else a measurement in the file.

    A stored 72 x 72 is what software writes when it does not know, so it counts as unknown.

    Raises
    ------
    BadRequest
        If the option is not a sampling rate between 10 and 20000 ppi.
    """
    if option is not None:
        if not all(LOWEST_PPI <= rate <= HIGHEST_PPI for rate in option):
            raise BadRequest(f"ppi {option[0]:g} x {option[1]:g}: give 10 to 20000 pixels per inch")
        return (float(option[0]), float(option[1])), "option"
    if in_file is None or in_file == _PLACEHOLDER:
        return None, None
    return in_file, "file"


def _credible(x: float, y: float) -> Ppi | None:
    if not all(math.isfinite(rate) and LOWEST_PPI <= rate <= HIGHEST_PPI for rate in (x, y)):
        return None
    return _snapped(x), _snapped(y)


def _snapped(rate: float) -> float:
    whole = float(round(rate))
    return whole if abs(rate - whole) <= _SNAP * rate else rate


def _from_metre(rate: float) -> float:
    ppi = rate * _METRE_PER_INCH
    if not math.isfinite(ppi):
        return 0.0
    whole = round(ppi)
    return float(whole) if round(whole / _METRE_PER_INCH) == round(rate) else ppi


def _number(value: Any) -> float:
    try:
        return value[0] / value[1] if isinstance(value, tuple) else float(value)
    except (TypeError, ValueError, ZeroDivisionError, IndexError):
        return 0.0
