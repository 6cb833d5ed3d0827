"""Matched removal of isolated lines: banding, beats, interference.

Each line is demodulated to zero frequency, its slowly varying complex amplitude is averaged
with weights that ignore edges and texture, brought down to the local background, modulated
back and subtracted. Only the fitted line is ever subtracted, so detail elsewhere stays and
nothing rings at edges.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.waves import Waves, smooth

_NOISE_CODE = 1.5
_LONGEST_STEP = 8
_DARKEST = 8 / 255
_CLIPPED = 0.001


def remove_lines(
    image: NDArray[np.float32],
    frequencies: Sequence[tuple[float, float]],
    *,
    reach_px: float = 60.0,
    beside: Sequence[tuple[float, float]] = (),
    of_tone: bool = False,
) -> NDArray[np.float32]:
    """Image without the given lines.

    Parameters
    ----------
    image : ndarray, shape (rows, columns, channels)
        sRGB-encoded, 0..1.
    frequencies : sequence of (fx, fy)
        Cycles per pixel; one of each pair of opposite lines.
    reach_px : float
        Gaussian sigma over which a line's amplitude and phase may change.
    beside : sequence of (fx, fy)
        Strong lines that stay: fitted along, lest what edges make of them passes for the others.
    of_tone : bool
        The lines' swing is a share of the local tone, as a cloth's shading is; else it is even.

    Returns
    -------
    ndarray, same shape
    """
    if not frequencies:
        return image
    lines = np.asarray([*beside, *_apart(frequencies, beside, reach_px)], float)
    out = np.empty_like(image)
    for c in range(image.shape[2]):
        plane = np.ascontiguousarray(image[..., c])
        out[..., c] = plane - _Fit.of(plane.shape, lines, reach_px, kept=len(beside)).lines_in(
            plane, of_tone=of_tone
        )
    return out


def _apart(
    frequencies: Sequence[tuple[float, float]], taken: Sequence[tuple[float, float]], reach: float
) -> list[tuple[float, float]]:
    """Lines less those that an amplitude which may change over `reach` does not tell from another."""
    out: list[tuple[float, float]] = []
    for f in frequencies:
        known = np.array([*taken, *out]).reshape(-1, 2)
        gap = np.minimum(np.hypot(*(known - f).T), np.hypot(*(known + f).T))
        if np.all(gap > 1 / (2 * np.pi * reach)):
            out.append(f)
    return out


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Fit:
    """Demodulation of the same lines over and over; the first `kept` are not to be removed."""

    kept: int
    waves: Waves
    sides: Waves
    reach: float

    @staticmethod
    def of(shape: tuple[int, ...], lines: NDArray[np.float64], reach: float, *, kept: int) -> _Fit:
        step = int(np.clip(reach // 4, 1, _LONGEST_STEP))
        gap = 3 / (2 * np.pi * reach)
        aside = np.array([0, gap])
        sides = np.concatenate([lines + aside, lines - aside])
        return _Fit(
            kept=kept,
            waves=Waves(frequencies=lines, shape=(shape[0], shape[1]), step=step),
            sides=Waves(frequencies=sides, shape=(shape[0], shape[1]), step=step),
            reach=reach,
        )

    def lines_in(self, plane: NDArray[np.float32], *, of_tone: bool) -> NDArray[np.float32]:
        """Sum of the fitted lines: first plainly, then with weights from what that leaves."""
        import cv2

        lowest = float(np.hypot(*self.waves.frequencies.T).min())
        slow = _low_pass(plane, max(1 / max(lowest, 1e-3), 4.0))
        # What is burnt out or blocked up has no swing to take away, and the halves of a wave
        # beside it do not tell its swing: a whole period around is left out of the fit.
        whole = ((plane > _CLIPPED) & (plane < 1 - _CLIPPED)).astype(np.float32)
        period = 2 * int(np.clip(1 / max(lowest, 1e-3), 1, 16)) + 1
        sound = np.asarray(cv2.erode(whole, np.ones((period, period), np.uint8)), np.float32)

        def tone_of(base: NDArray[np.float32]) -> NDArray[np.float32]:
            if not of_tone:
                return np.ones_like(plane)
            soft = np.asarray(cv2.GaussianBlur(base, (0, 0), 2), np.float32)
            return 2 * np.maximum(soft, np.float32(_DARKEST))

        model = self._model(plane - slow, sound, tone_of(slow), last=False)
        for last in (False, True):
            clean = plane - model
            base = np.asarray(cv2.bilateralFilter(clean, 0, 12 / 255, 2), np.float32)
            weight = _evenness(clean, base) * sound
            model = self._model(plane - base, weight, tone_of(base), last=last)
        return np.asarray(model * whole)

    def _model(
        self,
        residual: NDArray[np.float32],
        weight: NDArray[np.float32],
        tone: NDArray[np.float32],
        *,
        last: bool,
    ) -> NDArray[np.float32]:
        """The lines with a swing in step with a tone, brought down to their background at the end."""
        amplitudes = self.demodulate(residual, weight, tone)
        model = tone * self.waves.synthesise(amplitudes)
        if not last:
            return model
        # Neighbouring lines leak into one another: what the fit leaves is fitted once more.
        amplitudes = amplitudes + self.demodulate(residual - model, weight, tone)
        model = tone * self.waves.synthesise(amplitudes)
        rest = self.demodulate(residual - model, weight, tone, aside=True)
        above = _above_background(amplitudes, rest)
        above[..., : self.kept] = 0
        return np.asarray(tone * self.waves.synthesise(above))

    def demodulate(
        self,
        residual: NDArray[np.float32],
        weight: NDArray[np.float32],
        tone: NDArray[np.float32],
        *,
        aside: bool = False,
    ) -> NDArray[np.complex64]:
        """Slowly varying complex amplitudes of the lines, or of their neighbours in frequency."""
        import cv2

        waves = self.sides if aside else self.waves
        sigma = self.reach / waves.step
        mass = waves.means(weight * tone * tone)
        level = np.maximum(cv2.GaussianBlur(mass, (0, 0), sigma, borderType=cv2.BORDER_REFLECT), 1e-6)
        found = smooth(waves.analyse(weight * tone * residual), sigma)
        return np.asarray(found / level[..., None], np.complex64)


def _evenness(clean: NDArray[np.float32], base: NDArray[np.float32]) -> NDArray[np.float32]:
    """Weights that count flat places and leave out edges and texture."""
    import cv2

    gx, gy = cv2.Sobel(base, cv2.CV_32F, 1, 0, scale=0.125), cv2.Sobel(base, cv2.CV_32F, 0, 1, scale=0.125)
    busy = cv2.GaussianBlur(gx * gx + gy * gy, (0, 0), 2)
    off = clean - base
    weight = 1 / (np.float32((_NOISE_CODE / 255) ** 2) + 4 * busy + cv2.GaussianBlur(off * off, (0, 0), 3))
    return np.asarray(weight / weight.max(), np.float32)


def _above_background(
    amplitudes: NDArray[np.complex64], sides: NDArray[np.complex64]
) -> NDArray[np.complex64]:
    """The part of each line's amplitude above what its neighbours in frequency hold."""
    lines = amplitudes.shape[2]
    power = (np.abs(sides[..., :lines]) ** 2 + np.abs(sides[..., lines:]) ** 2) / 2
    size2 = np.maximum(np.abs(amplitudes) ** 2, 1e-12)
    return np.asarray(amplitudes * np.sqrt(np.clip(1 - power / size2, 0, 1)), np.complex64)


def _low_pass(plane: NDArray[np.float32], sigma: float) -> NDArray[np.float32]:
    """Gaussian of `sigma` pixels, computed on a grid coarse enough to be cheap."""
    import cv2

    step = max(1, int(sigma // 4))
    rows, columns = plane.shape
    small_size = (max(1, -(-columns // step)), max(1, -(-rows // step)))
    small = cv2.resize(plane, small_size, interpolation=cv2.INTER_AREA)
    small = cv2.GaussianBlur(small, (0, 0), sigma / step, borderType=cv2.BORDER_REFLECT)
    return np.asarray(cv2.resize(small, (columns, rows), interpolation=cv2.INTER_CUBIC), np.float32)
