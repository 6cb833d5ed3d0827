"""Lines as they really are in a rendered scan, and how well predictions fit them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from prints import as_scan

from moire.measures import line_levels
from moire.peaks import Candidate, find_candidates
from moire.prediction import Lines
from moire.refinement import polish, refine
from moire.samples import rgb_codes
from moire.spectrum import tile_spectrum
from moire.vision import lightness, viewing_condition, visibility

TILE = 128
# What a prediction must reach.
WITHIN_CPI, WITHIN_SHARE, WITHIN_SWING = 0.1, 0.2, 0.3
_CLOSE_BINS = 2.5
# A weaker line is there, but its place drowns in noise and its neighbours' skirts.
_PLACED_FROM = 0.1


@dataclass(frozen=True)
class Seen:
    """A line of a scan: cycles per pixel, L* swing, visibility at 1:1 on a monitor."""

    f_cpp: NDArray[np.float64]
    amplitude: float
    visibility: float


@dataclass(frozen=True)
class Fit:
    """Predictions against one scan.

    ``swings`` (predicted, measured) are of predicted lines above visibility 1, ``gaps_cpi`` of
    those among them that measure 0.1 L* or more, ``missed`` are lines of the scan above 1 that no
    prediction explains, ``invented`` predicted ones above 1 that the scan does not show.
    """

    gaps_cpi: tuple[float, ...]
    swings: tuple[tuple[float, float], ...]
    missed: tuple[Seen, ...]
    invented: tuple[float, ...]

    @property
    def frequencies_hold(self) -> bool:
        return all(g < WITHIN_CPI for g in self.gaps_cpi)

    @property
    def swings_hold(self) -> bool:
        return all(abs(p - m) <= max(WITHIN_SHARE * m, WITHIN_SWING) for p, m in self.swings)


def level(plane: NDArray[np.float32], f_cpp: NDArray[np.float64]) -> tuple[float, float]:
    """Amplitude over the whole page of one frequency, and the mean L*."""
    size = 2 * (min(plane.shape) // 4) if min(plane.shape) < 4 * TILE else 2 * TILE
    whole = np.ones((1, *(s // (size // 2) - 1 for s in plane.shape)), np.float32)
    amplitude, _, mean, _ = line_levels(plane, f_cpp[None], whole, size=size)
    return float(amplitude[0]), float(mean[0])


def visible(f_cpp: NDArray[np.float64], amplitude: float, mean: float) -> float:
    at = (float(f_cpp[0]), float(f_cpp[1]))
    return visibility(at, amplitude, mean, viewing=viewing_condition("monitor"), ppi=None)


def find_lines(pixels: NDArray[np.uint8]) -> tuple[Seen, ...]:
    """Every line that the finder's own rooms detect and refine in a scan, whatever its cause."""
    channels = rgb_codes(as_scan(pixels, None))
    spectrum = tile_spectrum(channels.mean(axis=2), size=_size(channels), pitch=_size(channels) // 2)
    plane = lightness(channels)
    out = []
    for f in _refined(channels, find_candidates(spectrum)):
        amplitude, mean = level(plane, f)
        out.append(Seen(f_cpp=f, amplitude=amplitude, visibility=visible(f, amplitude, mean)))
    return tuple(out)


def measured_place(channels: NDArray[np.float32], place: NDArray[np.float64]) -> NDArray[np.float64]:
    """A line's frequency, refined from the bin in which it is expected."""
    size = _size(channels)
    bin_x, bin_y = (int(v) for v in np.rint(place * size))
    return _refined(channels, (Candidate(kx=bin_x, ky=bin_y, z=0.0, excess_nat=0.0),))[0]


def _refined(channels: NDArray[np.float32], candidates: tuple[Candidate, ...]) -> list[NDArray[np.float64]]:
    size, mixed = _size(channels), channels.mean(axis=2)
    return [p.f for p in polish(mixed, refine(mixed, candidates, size=size), size=size)]


def _size(channels: NDArray[np.float32]) -> int:
    return TILE if min(channels.shape[:2]) >= 2 * TILE else TILE // 2


def gap_cpp(a: NDArray[np.float64], b: NDArray[np.float64]) -> float:
    """Distance of two lines on the sampling grid, either sign."""
    apart = [d - np.rint(d) for d in (a - b, a + b)]
    return float(min(np.hypot(*d) for d in apart))


def compare(pixels: NDArray[np.uint8], lines: Lines, ppi: float) -> Fit:
    """Predicted lines (of one rate) against a scan."""
    channels = rgb_codes(as_scan(pixels, None))
    plane = lightness(channels)
    found = find_lines(pixels)
    places = lines.seen_cpi[0] / ppi
    gaps, swings, invented = [], [], []
    close = _CLOSE_BINS / _size(channels)
    for place, swing, mean in zip(places, lines.amplitude[0], lines.mean[0], strict=True):
        seen = visible(place, float(swing), float(mean))
        near = [float(a) for p, a in zip(places, lines.amplitude[0], strict=True)
                if 0 < gap_cpp(p, place) < close or gap_cpp(p, place) == 0]  # fmt: skip
        total = float(np.sum(near))
        if (
            seen < 1
            or gap_cpp(2 * place, np.zeros(2)) < close
            or total > 1.2 * float(swing)
            or np.hypot(*place) < close
        ):
            continue  # not seen, or too near its mirror image, a neighbour or tone to be measured alone
        measured, tone = level(plane, place)
        swings.append((float(swing), measured))
        if visible(place, measured, tone) < 1 and float(swing) - measured > WITHIN_SHARE * float(swing):
            invented.append(seen)
        if measured >= _PLACED_FROM:
            gaps.append(gap_cpp(measured_place(channels, place), place) * ppi)
    missed = tuple(
        s for s in found
        if s.visibility > 1 and min(gap_cpp(s.f_cpp, p) * ppi for p in places) > WITHIN_CPI
    )  # fmt: skip
    return Fit(gaps_cpi=tuple(gaps), swings=tuple(swings), missed=missed, invented=tuple(invented))
