"""Lines as they really are in a rendered scan, to hold predictions against."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from prints import as_scan

from moire.measures import line_levels
from moire.peaks import find_candidates
from moire.refinement import polish, refine
from moire.samples import rgb_codes
from moire.spectrum import tile_spectrum
from moire.vision import lightness, viewing_condition, visibility

TILE = 128


@dataclass(frozen=True)
class Seen:
    """A line of a scan: cycles per pixel, L* swing, visibility at 1:1 on a monitor."""

    f_cpp: NDArray[np.float64]
    amplitude: float
    visibility: float


def level(plane: NDArray[np.float32], f_cpp: NDArray[np.float64]) -> tuple[float, float]:
    """Mean amplitude over the page of one frequency, and the mean L*."""
    whole = np.ones((1, *(s // (TILE // 2) - 1 for s in plane.shape)), np.float32)
    amplitude, _, mean, _ = line_levels(plane, f_cpp[None], whole, size=TILE)
    return float(amplitude[0]), float(mean[0])


def visible(f_cpp: NDArray[np.float64], amplitude: float, mean: float) -> float:
    at = (float(f_cpp[0]), float(f_cpp[1]))
    return visibility(at, amplitude, mean, viewing=viewing_condition("monitor"), ppi=None)


def find_lines(pixels: NDArray[np.uint8]) -> tuple[Seen, ...]:
    """Every line that the finder's own rooms detect and refine in a scan, whatever its cause."""
    channels = rgb_codes(as_scan(pixels, None))
    spectrum = tile_spectrum(channels.mean(axis=2), size=TILE, pitch=TILE // 2)
    peaks = polish(channels, refine(channels, find_candidates(spectrum), size=TILE), size=64)
    plane = lightness(channels)
    out = []
    for peak in peaks:
        amplitude, mean = level(plane, peak.f)
        out.append(Seen(f_cpp=peak.f, amplitude=amplitude, visibility=visible(peak.f, amplitude, mean)))
    return tuple(out)


def gap_cpp(a: NDArray[np.float64], b: NDArray[np.float64]) -> float:
    """Distance of two lines on the sampling grid, either sign."""
    apart = [d - np.rint(d) for d in (a - b, a + b)]
    return float(min(np.hypot(*d) for d in apart))
