"""Colour of screens whose chroma was folded by JPEG's halved colour resolution.

With 4:2:0 sampling (ITU-T T.871) chroma holds one sample for 2 x 2 pixels, so a screen above a
quarter of the rate keeps its luma in place while its chroma folds by half a cycle per pixel on
each such axis. Read there, with the phase that the shifted sampling grid gives it, it tells the
ink again.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from moire.spectrum import tile_means, tile_phasors

_LEAST_GAIN = 0.15
_TONE_FLOOR = 20.0
# Full-range YCbCr of ITU-T T.871 and back.
_TO_YCC = np.array([[0.299, 0.587, 0.114], [-0.168736, -0.331264, 0.5], [0.5, -0.418688, -0.081312]])
_TO_RGB = np.array([[1.0, 0.0, 1.402], [1.0, -0.344136, -0.714136], [1.0, 1.772, 0.0]])


def screen_colours(
    channels: NDArray[np.float32],
    frequencies: NDArray[np.float64],
    weights: NDArray[np.float32],
    *,
    size: int,
) -> NDArray[np.float64]:
    """Signed modulation of red, green and blue by each line, chroma read where JPEG folded it.

    Parameters
    ----------
    channels : ndarray, shape (rows, columns, 3)
        RGB code values on a 0..255 scale.
    frequencies : ndarray, shape (n, 2)
        ``(fx, fy)`` in cycles per pixel, within half a cycle.
    weights : ndarray, shape (n, tile rows, tile columns)
        Where each line counts.
    size : int
        Tile side of the weights.

    Returns
    -------
    ndarray, shape (n, 3)
        Relative to the local tone, scaled to a mean size of 1.
    """
    ycc = (channels @ _TO_YCC.T.astype(np.float32)).astype(np.float32)
    beyond = np.abs(frequencies) > 0.25
    shift = -0.5 * np.sign(frequencies) * beyond
    luma = tile_phasors(ycc[..., :1], frequencies, size=size)[0][..., 0]
    direct = tile_phasors(ycc[..., 1:], frequencies, size=size)[0]
    folded = tile_phasors(ycc[..., 1:], frequencies + shift, size=size)[0]
    # The chroma grid lies half a pixel off: a quarter turn of phase for each folded axis.
    turn = np.prod(np.where(beyond, -1j * np.sign(frequencies), 1), axis=1)
    gain = np.maximum(np.abs(np.cos(np.pi * frequencies)).prod(axis=1), _LEAST_GAIN)
    tone = tile_means(channels, size=size)
    out = np.empty((len(frequencies), 3))
    for i, weight in enumerate(weights):
        reference = weight * np.conj(luma[i]) / np.maximum(np.abs(luma[i]), 1e-9)
        strength = float((np.abs(luma[i]) * weight).sum())
        seen = np.array([_cross(direct[i], reference), _cross(folded[i] * turn[i], reference) / gain[i]])
        chroma = seen[int(np.argmax(np.linalg.norm(seen, axis=1)))]
        swing = _TO_RGB @ np.array([strength, *chroma])
        mean = (tone * weight[..., None]).sum(axis=(0, 1)) / max(float(weight.sum()), 1e-9)
        relative = swing / (mean + _TONE_FLOOR)
        out[i] = relative / max(float(np.abs(relative).mean()), 1e-9)
    return out


def _cross(phasors: NDArray[np.complex64], reference: NDArray[np.complex64]) -> NDArray[np.float64]:
    """In-phase part of two chroma planes against the luma reference."""
    return np.real((phasors * reference[..., None]).sum(axis=(0, 1)))
