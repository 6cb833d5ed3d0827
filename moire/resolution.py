"""Sampling rates as files store them, and which of them to believe."""

from __future__ import annotations

import struct
from typing import Any

# Exif's default where nothing is known (CIPA DC-008): never a measurement.
_PLACEHOLDER = 72.0
_CREDIBLE = (10.0, 20000.0)
_SNAP = 2e-5
Rate = tuple[float, float]


def per_inch(x: float, y: float, unit: int | None) -> Rate | None:
    """Stored densities to pixels per inch: unit 2 per inch, 3 per centimetre (TIFF 6.0), else unknown."""
    scale = {2: 1.0, 3: 2.54}.get(unit or 0)
    if scale is None:
        return None
    return _snapped((x * scale, y * scale))


def per_metre(x: float, y: float) -> Rate | None:
    """Pixels per metre, as PNG's pHYs chunk and BMP store them, to pixels per inch."""
    return _snapped((x * 0.0254, y * 0.0254))


def to_per_metre(ppi: Rate) -> tuple[int, int]:
    """Whole pixels per metre nearest to a rate."""
    return round(ppi[0] / 0.0254), round(ppi[1] / 0.0254)


def measured(rate: Rate | None) -> Rate | None:
    """The rate if it can be a measurement: not the placeholder of 72."""
    if rate is None or all(abs(r - _PLACEHOLDER) < 0.02 for r in rate):
        return None
    return rate


def stored_rate(image: Any) -> Rate | None:
    """Rate that an opened Pillow image states, by format, or None."""
    info, kind = image.info, image.format
    if kind == "PNG":
        return _png_rate(info)
    if kind == "JPEG":
        unit = {1: 2, 2: 3}.get(info.get("jfif_unit", 0))
        density = info.get("jfif_density")
        if unit and density:
            return per_inch(float(density[0]), float(density[1]), unit)
        return _exif_rate(image)
    if kind == "BMP":
        dpi = info.get("dpi")
        return None if dpi is None else _snapped((float(dpi[0]), float(dpi[1])))
    return _exif_rate(image)


def _png_rate(info: dict[str, Any]) -> Rate | None:
    dpi = info.get("dpi")
    return None if dpi is None else _snapped((float(dpi[0]), float(dpi[1])))


def _exif_rate(image: Any) -> Rate | None:
    exif = image.getexif()
    x, y = exif.get(282), exif.get(283)
    if not x or not y:
        return None
    return per_inch(float(x), float(y), exif.get(296, 2))


def jp2_rate(data: bytes) -> Rate | None:
    """Capture or display resolution box of a JPEG 2000 file (ISO/IEC 15444-1, I.5.3.7)."""
    for box in (b"resc", b"resd"):
        at = data.find(box)
        if at < 0 or len(data) < at + 14:
            continue
        vn, vd, hn, hd, ve, he = struct.unpack(">HHHHbb", data[at + 4 : at + 14])
        if vd and hd:
            return per_metre(hn / hd * 10.0**he, vn / vd * 10.0**ve)
    return None


def _snapped(rate: Rate) -> Rate | None:
    """A credible rate, whole where it differs from a whole number by rounding of the format only."""
    if not all(_CREDIBLE[0] <= r <= _CREDIBLE[1] for r in rate):
        return None
    x, y = (float(round(r)) if abs(r / round(r) - 1) <= _SNAP else float(r) for r in rate)
    return x, y
