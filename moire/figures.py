"""Pictures for reports: overviews, 1:1 crops and marked spectra, as bytes and SVG."""

from __future__ import annotations

import base64
import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
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
# A label's height and advance per letter, and a sign's half side, in percent of a spectrum's side.
_LABEL = (4.6, 3.3)
_SIGN = 3.0
# Where a label may stand seen from its sign, best first.
_WAYS = ((1, 0), (-1, 0), (0, -1), (0, 1), *((x, y) for y in (-0.6, 0.6, -1, 1) for x in (1, -1)))

Box = tuple[int, int, int, int]
Shape = Literal["circle", "diamond", "square", "triangle", "cross"]
_MARKS: dict[Kind, tuple[str, Shape]] = {
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
    """A sign on a spectrum, in percent of its side.

    Centre, shape, label ('' for a harmonic), the label's centre, and whether a line must
    lead from the sign to a label that found no room beside it.
    """

    x: float
    y: float
    shape: Shape
    label: str
    label_at: tuple[float, float] = (0.0, 0.0)
    leader: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class SpectrumFigure:
    """A spectrum picture, the marks over it, and its axes: half-width and unit.

    ``beyond`` counts lines that lie outside the axes, as they can after a reduction.
    """

    picture: Picture
    marks: tuple[Mark, ...]
    reach: tuple[float, float]
    unit: str
    beyond: int = 0


def shown_rgb(scan: Scan) -> NDArray[np.uint8]:
    """8-bit RGB of a scan for showing, shape (rows, columns, 3)."""
    if scan.mode == "rgb" and scan.pixels.dtype == np.uint8:
        return np.asarray(scan.pixels, np.uint8)
    codes = np.rint(np.clip(rgb_codes(scan), 0, 255)).astype(np.uint8)
    return np.repeat(codes, 3, axis=2) if codes.shape[2] == 1 else codes


def overview(rgb: NDArray[np.uint8], *, limit: int = OVERVIEW_PX) -> Picture:
    """The whole picture, reduced without alias if it is larger than `limit` pixels."""
    rows, columns = rgb.shape[:2]
    share = limit / max(rows, columns)
    if share >= 1:
        return _picture(rgb, reduced=False)
    size = (max(1, round(columns * share)), max(1, round(rows * share)))
    small = np.empty((size[1], size[0], 3), np.uint8)
    for c in range(3):  # one channel at a time: a large master in floats would fill the memory
        plane = rgb[..., c : c + 1].astype(np.float32) / np.float32(255)
        small[..., c] = np.rint(reduce_picture(plane, *size)[..., 0] * 255)
    return _picture(small, reduced=True)


def crop_box(width: int, height: int, centre: tuple[int, int], *, side: int = CROP_PX) -> Box:
    """Square ``(x, y, width, height)`` around a centre, moved inside the picture or cut to it."""
    x = min(max(0, centre[0] - side // 2), max(0, width - side))
    y = min(max(0, centre[1] - side // 2), max(0, height - side))
    return x, y, min(side, width), min(side, height)


def crop(rgb: NDArray[np.uint8], box: Box) -> Picture:
    """The pixels of a box ``(x, y, width, height)`` as they are: never resampled, lossless."""
    x, y, width, height = box
    return _encoded(rgb[y : y + height, x : x + width], "png", reduced=False)


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
    """Spectra of several states of one scan on one grey scale, with the lines found marked.

    Parameters
    ----------
    scans : sequence of Scan
        The scan in which the lines were found first, then its derivatives at any size.
    findings : sequence of Finding
        Lines in cycles per pixel of the first scan.
    """
    planes = [_log_spectrum(scan) for scan in scans]
    low = float(np.percentile(planes[0], 2))
    high = float(np.percentile(planes[0], 99.97))
    # Moderate contrast: a full-range grating on screen can trouble photosensitive people.
    greys = [np.clip((p - low) / max(high - low, 1e-6), 0, 1) * 165 + 45 for p in planes]
    out = []
    for scan, grey in zip(scans, greys, strict=True):
        rate = scan.ppi
        stretch = scans[0].width_px / scan.width_px, scans[0].height_px / scan.height_px
        marks, beyond = _marks(findings, stretch, half_bin=50 / len(grey))
        rgb = np.repeat(np.rint(grey).astype(np.uint8)[..., None], 3, axis=2)
        out.append(
            SpectrumFigure(
                picture=_encoded(rgb, "png", reduced=False),
                marks=_with_labels_placed(marks),
                reach=(0.5, 0.5) if rate is None else (rate[0] / 2, rate[1] / 2),
                unit="cycles/pixel" if rate is None else "cycles/inch",
                beyond=beyond,
            )
        )
    return tuple(out)


def _marks(
    findings: Sequence[Finding], stretch: tuple[float, float], *, half_bin: float
) -> tuple[list[Mark], int]:
    """Signs of the lines inside the axes, and how many lie beyond them."""
    out, beyond = [], 0
    for label, finding in zip(labels(findings), findings, strict=True):
        shape = _MARKS[finding.kind][1]
        for i, line in enumerate(finding.lines):
            fx, fy = line.fx_cpp * stretch[0], line.fy_cpp * stretch[1]
            if max(abs(fx), abs(fy)) > 0.5:
                beyond += 1
                continue
            # One of the two mirror images is marked, so that the other can be seen bare.
            if fy > 0 or (fy == 0 and fx < 0):
                fx, fy = -fx, -fy
            fundamental = line.order in ((1, 0), (0, 1)) or (line.order is None and i == 0)
            x, y = (min(100.0, 100 * (f + 0.5) + half_bin) for f in (fx, fy))
            out.append(Mark(x=x, y=y, shape=shape, label=label if fundamental else ""))
    return out, beyond


def _with_labels_placed(marks: Sequence[Mark]) -> tuple[Mark, ...]:
    """Marks whose labels stand in the nearest free spot, so that crowded ones stay readable."""
    taken = [(m.x, m.y, *((_SIGN, _SIGN) if m.label else (_SIGN / 2, _SIGN / 2))) for m in marks]
    out = []
    for mark in marks:
        if mark.label:
            half = (_LABEL[1] * len(mark.label) + 1.2) / 2, _LABEL[0] / 2
            spots = _spots(mark, half)
            costs = [sum(_overlap((*at, *half), box) for box in taken) for at, _ in spots]
            at, far = spots[costs.index(min(costs))]
            taken.append((*at, *half))
            mark = replace(mark, label_at=at, leader=far)
        out.append(mark)
    return tuple(out)


def _spots(mark: Mark, half: tuple[float, float]) -> list[tuple[tuple[float, float], bool]]:
    """Centres that a label may take inside the picture, best first, and whether each is far off."""
    out = []
    for away in (0, 3, 6, 10, 14, 19, 25):
        for dx, dy in _WAYS:
            x = mark.x + dx * (_SIGN + half[0] + away)
            y = mark.y + dy * (_SIGN + half[1] + away)
            if half[0] <= x <= 100 - half[0] and half[1] <= y <= 100 - half[1]:
                out.append(((x, y), away > 0))
    return out


def _overlap(a: tuple[float, ...], b: tuple[float, ...]) -> float:
    """Area common to two boxes given by centre and half sides."""
    wide = min(a[0] + a[2], b[0] + b[2]) - max(a[0] - a[2], b[0] - b[2])
    high = min(a[1] + a[3], b[1] + b[3]) - max(a[1] - a[3], b[1] - b[3])
    return max(0.0, wide) * max(0.0, high)


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
