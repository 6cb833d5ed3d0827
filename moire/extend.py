"""Continuation of a screened picture beyond its borders, so that filters see whole cells there."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from moire.nulls import ScreenLattice

_LONGEST_PX = 72
_SIDEWAYS_PX = 12


def extend(
    picture: NDArray[np.float32], lattices: Sequence[ScreenLattice], *, margin: int
) -> NDArray[np.float32]:
    """Picture with `margin` more pixels on each side.

    Parameters
    ----------
    picture : ndarray, shape (rows, columns, channels)
        Linear light.
    lattices : sequence of ScreenLattice
    margin : int

    Notes
    -----
    The tone is mirrored; the screens are continued by the whole-pixel shift that is nearest to a
    common period of all of them. Mirroring the dots too would break their phase at the border.
    """
    import cv2

    sigma = 0.7 * float(np.mean([g.period_px for g in lattices]))
    tone = cv2.GaussianBlur(picture, (0, 0), sigma, borderType=cv2.BORDER_REFLECT).reshape(picture.shape)
    dots = picture - tone
    vectors = np.array([k for g in lattices for k in (g.k1, g.k2)])
    dots = _continue_columns(dots, vectors, margin)
    dots = np.swapaxes(_continue_columns(np.swapaxes(dots, 0, 1), vectors[:, ::-1], margin), 0, 1)
    rows, columns, channels = dots.shape
    tone = cv2.copyMakeBorder(tone, margin, margin, margin, margin, cv2.BORDER_REFLECT)
    return np.ascontiguousarray(tone.reshape(rows, columns, channels) + dots)


def _continue_columns(
    dots: NDArray[np.float32], vectors: NDArray[np.float64], margin: int
) -> NDArray[np.float32]:
    rows, columns = dots.shape[:2]
    across, along = _common_shift(vectors, min(_LONGEST_PX, columns - 1))
    out = np.empty((rows, columns + 2 * margin, dots.shape[2]), np.float32)
    out[:, margin : margin + columns] = dots
    shifted = np.clip(np.arange(rows) + along, 0, rows - 1)
    back = np.clip(np.arange(rows) - along, 0, rows - 1)
    left = margin
    while left > 0:
        start = max(0, left - across)
        out[:, start:left] = out[:, start + across : left + across][shifted]
        left = start
    right = margin + columns
    while right < out.shape[1]:
        end = min(out.shape[1], right + across)
        out[:, right:end] = out[:, right - across : end - across][back]
        right = end
    return out


def _common_shift(vectors: NDArray[np.float64], longest: int) -> tuple[int, int]:
    """Whole-pixel shift across and along a border that is nearest to a period of every lattice."""
    shortest = max(1, int(np.ceil(1 / np.hypot(vectors[:, 0], vectors[:, 1]).max())))
    across = np.arange(min(shortest, longest), longest + 1)
    along = np.arange(-_SIDEWAYS_PX, _SIDEWAYS_PX + 1)
    x, y = np.meshgrid(across, along)
    phase = vectors[:, 0, None, None] * x + vectors[:, 1, None, None] * y
    # Of equal shifts the straightest: one along the border runs out at the corners.
    cost = (2 - 2 * np.cos(2 * np.pi * phase)).sum(axis=0) + 1e-6 * np.abs(y)
    row, column = np.unravel_index(int(np.argmin(cost)), cost.shape)
    return int(x[row, column]), int(y[row, column])
