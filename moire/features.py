"""Feature pictures for descreening, and what steers their mixing."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.carrier import coherent_amplitude
from moire.nulls import ScreenLattice

POWERS = (4, 10, 30)
_LUMA = (0.30, 0.55, 0.15)
_DIRECTIONS = 8
Plane = NDArray[np.float32]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Features:
    """Feature pictures of one channel, and the planes that steer their mixing."""

    pictures: list[NDArray[np.float32]]
    inputs: list[NDArray[np.float32]]


def channel_features(
    encoded: NDArray[np.float32],
    nulls: dict[int, NDArray[np.float32]],
    lattices: Sequence[ScreenLattice],
    shares: NDArray[np.float64],
) -> Iterator[Features]:
    """Feature pictures and steering inputs of each channel in turn, on the tangent encoding."""
    period = float(np.mean([g.period_px for g in lattices]))
    channels = encoded.shape[2]
    luma = np.asarray(_LUMA if channels == 3 else (1.0,), np.float32)
    l_null, l_4, l_10, l_all = (
        np.ascontiguousarray(p @ luma) for p in (nulls[1], nulls[4], nulls[10], encoded)
    )
    along_4, along_10 = _along_edges(l_4, l_null, 0.45 * period), _along_edges(l_10, l_null, 1.1 * period)
    structure, coherence = _structure(l_null, max(0.8, 0.5 * period))
    fine, _ = _structure(l_4, max(0.8, 0.25 * period))
    for c in range(channels):
        z, n1, f4, f10, f30 = (
            np.ascontiguousarray(p[..., c]) for p in (encoded, *(nulls[k] for k in (1, *POWERS)))
        )
        carrier = coherent_amplitude(
            z - n1, [g for g, s in zip(lattices, shares[c], strict=True) if s > 0], sigma_px=1.5 * period
        )
        guided = guided_filter(z, l_4, radius=0.8 * period, eps=np.float32(4e-4))
        own = guided_filter(z, f4, radius=0.6 * period, eps=0.5 * carrier**2 + np.float32(1e-4))
        pictures = [
            n1, f4, f10, f30, z, guided, own, n1 + l_4 - l_null, n1 + l_10 - l_null, n1 + l_all - l_null,
            n1 + along_4 - l_null, n1 + along_10 - l_null,
        ]  # fmt: skip
        scale = carrier + np.float32(0.004)
        reach = max(0.8, 0.5 * period)
        inputs = [
            np.log(carrier + np.float32(1e-3)),
            np.log(structure * period + np.float32(1e-3)),
            np.log(fine * period + np.float32(1e-3)),
            coherence,
            _level(f4 - n1, reach, scale),
            _level(f10 - f4, reach, scale),
            _level(z - f30, reach, scale),
            _level(along_10 - l_null, reach, scale),
            np.clip((f4 - n1) / scale, -4, 4),
            np.clip((z - n1) / scale, -4, 4),
            np.clip((l_4 - l_null) / scale, -4, 4),
            n1,
            np.full_like(n1, np.log(period)),
            np.full_like(n1, float((shares[c] > 0).sum())),
        ]
        yield Features(pictures=pictures, inputs=[np.asarray(i, np.float32) for i in inputs])


def guided_filter(picture: Plane, guide: Plane, *, radius: float, eps: Plane | np.float32) -> Plane:
    """Local linear model of the picture on a guide (He, Sun, Tang, IEEE TPAMI 35 (2013) 1397)."""
    import cv2

    side = 2 * max(1, round(radius)) + 1

    def mean(plane: Plane) -> Plane:
        return np.asarray(cv2.blur(plane, (side, side), borderType=cv2.BORDER_REFLECT))

    m_guide, m_picture = mean(guide), mean(picture)
    slope = (mean(guide * picture) - m_guide * m_picture) / (mean(guide * guide) - m_guide**2 + eps)
    return mean(slope) * guide + mean(m_picture - slope * m_guide)


def _structure(plane: Plane, sigma: float) -> tuple[Plane, Plane]:
    """Gradient strength and coherence of the structure tensor, averaged over `sigma` pixels."""
    xx, xy, yy = _tensor(plane, sigma)
    trace = xx + yy
    spread = np.sqrt((xx - yy) ** 2 + 4 * xy**2)
    return np.sqrt(np.maximum(trace, 0)), spread / (trace + np.float32(1e-6))


def _tensor(plane: Plane, sigma: float) -> tuple[Plane, Plane, Plane]:
    import cv2

    gx, gy = (
        cv2.Scharr(plane, cv2.CV_32F, 1, 0, scale=1 / 32),
        cv2.Scharr(plane, cv2.CV_32F, 0, 1, scale=1 / 32),
    )
    xx, xy, yy = (
        np.asarray(cv2.GaussianBlur(p, (0, 0), sigma), np.float32) for p in (gx * gx, gx * gy, gy * gy)
    )
    return xx, xy, yy


def _along_edges(plane: Plane, guide: Plane, sigma: float) -> Plane:
    """Picture smoothed along the local edge direction only, `sigma` pixels."""
    import cv2

    xx, xy, yy = _tensor(guide, max(0.8, sigma))
    angle = 0.5 * np.arctan2(2 * xy, xx - yy) + np.float32(np.pi / 2)
    index = np.rint(angle / np.float32(np.pi) * _DIRECTIONS).astype(np.int32) % _DIRECTIONS
    out = np.empty_like(plane)
    for direction in range(_DIRECTIONS):
        kernel = _line_kernel(np.pi * direction / _DIRECTIONS, sigma)
        smooth = cv2.filter2D(plane, -1, kernel, borderType=cv2.BORDER_REFLECT)
        np.copyto(out, smooth, where=index == direction)
    return out


def _line_kernel(angle: float, sigma: float) -> Plane:
    """A Gaussian ridge along a direction, half a pixel thick."""
    reach = max(1, int(np.ceil(2.5 * sigma)))
    at = np.arange(-reach, reach + 1)
    x, y = np.meshgrid(at, at)
    along = x * np.cos(angle) + y * np.sin(angle)
    across = -x * np.sin(angle) + y * np.cos(angle)
    kernel = np.exp(-0.5 * (along / max(sigma, 0.3)) ** 2 - 0.5 * (across / 0.5) ** 2)
    return np.asarray(kernel / kernel.sum(), np.float32)


def _level(plane: Plane, sigma: float, scale: Plane) -> Plane:
    """ln of a plane's local rms over a scale."""
    import cv2

    rms = np.sqrt(cv2.GaussianBlur(plane * plane, (0, 0), sigma))
    return np.asarray(np.log(rms / scale + np.float32(1e-2)))
