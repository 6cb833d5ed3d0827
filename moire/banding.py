"""Scanner banding: lines along one axis that keep step across the whole page, too faint for tiles.

The steps from one scan line to the next are averaged across the page, flat places counting most;
what repeats in them, alike in every strip of the page, is the scanner's.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

_STRIPS = 6
_CLIP = 4.0
_ACTIVITY_FLOOR = 0.7
_EXCESS_NAT = 3.5
_IN_STEP = 0.62
_LOWEST_CYCLES = 6
_LINES_AT_MOST = 700
# Resampling leaves periods of its own, a few hundredths of a code value strong.
_LEAST_CODES = 0.2
_SHORTEST = 64
# Long periods step little from line to line; over a longer lag flat places show them better.
_LAGS = (1, 4, 12)
_LEAST_GAIN = 0.3


@dataclass(frozen=True, slots=True, kw_only=True)
class Band:
    """One periodic line of a scanner.

    Attributes
    ----------
    axis : int
        0 if the lines follow each other across the page (along x), 1 down the page.
    f_cpp, sigma_cpp : float
        Cycles per pixel along that axis, and its standard uncertainty.
    amplitude : float
        Code values.
    excess_nat : float
        ln power over the local background of the profile's spectrum.
    in_step : float
        Agreement of strips across the page, 0..1.
    """

    axis: int
    f_cpp: float
    sigma_cpp: float
    amplitude: float
    excess_nat: float
    in_step: float


def find_bands(image: NDArray[np.float32]) -> tuple[Band, ...]:
    """Faint lines of either axis, strongest first.

    Parameters
    ----------
    image : ndarray, shape (rows, columns)
        Code values on a 0..255 scale.
    """
    found: list[Band] = []
    for axis, plane in ((1, image), (0, image.T)):
        every = max(1, plane.shape[1] // _LINES_AT_MOST)
        for lag in _LAGS:
            for band in _bands_down(np.ascontiguousarray(plane[:, ::every]), axis, lag):
                if all(b.axis != axis or abs(b.f_cpp - band.f_cpp) > 2 / plane.shape[0] for b in found):
                    found.append(band)
    return tuple(sorted(found, key=lambda b: -b.excess_nat))


def _bands_down(plane: NDArray[np.float32], axis: int, lag: int) -> list[Band]:
    from scipy import ndimage

    if plane.shape[0] < 2 * _SHORTEST:
        return []
    profiles, free = _step_profiles(plane, lag)
    length = profiles.shape[1]
    window = np.hanning(length)
    spectra = np.fft.rfft((profiles - profiles.mean(axis=1, keepdims=True)) * window, axis=1)
    total = np.abs(spectra.sum(axis=0)) ** 2
    alone = (np.abs(spectra) ** 2).sum(axis=0)
    in_step = total / np.maximum(len(spectra) * alone, 1e-12)
    log_power = np.log(total + 1e-9)
    # An exponential variable's median lies ln(ln 2) below its mean.
    background = ndimage.median_filter(log_power, 41, mode="reflect") - np.log(np.log(2))
    excess = log_power - background
    peak = (
        (log_power >= ndimage.maximum_filter1d(log_power, 5)) & (excess > _EXCESS_NAT) & (in_step > _IN_STEP)
    )
    peak[:_LOWEST_CYCLES] = False
    out = []
    for k in np.flatnonzero(peak[:-1]):
        f = (k + _offset(log_power, int(k))) / length
        # A step over a lag is the line's own swing times 2 sin(pi f lag), too little near its zeros.
        gain = 2 * abs(np.sin(np.pi * f * lag))
        if gain < _LEAST_GAIN:
            continue
        amplitude = 2 * np.sqrt(total[k]) / len(spectra) / window.sum() / (gain * free)
        if amplitude < _LEAST_CODES:
            continue
        snr = np.exp(excess[k])
        out.append(
            Band(
                axis=axis,
                f_cpp=float(f),
                # Cramer-Rao bound of one sinusoid (Rife and Boorstyn, IEEE Trans. IT 20 (1974) 591).
                sigma_cpp=float(np.sqrt(6 / snr) / (np.pi * length) * 1.5),
                amplitude=float(amplitude),
                excess_nat=float(excess[k]),
                in_step=float(in_step[k]),
            )
        )
    return out


def _step_profiles(plane: NDArray[np.float32], lag: int) -> tuple[NDArray[np.float64], float]:
    """Mean step over `lag` lines in strips side by side, flat places counting most.

    Also the share of weight whose steps are free to follow the line, not clipped.
    """
    import cv2

    step = plane[lag:] - plane[:-lag]
    across = np.empty_like(step)
    cv2.absdiff(plane[:-lag, 1:], plane[:-lag, :-1], across[:, :-1])
    across[:, -1] = 0
    size = np.abs(step)
    across += size
    # Activity is smooth: half the resolution tells it.
    height, width = step.shape
    small = cv2.resize(across, ((width + 1) // 2, (height + 1) // 2), interpolation=cv2.INTER_AREA)
    activity = cv2.blur(small, (7, 7)) + np.float32(_ACTIVITY_FLOOR)
    weight = cv2.resize(1 / (activity * activity), (width, height), interpolation=cv2.INTER_LINEAR)
    swing = np.clip(step, -_CLIP, _CLIP) * weight
    strips = (np.arange(width) * _STRIPS // width == np.arange(_STRIPS)[:, None]).astype(np.float32)
    rows = (swing @ strips.T) / (weight @ strips.T)
    seen = weight[::4, ::4]
    free = float(seen[size[::4, ::4] < _CLIP].sum() / seen.sum())
    return np.asarray(rows.T, np.float64), max(free, 0.1)


def _offset(log_power: NDArray[np.float64], k: int) -> float:
    """Offset of a peak from its bin by a parabola through its log neighbours, in bins."""
    left, middle, right = log_power[k - 1 : k + 2]
    curve = left - 2 * middle + right
    return float(np.clip(0.5 * (left - right) / curve, -0.5, 0.5)) if curve < 0 else 0.0
