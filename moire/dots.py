"""Dots: Fourier coefficients of the ink of one screen cell over the tone range.

A screen of one ink is periodic, so its spectrum is a set of lines at ``m k1 + n k2`` whose
weights are the Fourier coefficients c(m, n) of one cell's ink. Circular dots have a closed
form (a jinc); the press's own spot shapes are transformed from their threshold cells.
"""

from __future__ import annotations

from functools import lru_cache
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

from moire.press import threshold_cell

Shape = Literal["disc", "oval", "round", "ellipse", "diamond", "square", "line"]
SHAPES: tuple[Shape, ...] = get_args(Shape)
# Semi-axes of an oval dot (elliptic dots of 1.3 to 1.5 to 1 are common practice, no source).
OVAL_AXES = 1.4


@lru_cache(maxsize=16)
def dot_coefficients(shape: Shape, tones: tuple[float, ...], cells: int) -> NDArray[np.complex128]:
    """c(m, n) of a dot shape at several tones.

    Parameters
    ----------
    shape : str
        One of `SHAPES`; ``disc`` and ``oval`` are true circles and ellipses of ink up to half
        tone and of paper above, the others are the press's spot functions.
    tones : tuple of float
        Shares of the cell that are inked, 0..1.
    cells : int
        Side of the result, even.

    Returns
    -------
    ndarray, shape (tones, cells, cells)
        Rows are orders n of the second vector, columns orders m of the first, both as
        ``numpy.fft.fftfreq`` orders them. Read-only.
    """
    orders = np.rint(np.fft.fftfreq(cells) * cells).astype(int)
    if shape == "disc" or shape == "oval":
        m, n = orders[None, :], orders[:, None]
        stretch = OVAL_AXES if shape == "oval" else 1.0
        planes = [round_coefficient(t, m, n, stretch=stretch).astype(complex) for t in tones]
    else:
        cell = threshold_cell(shape)
        at = np.ix_(orders, orders)
        planes = [np.fft.fft2(cell < tone, norm="forward")[at] for tone in tones]
    out = np.stack(planes)
    out.setflags(write=False)
    return out


def round_coefficient(
    tone: float, m: NDArray[np.integer], n: NDArray[np.integer], *, stretch: float = 1.0
) -> NDArray[np.float64]:
    """c(m, n) of a circle or ellipse of ink, or of paper above half tone.

    Parameters
    ----------
    tone : float
        0..1.
    m, n : ndarray of int
        Orders, broadcast together.
    stretch : float
        Ratio of the semi-axis along the first vector to that along the second.

    Notes
    -----
    ``a 2 J1(2 pi q) / (2 pi q)`` with q the order measured in semi-axes: the Fourier transform
    of a disc (R. N. Bracewell, The Fourier Transform and Its Applications).
    """
    from scipy.special import j1

    area = min(tone, 1 - tone)
    radius = np.sqrt(area / np.pi)
    q = 2 * np.pi * radius * np.hypot(np.sqrt(stretch) * m, n / np.sqrt(stretch))
    c = area * np.where(q > 0, 2 * j1(q) / np.where(q > 0, q, 1), 1.0)
    if tone <= 0.5:
        return np.asarray(c)
    # Paper dots at the cell's corners: what is not ink is the same dot half a cell away.
    return np.asarray(np.where((m == 0) & (n == 0), tone, -np.where((m + n) % 2, -1, 1) * c))
