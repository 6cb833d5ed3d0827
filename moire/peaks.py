"""Impulse pairs in the spectrum: detection at a constant false-alarm rate.

A candidate is a local maximum of a tiled log spectrum that stands above its background on
both sides in every direction.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.relief import Relief
from moire.spectrum import Spectrum

Z_THRESHOLD = 6.5
_EXCESS_NAT = 0.35
_INNER_BINS = 3.5


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Peak:
    """One coherent spectral line.

    Attributes
    ----------
    f : ndarray, shape (2,)
        ``(fx, fy)`` in cycles per pixel, half-plane convention of the candidate.
    sigma : ndarray, shape (2,)
        Standard uncertainty of each component.
    z : float
        Robust standard deviations above the background.
    excess_nat : float
        ln power above the background.
    amplitude : float
        Code-value amplitude where the pattern is strong, mean of channels.
    coherence, local_coherence : float
        Phase agreement over the page, and between tiles one size apart, 0..1.
    doubled : bool
        Whether coherence was reached only by the doubled phase (a harmonic whose sign
        follows the tone).
    tiles : float
        Tiles that carry the line.
    bin_cpp : float
        Width of the candidate's bin, cycles per pixel.
    off_bin : float
        Distance of the refined frequency from the candidate bin, in bins.
    colour : ndarray, shape (channels,)
        Signed modulation of each channel relative to the channel mean.
    weight : ndarray, shape (tile rows, tile columns)
        How strongly each tile carries the line, 0..1.
    """

    f: NDArray[np.float64]
    sigma: NDArray[np.float64]
    z: float
    excess_nat: float
    amplitude: float
    coherence: float
    local_coherence: float
    doubled: bool
    tiles: float
    bin_cpp: float
    off_bin: float
    colour: NDArray[np.float64]
    weight: NDArray[np.float32]


@dataclass(frozen=True, slots=True, kw_only=True)
class Candidate:
    """A bin that stands out: ``(kx, ky)`` in bins, robust z and excess in nat."""

    kx: int
    ky: int
    z: float
    excess_nat: float


def find_candidates(spectrum: Spectrum, *, limit: int = 60) -> tuple[Candidate, ...]:
    """Bins of the half-plane that stand above a directional background, strongest first."""
    if spectrum.tiles < 2:
        return ()
    best: dict[tuple[int, int], Candidate] = {}
    for plane, relief in _planes(spectrum):
        for found in _plane_candidates(plane, relief):
            key = (found.kx, found.ky)
            if key not in best or found.z > best[key].z:
                best[key] = found
    ranked = sorted(best.values(), key=lambda c: -c.z)
    kept: list[Candidate] = []
    for c in ranked:
        if all(_bin_distance(c, other, spectrum.size) > 1.5 for other in kept):
            kept.append(c)
        if len(kept) == limit:
            break
    return tuple(kept)


def _bin_distance(a: Candidate, b: Candidate, n: int) -> float:
    def gap(sign: int) -> float:
        dx = (a.kx - sign * b.kx + n // 2) % n - n // 2
        dy = (a.ky - sign * b.ky + n // 2) % n - n // 2
        return float(np.hypot(dx, dy))

    return min(gap(1), gap(-1))


def measure_bins(spectrum: Spectrum, bins: tuple[tuple[int, int], ...]) -> tuple[Candidate, ...]:
    """Candidates at given bins ``(kx, ky)``, whatever their level."""
    if not bins or spectrum.tiles < 2:
        return ()
    kx, ky = np.array(bins).T
    at = (ky % spectrum.size, kx % spectrum.size)
    z = np.max([relief.z[at] for _, relief in _planes(spectrum)], axis=0)
    excess = np.max([relief.excess[at] for _, relief in _planes(spectrum)], axis=0)
    return tuple(
        Candidate(kx=int(x), ky=int(y), z=float(zz), excess_nat=float(e))
        for x, y, zz, e in zip(kx, ky, z, excess, strict=True)
    )


def _planes(spectrum: Spectrum) -> tuple[tuple[NDArray[np.float32], Relief], ...]:
    return (spectrum.mean, spectrum.mean_relief), (spectrum.top, spectrum.top_relief)


def _plane_candidates(plane: NDArray[np.float32], relief: Relief) -> list[Candidate]:
    from scipy import ndimage

    n = plane.shape[0]
    ky, kx = np.meshgrid(np.fft.fftfreq(n, 1 / n), np.fft.fftfreq(n, 1 / n), indexing="ij")
    half = (kx > 0) | ((kx == 0) & (ky > 0)) | (kx == -n // 2)
    inside = half & (np.hypot(kx, ky) >= _INNER_BINS)
    found = inside & (relief.z > Z_THRESHOLD) & (relief.excess > _EXCESS_NAT)
    found &= plane >= ndimage.maximum_filter(plane, 3, mode="wrap")
    raised = plane - ndimage.uniform_filter(plane, 15, mode="wrap")
    found &= raised > 2.5 * 1.4826 * np.median(np.abs(raised - np.median(raised)))
    return [
        Candidate(
            kx=int(kx[y, x]), ky=int(ky[y, x]), z=float(relief.z[y, x]), excess_nat=float(relief.excess[y, x])
        )
        for y, x in np.argwhere(found)
    ]
