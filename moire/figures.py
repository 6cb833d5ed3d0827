"""Pictures for reports: overviews, 1:1 crops and marked spectra, as bytes and SVG."""

from __future__ import annotations

import base64
import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from moire.model import Finding, Kind, Scan
from moire.resample import reduce_picture
from moire.samples import rgb_codes
from moire.spectrum import tile_spectrum
from moire.vision import lightness

OVERVIEW_PX = 1600
CROP_PX = 192
_SPECTRUM_PX = 256
_MARKS: dict[Kind, tuple[str, str]] = {
    "halftone": ("S", "circle"),
    "alias": ("A", "diamond"),
    "rosette": ("R", "square"),
    "weave": ("W", "square"),
    "banding": ("B", "triangle"),
    "block-grid": ("G", "square"),
    "laid-lines": ("L", "triangle"),
    "stochastic": ("F", "circle"),
    "display-grid": ("D", "diamond"),
    "content": ("C", "cross"),
    "unexplained": ("U", "cross"),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Picture:
    """An encoded picture for a page: a data URI, its size, and whether it was reduced."""

    uri: str
    width: int
    height: int
    reduced: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Mark:
    """A sign on a spectrum: centre in percent of its side, shape, label ('' for a harmonic)."""

    x: float
    y: float
    shape: Literal["circle", "diamond", "square", "triangle", "cross"]
    label: str


@dataclass(frozen=True, slots=True, kw_only=True)
class SpectrumFigure:
    """A spectrum picture, the marks over it, and its axes: half-width and unit."""

    picture: Picture
    marks: tuple[Mark, ...]
    reach: tuple[float, float]
    unit: str


def shown_rgb(scan: Scan) -> NDArray[np.uint8]:
    """8-bit RGB of a scan for showing, shape (rows, columns, 3)."""
    codes = np.rint(np.clip(rgb_codes(scan), 0, 255)).astype(np.uint8)
    return np.repeat(codes, 3, axis=2) if codes.shape[2] == 1 else codes


def overview(rgb: NDArray[np.uint8], *, limit: int = OVERVIEW_PX) -> Picture:
    """The whole picture, reduced without alias if it is larger than `limit` pixels."""
    rows, columns = rgb.shape[:2]
    share = limit / max(rows, columns)
    if share >= 1:
        return _picture(rgb, reduced=False)
    size = (max(1, round(columns * share)), max(1, round(rows * share)))
    small = reduce_picture(rgb.astype(np.float32) / np.float32(255), *size)
    return _picture(np.rint(small * 255).astype(np.uint8), reduced=True)


def crop(rgb: NDArray[np.uint8], centre: tuple[int, int], *, side: int = CROP_PX) -> Picture:
    """A square at 1:1 around a centre (x, y), moved inside the picture; always lossless."""
    rows, columns = rgb.shape[:2]
    x = int(np.clip(centre[0] - side // 2, 0, max(0, columns - side)))
    y = int(np.clip(centre[1] - side // 2, 0, max(0, rows - side)))
    return _encoded(np.ascontiguousarray(rgb[y : y + side, x : x + side]), "png", reduced=False)


def labels(findings: Sequence[Finding]) -> tuple[str, ...]:
    """A short label for each finding: S1, S2 ... screens, A alias, R rosette, B banding ..."""
    count: dict[str, int] = {}
    out = []
    for finding in findings:
        letter = _MARKS[finding.kind][0]
        count[letter] = count.get(letter, 0) + 1
        out.append(f"{letter}{count[letter]}")
    return tuple(out)


def spectrum_figures(scans: Sequence[Scan], findings: Sequence[Finding]) -> tuple[SpectrumFigure, ...]:
    """Spectra of several states of one scan on one grey scale, with the lines found marked."""
    planes = [_log_spectrum(scan) for scan in scans]
    low = float(np.percentile(planes[0], 2))
    high = float(np.percentile(planes[0], 99.97))
    # Moderate contrast: a full-range grating on screen can trouble photosensitive people.
    greys = [np.clip((p - low) / max(high - low, 1e-6), 0, 1) * 165 + 45 for p in planes]
    out = []
    for scan, grey in zip(scans, greys, strict=True):
        rate = scan.ppi
        reach = (0.5, 0.5) if rate is None else (rate[0] / 2, rate[1] / 2)
        unit = "cycles/pixel" if rate is None else "cycles/inch"
        rgb = np.repeat(np.rint(grey).astype(np.uint8)[..., None], 3, axis=2)
        picture = _encoded(rgb, "png", reduced=False)
        out.append(SpectrumFigure(picture=picture, marks=_marks(findings), reach=reach, unit=unit))
    return tuple(out)


def _marks(findings: Sequence[Finding]) -> tuple[Mark, ...]:
    out = []
    for label, finding in zip(labels(findings), findings, strict=True):
        shape = _MARKS[finding.kind][1]
        for i, line in enumerate(finding.lines):
            fx, fy = line.fx_cpp, line.fy_cpp
            # One of the two mirror images is marked, so that the other can be seen bare.
            if fy > 0 or (fy == 0 and fx < 0):
                fx, fy = -fx, -fy
            fundamental = line.order in ((1, 0), (0, 1)) or (line.order is None and i == 0)
            at = (100 * (fx + 0.5), 100 * (fy + 0.5))
            out.append(Mark(x=at[0], y=at[1], shape=shape, label=label if fundamental else ""))  # type: ignore[arg-type]
    return tuple(out)


def _log_spectrum(scan: Scan) -> NDArray[np.float32]:
    plane = lightness(rgb_codes(scan))
    short = min(plane.shape)
    size = max(8, 2 ** min(int(math.log2(_SPECTRUM_PX)), int(math.log2(max(short, 8)))))
    if short < size:
        plane = np.pad(plane, [(0, max(0, size - n)) for n in plane.shape], mode="edge")
    pitch = max(size // 2, math.isqrt(plane.size // 400))
    return np.fft.fftshift(tile_spectrum(plane, size=size, pitch=pitch).mean)


def _picture(rgb: NDArray[np.uint8], *, reduced: bool) -> Picture:
    png, jpeg = _encoded(rgb, "png", reduced=reduced), _encoded(rgb, "jpeg", reduced=reduced)
    return png if len(png.uri) <= len(jpeg.uri) else jpeg


def _encoded(rgb: NDArray[np.uint8], kind: Literal["png", "jpeg"], *, reduced: bool) -> Picture:
    import cv2

    quality = [cv2.IMWRITE_JPEG_QUALITY, 90] if kind == "jpeg" else [cv2.IMWRITE_PNG_COMPRESSION, 9]
    _, code = cv2.imencode(
        f".{'jpg' if kind == 'jpeg' else 'png'}", np.ascontiguousarray(rgb[..., ::-1]), quality
    )
    text = base64.b64encode(code.tobytes()).decode()
    return Picture(
        uri=f"data:image/{kind};base64,{text}", width=rgb.shape[1], height=rgb.shape[0], reduced=reduced
    )
