"""Frequencies refined from the phases of the tiles that carry a line.

Half-overlapped tiles see a line's phase advance from tile to tile; the advance gives the
frequency to a small fraction of a bin, the scatter its uncertainty.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from moire.patches import Codes, cut_patches, patch_phasors, strong_tiles
from moire.peaks import Candidate, Peak
from moire.spectrum import tile_phasors

_TONE_FLOOR = 20.0


def refine(image: NDArray[np.float32], candidates: tuple[Candidate, ...], *, size: int) -> tuple[Peak, ...]:
    """Peaks of the candidate bins, refined by the phases of half-overlapped tiles.

    Parameters
    ----------
    image : ndarray, shape (rows, columns)
        Code values on a 0..255 scale, mean of channels.
    candidates : tuple of Candidate
        Bins of a spectrum of tiles of `size`.
    size : int
        Tile side in pixels.
    """
    if not candidates:
        return ()
    bins = np.array([(c.kx / size, c.ky / size) for c in candidates])
    phasors, x, y = tile_phasors(image, bins, size=size)
    return tuple(
        _refine_one(candidate, f0, v, x, y, size)
        for candidate, f0, v in zip(candidates, bins, phasors, strict=True)
    )


def polish(image: NDArray[np.float32], peaks: tuple[Peak, ...], *, size: int) -> tuple[Peak, ...]:
    """Peaks with frequencies refined once more on tiles of another `size` (finer is better).

    On true prints the tone under the screen limits the phase, and a smaller aperture sees
    less of it change.
    """
    if not peaks:
        return ()
    at = np.array([p.f for p in peaks])
    phasors, x, y = tile_phasors(image, at, size=size)
    out = []
    for peak, f0, v in zip(peaks, at, phasors, strict=True):
        weighted, _ = _soft_clip(v)
        step, sigma, _ = _climb(weighted**2 if peak.doubled else weighted, x, y)
        scale = 2 if peak.doubled else 1
        out.append(replace(peak, f=f0 + step / scale, sigma=sigma / scale))
    return tuple(out)


def with_colours(codes: Codes, peaks: tuple[Peak, ...], *, size: int) -> tuple[Peak, ...]:
    """Peaks with the modulation of each channel, measured where each is strong.

    Parameters
    ----------
    codes : ndarray, shape (rows, columns, channels)
        Code values on a 0..255 scale.
    peaks : tuple of Peak
    size : int
        Tile side of the peaks' weights.
    """
    out = []
    for peak in peaks:
        tiles = strong_tiles(peak.weight)
        (v,), tone = patch_phasors(cut_patches(codes, tiles, size=size), peak.f[None])
        reference = v.mean(axis=1, keepdims=True)
        unit = peak.weight[tuple(tiles.T)][:, None] * np.conj(reference) / np.maximum(np.abs(reference), 1e-9)
        # Ink absorbs a share of the light, so the swing is taken over the local tone.
        colour = np.real(v * unit / (tone + _TONE_FLOOR)).sum(axis=0)
        out.append(replace(peak, colour=colour / max(float(np.abs(colour).mean()), 1e-9)))
    return tuple(out)


def _refine_one(
    candidate: Candidate,
    f0: NDArray[np.float64],
    v: NDArray[np.complex64],
    x: NDArray[np.float64],
    y: NDArray[np.float64],
    size: int,
) -> Peak:
    weighted, weight = _soft_clip(v)
    step, sigma, coherence = _climb(weighted, x, y)
    doubled = False
    if coherence < 0.9:
        unit = np.where(np.abs(weighted) > 0, weighted / np.maximum(np.abs(weighted), 1e-9), 0)
        twice, twice_sigma, twice_coherence = _climb(np.abs(weighted) * unit**2, x, y)
        if twice_coherence > max(0.9, coherence + 0.1):
            doubled, step, sigma, coherence = True, twice / 2, twice_sigma / 2, twice_coherence
    amplitude = float((np.abs(v) * weight).sum() / max(weight.sum(), 1e-9))
    return Peak(
        f=f0 + step,
        sigma=sigma,
        z=candidate.z,
        excess_nat=candidate.excess_nat,
        amplitude=amplitude,
        coherence=coherence,
        local_coherence=_local_coherence(weighted),
        doubled=doubled,
        tiles=float((weight > 0.4).sum()),
        bin_cpp=1 / size,
        off_bin=float(np.hypot(*step) * size),
        colour=np.ones(1),
        weight=weight.astype(np.float32),
    )


def _soft_clip(v: NDArray[np.complex64]) -> tuple[NDArray[np.complex128], NDArray[np.float64]]:
    """Phasors and weights that follow the tiles where the line is, none of them dominant."""
    size = np.abs(v)
    count = max(1, size.size // 20)
    strong = float(np.partition(size, size.size - count, axis=None)[-count:].mean())
    if strong <= 0:
        return np.zeros(v.shape, complex), np.zeros(v.shape)
    weight = np.clip((size / strong - 0.15) / 0.35, 0, 1)
    return v * weight / np.maximum(1, size / strong), weight


def _local_coherence(v: NDArray[np.complex128]) -> float:
    """Agreement of the phase steps between tiles one size (two hops) apart, 0..1."""
    pairs = [v[2:] * np.conj(v[:-2])] if v.shape[0] > 2 else []
    across = [v[:, 2:] * np.conj(v[:, :-2])] if v.shape[1] > 2 else []
    total = [
        float(np.abs(p.sum() / max(np.abs(p).sum(), 1e-12))) for p in pairs + across if np.abs(p).sum() > 0
    ]
    return float(np.mean(total)) if total else 0.0


def _climb(
    v: NDArray[np.complex128], x: NDArray[np.float64], y: NDArray[np.float64]
) -> tuple[NDArray[np.float64], NDArray[np.float64], float]:
    """Frequency step that aligns the phasors, its sigma, and the coherence reached.

    Maximises ``|sum v exp(-2 pi i d.r)|^2`` over tile centres r: a zero-padded FFT of the
    tile grid, then Newton steps on the phase.
    """
    from scipy import fft

    size = np.abs(v)
    total = float(size.sum())
    if total <= 0:
        return np.zeros(2), np.full(2, np.inf), 0.0
    hop_x = x[1] - x[0] if len(x) > 1 else 1.0
    hop_y = y[1] - y[0] if len(y) > 1 else 1.0
    pad = tuple(fft.next_fast_len(2 * side) for side in v.shape)
    transform = fft.fft2(v.astype(np.complex64), pad)
    row, column = np.unravel_index(int(np.argmax(np.abs(transform))), pad)
    step = np.array([np.fft.fftfreq(pad[1], hop_x)[column], np.fft.fftfreq(pad[0], hop_y)[row]])
    ax, ay = 2 * np.pi * (x - x.mean()), 2 * np.pi * (y - y.mean())
    free = [0] + ([1] if len(x) > 1 else []) + ([2] if len(y) > 1 else [])
    limit = 0.5 / np.array([max(np.ptp(x), hop_x), max(np.ptp(y), hop_y)])
    rotated = v
    for _ in range(8):
        turned = v * np.exp(-1j * step[0] * ax) * np.exp(-1j * step[1] * ay)[:, None]
        mean = turned.sum()
        rotated = turned * (np.conj(mean) / max(abs(mean), 1e-12))
        normal = _moments(np.maximum(rotated.real, 0), ax, ay)
        slope = rotated.imag
        lean = np.array([slope.sum(), slope.sum(axis=0) @ ax, slope.sum(axis=1) @ ay])
        move = np.zeros(3)
        move[free] = np.linalg.lstsq(normal[np.ix_(free, free)], lean[free], rcond=None)[0]
        step = step + np.clip(move[1:], -limit, limit)
        if np.all(np.abs(move[1:]) < 1e-4 * limit):
            break
    sigma = _sandwich(rotated.imag, size, ax, ay, free)
    return step, sigma, float(np.abs(rotated.sum()) / total)


def _moments(
    weight: NDArray[np.float64], ax: NDArray[np.float64], ay: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Weighted sums of products of (1, ax, ay) over a grid, shape (3, 3)."""
    across, down = weight.sum(axis=0), weight.sum(axis=1)
    w, wx, wy, wxy = across.sum(), across @ ax, down @ ay, ay @ weight @ ax
    return np.array([[w, wx, wy], [wx, across @ ax**2, wxy], [wy, wxy, down @ ay**2]])


def _sandwich(
    slope: NDArray[np.float64],
    weight: NDArray[np.float64],
    ax: NDArray[np.float64],
    ay: NDArray[np.float64],
    free: list[int],
) -> NDArray[np.float64]:
    """Uncertainty of the step from residual phases, summed by blocks of tiles.

    Blocks make the estimate honest about overlap and about tone that spans several tiles
    (cluster-robust covariance: Liang and Zeger, Biometrika 73 (1986) 13).
    """
    block = 3 if min(slope.shape) >= 9 else 2
    rows, columns = (np.arange(0, side, block) for side in slope.shape)

    def sums(values: NDArray[np.float64]) -> NDArray[np.float64]:
        return np.add.reduceat(np.add.reduceat(values, rows, axis=0), columns, axis=1).ravel()

    scores = np.stack([sums(slope), sums(slope * ax), sums(slope * ay[:, None])])[free]
    blocks = int((sums(weight) > 0).sum())
    inverse = np.linalg.pinv(_moments(weight, ax, ay)[np.ix_(free, free)])
    correction = blocks / max(blocks - len(free), 0.5)
    covariance = inverse @ (scores @ scores.T) @ inverse * correction
    sigma = np.full(3, np.inf)
    sigma[free] = np.sqrt(np.maximum(np.diag(covariance), 0))
    return sigma[1:]
