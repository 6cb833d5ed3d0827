"""Colour of screens whose chroma was folded by JPEG's halved colour resolution.

With 4:2:0 sampling (ITU-T T.871) chroma holds one sample for 2 x 2 pixels, so a screen above a
quarter of the rate keeps its luma in place while its chroma folds by half a cycle per pixel on
each such axis. Read there, with the phase that the shifted sampling grid gives it, it tells the
ink again.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from moire.patches import Codes, cut_patches, patch_phasors, strong_tiles

_LEAST_GAIN = 0.15
_TONE_FLOOR = 20.0
# A codec shrinks faint chroma by an unknown share, down to nothing; spread of ln(share) and noise
# of chroma over luma as seen on prints used for tuning.
_SHARE, _SHARE_SPREAD, _CHROMA_NOISE = 0.7, 0.7, 0.035
# Full-range YCbCr of ITU-T T.871 and back.
_TO_YCC = np.array([[0.299, 0.587, 0.114], [-0.168736, -0.331264, 0.5], [0.5, -0.418688, -0.081312]])
_TO_RGB = np.array([[1.0, 0.0, 1.402], [1.0, -0.344136, -0.714136], [1.0, 1.772, 0.0]])


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ChromaReading:
    """What is left of a line's chroma after a codec halved its resolution.

    Attributes
    ----------
    chroma : ndarray, shape (2,)
        In-phase Cb and Cr swing over the luma swing.
    tone : ndarray, shape (3,)
        Mean RGB code values where the line is.
    """

    chroma: NDArray[np.float64]
    tone: NDArray[np.float64]

    @property
    def colour(self) -> NDArray[np.float64]:
        """Signed modulation of red, green and blue relative to the tone, mean size 1."""
        relative = _TO_RGB @ np.array([1.0, *self.chroma]) / (self.tone + _TONE_FLOOR)
        return np.asarray(relative / max(float(np.abs(relative).mean()), 1e-9))

    def misfit(self, signature: tuple[float, float, float]) -> float:
        """Squared standard errors by which an ink misses, at the likeliest loss of chroma.

        Parameters
        ----------
        signature : (float, float, float)
            What the ink takes of red, green and blue, as shares of the local tone.
        """
        swing = _TO_YCC @ (np.array(signature) * (self.tone + _TONE_FLOOR))
        share = _shares()
        gap = self.chroma - share[:, None] * swing[1:] / swing[0]
        cost = (gap**2).sum(axis=1) / _CHROMA_NOISE**2 + (np.log(share / _SHARE) / _SHARE_SPREAD) ** 2
        return float(cost.min())


@lru_cache(maxsize=1)
def _shares() -> NDArray[np.float64]:
    return np.geomspace(0.03, 1.3, 60)


def read_chroma(
    codes: Codes, frequencies: NDArray[np.float64], weights: NDArray[np.float32], *, size: int
) -> tuple[ChromaReading, ...]:
    """Chroma of each line, read where halved chroma resolution folds it.

    Parameters
    ----------
    codes : ndarray, shape (rows, columns, 3)
        RGB code values on a 0..255 scale.
    frequencies : ndarray, shape (n, 2)
        ``(fx, fy)`` in cycles per pixel, within half a cycle.
    weights : ndarray, shape (n, tile rows, tile columns)
        Where each line counts.
    size : int
        Tile side of the weights.
    """
    beyond = np.abs(frequencies) > 0.25
    shift = -0.5 * np.sign(frequencies) * beyond
    # The chroma grid lies half a pixel off: a quarter turn of phase for each folded axis.
    turn = np.prod(np.where(beyond, -1j * np.sign(frequencies), 1), axis=1)
    gain = np.maximum(np.abs(np.cos(np.pi * frequencies)).prod(axis=1), _LEAST_GAIN)
    out = []
    for f, moved, back, weight in zip(frequencies, frequencies + shift, turn / gain, weights, strict=True):
        tiles = strong_tiles(weight)
        patches = cut_patches(codes, tiles, size=size)
        v, tone = patch_phasors(patches, np.stack([f, moved]))
        luma, chroma = v[0] @ _TO_YCC[0], v[1] @ _TO_YCC[1:].T
        # Patches start on even pixels, so the folding keeps its phase from one to the next.
        share = weight[tuple(tiles.T)]
        reference = share * np.conj(luma) / np.maximum(np.abs(luma), 1e-9)
        strength = max(float((np.abs(luma) * share).sum()), 1e-9)
        seen = np.real((chroma * back * reference[:, None]).sum(axis=0)) / strength
        mean = (tone * share[:, None]).sum(axis=0) / max(float(share.sum()), 1e-9)
        out.append(ChromaReading(chroma=seen, tone=mean))
    return tuple(out)
