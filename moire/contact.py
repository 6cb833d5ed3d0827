"""Pictures of a scan for the contact sheet of a batch, and its own report beside them.

Files are named by the scan's content, so that a second run finds them and two places of one
content share them.
"""

from __future__ import annotations

import base64
import math
import os
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from moire.figures import Box, Picture, crop, crop_box, overview, shown_rgb
from moire.model import Examination, Finding, Scan
from moire.outcome import Terms, counted
from moire.report import render_report
from moire.scanfile import write_bytes
from moire.vision import lightness

THUMB_PX = 240
CROP_PX = 192
# Pictures lie in folders of their digest's first letters, so that none holds too many files.
_PREFIX = 2


def picture_paths(content: str) -> dict[str, str]:
    """Paths of a scan's thumbnail, crop and report, relative to the sheet's folder."""
    under = f"{content[:_PREFIX]}/{content}"
    return {"thumb": f"scans/{under}.jpg", "crop": f"scans/{under}.png", "report": f"scans/{under}.html"}


def has_pictures(sheet: str, content: str) -> bool:
    """Whether a contact sheet's folder already holds everything of a scan."""
    # The report is written last.
    return os.path.exists(os.path.join(sheet, picture_paths(content)["report"]))


def keep_pictures(scan: Scan, found: Examination, sheet: str, *, terms: Terms) -> None:
    """Write a scan's thumbnail, its worst crop at 1:1 and its own report.

    Raises
    ------
    OutputRefused
    """
    paths = {name: Path(sheet, path) for name, path in picture_paths(found.sha256).items()}
    paths["thumb"].parent.mkdir(parents=True, exist_ok=True)
    rgb = shown_rgb(scan)
    write_bytes(_thumbnail(rgb), paths["thumb"], force=True)
    write_bytes(_data(crop(rgb, worst_box(scan, found, terms))), paths["crop"], force=True)
    page = render_report(master=scan, before=found, mending=None)
    write_bytes(page.encode("utf-8", "backslashreplace"), paths["report"], force=True)


def worst_box(scan: Scan, found: Examination, terms: Terms) -> Box:
    """Where a pattern is strongest: the box ``(x, y, width, height)`` of a 1:1 crop.

    The most visible finding that counts is demodulated over a grid of places; without one,
    the middle of the page.
    """
    seen = [f for f in found.findings if f.lines and counted(f, terms)]
    middle = (scan.width_px // 2, scan.height_px // 2)
    place = middle if not seen else _strongest(scan, max(seen, key=lambda f: f.visibility))
    return crop_box(scan.width_px, scan.height_px, place, side=CROP_PX)


def _strongest(scan: Scan, finding: Finding) -> tuple[int, int]:
    line = max(finding.lines, key=lambda each: each.amplitude)
    best, place = -1.0, (scan.width_px // 2, scan.height_px // 2)
    for x, y in _centres(scan.width_px, scan.height_px):
        left, top, width, height = crop_box(scan.width_px, scan.height_px, (x, y), side=CROP_PX)
        piece = scan.pixels[top : top + height, left : left + width]
        strength = _amplitude(piece, scan, (line.fx_cpp, line.fy_cpp))
        if strength > best:
            best, place = strength, (x, y)
    return place


def _centres(width: int, height: int, *, most: int = 48) -> list[tuple[int, int]]:
    """Middles of at most about `most` crops, spread evenly over a page."""
    step = max(CROP_PX, math.sqrt(width * height / most))
    columns, rows = max(1, round(width / step)), max(1, round(height / step))
    return [
        (round((i + 0.5) * width / columns), round((j + 0.5) * height / rows))
        for j in range(rows)
        for i in range(columns)
    ]


def _amplitude(piece: NDArray[np.generic], scan: Scan, f: tuple[float, float]) -> float:
    """Size of one spectral line in a piece of a scan, Hann-windowed, mean removed."""
    from dataclasses import replace

    from moire.samples import rgb_codes

    light = lightness(rgb_codes(replace(scan, pixels=piece, alpha=None)))
    rows, columns = light.shape
    window = np.outer(np.hanning(rows + 2)[1:-1], np.hanning(columns + 2)[1:-1])
    wave_y = np.exp(-2j * np.pi * f[1] * np.arange(rows))
    wave_x = np.exp(-2j * np.pi * f[0] * np.arange(columns))
    flat = light - np.average(light, weights=window)
    return float(abs(wave_y @ (flat * window) @ wave_x) / window.sum())


def _thumbnail(rgb: NDArray[np.uint8]) -> bytes:
    """Small JPEG; reduced in two steps, the first quick, the second without alias."""
    import cv2

    share = 2 * THUMB_PX / max(rgb.shape[:2])
    if share < 1:
        rgb = np.asarray(cv2.resize(rgb, None, fx=share, fy=share, interpolation=cv2.INTER_AREA), np.uint8)
    small = overview(rgb, limit=THUMB_PX)
    if small.uri.startswith("data:image/jpeg"):
        return _data(small)
    pixels = np.asarray(cv2.imdecode(np.frombuffer(_data(small), np.uint8), cv2.IMREAD_COLOR))
    return cv2.imencode(".jpg", pixels, [cv2.IMWRITE_JPEG_QUALITY, 85])[1].tobytes()


def _data(picture: Picture) -> bytes:
    return base64.b64decode(picture.uri.split(",", 1)[1])
