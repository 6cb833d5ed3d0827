"""A cloth's picture with its threads moved to where even threads would lie."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray


def straighten(
    image: NDArray[np.float32], frame: NDArray[np.float64], turns: NDArray[np.float64]
) -> tuple[NDArray[np.float32], NDArray[np.float64], NDArray[np.float64]]:
    """Move the threads to where a frame of two frequencies has them.

    Parameters
    ----------
    image : ndarray, shape (rows, columns)
    frame : ndarray, shape (2, 2)
        Warp and weft frequency as columns, cycles per pixel.
    turns : ndarray, shape (2, grid rows, grid columns)
        How far warp and weft are ahead of the frame, in threads.

    Returns
    -------
    straight : ndarray, shape (rows, columns)
    taken, place : ndarray, shape (2, grid rows, grid columns)
        Turns that were taken out, and where the grid's points come from in the picture, pixels.
    """
    import cv2

    rows, columns = image.shape
    y, x = np.mgrid[:rows, :columns].astype(np.float32)
    wide = np.stack([cv2.resize(t.astype(np.float32), (columns, rows)) for t in turns])
    shift = np.einsum("ij,jyx->iyx", np.linalg.inv(frame.T).astype(np.float32), wide)
    fx, fy = x, y
    for _ in range(3):
        fx, fy = x - _seen(shift[0], fx, fy), y - _seen(shift[1], fx, fy)
    straight = cv2.remap(image, fx, fy, interpolation=cv2.INTER_CUBIC, borderMode=cv2.BORDER_REFLECT)
    taken = _small([_seen(w, fx, fy) for w in wide], turns)
    return np.asarray(straight, np.float32), taken, _small([fx, fy], turns)


def _seen(plane: NDArray[np.float32], x: NDArray[np.float32], y: NDArray[np.float32]) -> NDArray[np.float32]:
    import cv2

    found = cv2.remap(plane, x, y, interpolation=cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
    return np.asarray(found, np.float32)


def _small(planes: list[NDArray[np.float32]], like: NDArray[np.float64]) -> NDArray[np.float64]:
    import cv2

    size = (like.shape[2], like.shape[1])
    return np.stack([cv2.resize(p, size, interpolation=cv2.INTER_AREA) for p in planes]).astype(np.float64)
