"""Impulse pairs in the spectrum: detection at a constant false-alarm rate.

A candidate is a local maximum of a tiled log spectrum that stands above its background on
both sides in every direction.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.spectrum import Spectrum

Z_THRESHOLD = 6.5
_EXCESS_NAT = 0.35
_INNER_BINS = 3.5
_LOG_EXPONENTIAL_SD = 1.283


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
    for plane, top in _planes(spectrum):
        for found in _plane_candidates(plane, spectrum, top=top):
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
    levels = [_levels(plane, spectrum, ky, kx, top=top) for plane, top in _planes(spectrum)]
    z = np.max([level[0] for level in levels], axis=0)
    excess = np.max([level[1] for level in levels], axis=0)
    return tuple(
        Candidate(kx=int(x), ky=int(y), z=float(zz), excess_nat=float(e))
        for x, y, zz, e in zip(kx, ky, z, excess, strict=True)
    )


def _planes(spectrum: Spectrum) -> tuple[tuple[NDArray[np.float32], bool], ...]:
    return (spectrum.mean, False), (spectrum.top, True)


def _plane_candidates(plane: NDArray[np.float32], spectrum: Spectrum, *, top: bool) -> list[Candidate]:
    from scipy import ndimage

    n = spectrum.size
    ky, kx = np.meshgrid(np.fft.fftfreq(n, 1 / n), np.fft.fftfreq(n, 1 / n), indexing="ij")
    half = (kx > 0) | ((kx == 0) & (ky > 0)) | (kx == -n // 2)
    inside = half & (np.hypot(kx, ky) >= _INNER_BINS)
    maxima = (plane >= ndimage.maximum_filter(plane, 3, mode="wrap")) & inside
    raised = plane - ndimage.uniform_filter(plane, 15, mode="wrap")
    spread = 1.4826 * np.median(np.abs(raised - np.median(raised)))
    maxima &= raised > 2.5 * spread
    ys, xs = np.nonzero(maxima)
    z, excess = _levels(plane, spectrum, ys, xs, top=top)
    keep = (z > Z_THRESHOLD) & (excess > _EXCESS_NAT)
    return [
        Candidate(kx=int(kx[y, x]), ky=int(ky[y, x]), z=float(zz), excess_nat=float(e))
        for y, x, zz, e in zip(ys[keep], xs[keep], z[keep], excess[keep], strict=True)
    ]


def _levels(
    plane: NDArray[np.float32], spectrum: Spectrum, ys: NDArray[np.int64], xs: NDArray[np.int64], *, top: bool
) -> tuple[NDArray[np.floating], NDArray[np.floating]]:
    """Robust z and excess over the background of given bins."""
    n = spectrum.size
    # The noise of the statistic is taken at random places, away from the origin.
    rng = np.random.default_rng(0)
    radius = np.hypot(np.fft.fftfreq(n, 1 / n)[:, None], np.fft.fftfreq(n, 1 / n)[None, :])
    far = np.argwhere(radius > n / 16)
    sample = far[rng.choice(len(far), min(1500, len(far)), replace=False)]
    reference = plane[sample[:, 0], sample[:, 1]] - _background(plane, sample[:, 0], sample[:, 1])
    centre = float(np.median(reference))
    mad = 1.4826 * float(np.median(np.abs(reference - centre)))
    sd = mad if top else max(mad, _LOG_EXPONENTIAL_SD * np.sqrt(1.1 / spectrum.tiles))
    excess = plane[ys % n, xs % n] - _background(plane, ys, xs)
    return (excess - centre) / max(sd, 1e-6), excess


def _background(
    plane: NDArray[np.float32], ys: NDArray[np.int64], xs: NDArray[np.int64]
) -> NDArray[np.float32]:
    """Largest over 12 directions of the lower of two means, 3 to 6 bins out on either side.

    A streak is high on both sides in its own direction and cancels itself; a neighbouring
    peak is high on one side only and does no harm.
    """
    n = plane.shape[0]
    sides = []
    for angle in np.pi * np.arange(12) / 12:
        radii = np.arange(3, 7)
        dx, dy = np.rint(radii * np.cos(angle)).astype(int), np.rint(radii * np.sin(angle)).astype(int)
        plus = plane[(ys[:, None] + dy) % n, (xs[:, None] + dx) % n].mean(axis=1)
        minus = plane[(ys[:, None] - dy) % n, (xs[:, None] - dx) % n].mean(axis=1)
        sides.append(np.minimum(plus, minus))
    return np.asarray(np.max(sides, axis=0))
