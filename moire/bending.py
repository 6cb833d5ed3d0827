"""The smooth bend of a cloth: how both sets of threads drift over a picture, as cubics."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from moire.demodulation import RestingLines, advance_along, blur

_PLACES = 64


def fit_bend(fields: RestingLines, shape: tuple[int, int]) -> NDArray[np.float64]:
    """Smooth drift of both thread sets from their frame, in turns: coefficients, shape (2, 9).

    Parameters
    ----------
    fields : RestingLines
    shape : (int, int)
        Columns and rows of the picture.
    """
    # A cubic needs no more places than these, however large the picture.
    thin = max(1, int(2 * fields.period / min(fields.step)), max(fields.values.shape[1:]) // _PLACES)
    seen = np.s_[::thin, ::thin]
    gradients = _gradients(fields, shape, thin)
    design, target, weight = [], [], []
    for order, v, share in zip(fields.orders, fields.values, fields.shares, strict=True):
        strong = max(float(np.quantile(np.abs(v[seen]), 0.9)) ** 2, 1e-12)
        for axis, gradient in enumerate(gradients):
            mean = blur(advance_along(v, axis), fields, 2.0, 2.0)[seen]
            b = gradient.reshape(-1, 9)
            design.append(np.concatenate([order[0] * b, order[1] * b], axis=1))
            target.append(np.angle(mean).ravel() / (2 * np.pi * fields.step[axis]))
            weight.append(share * np.clip(np.abs(mean) / strong, 0, 1).ravel())
    a, t, w = np.concatenate(design), np.concatenate(target), np.concatenate(weight)
    solution = np.zeros(18)
    robust = np.ones_like(w)
    for _ in range(6):
        root = (w * robust)[:, None] * a
        solution = np.linalg.lstsq(root.T @ a, root.T @ t, rcond=1e-10)[0]
        residual = np.abs(t - a @ solution)
        scale = 1.5 * float(np.median(residual[w > 0.05])) if (w > 0.05).any() else 1.0
        robust = 1 / np.maximum(1, residual / max(scale, 1e-9)) ** 2
    return np.asarray(solution.reshape(2, 9))


def bend_turns(
    drift: NDArray[np.float64], fields: RestingLines, shape: tuple[int, int]
) -> NDArray[np.float64]:
    """Drift of warp and weft over the grid in turns, shape (2, rows, columns)."""
    half = np.array(shape) / 2
    x, y = (fields.x + 0.5) / half[0] - 1, ((fields.y + 0.5) / half[1] - 1)[:, None]
    out = []
    for c in drift:
        flat = c[0] * x + c[2] * x * x + c[5] * x**3
        slope = c[3] * x + c[6] * x * x + c[1]
        out.append(flat + y * (slope + y * (c[7] * x + c[4] + y * c[8])))
    return np.stack(out)


def _gradients(
    fields: RestingLines, shape: tuple[int, int], thin: int = 1
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Gradients per pixel along x and y of the polynomial's terms at every `thin`th place.

    Terms are x, y, x2, xy, y2, x3, x2y, xy2, y3, with coordinates from -1 to 1 over the picture.
    """
    half = np.array(shape) / 2
    x, y = np.meshgrid((fields.x[::thin] + 0.5) / half[0] - 1, (fields.y[::thin] + 0.5) / half[1] - 1)
    zero, one = np.zeros_like(x), np.ones_like(x)
    along = np.stack([one, zero, 2 * x, y, zero, 3 * x * x, 2 * x * y, y * y, zero], axis=-1) / half[0]
    down = np.stack([zero, one, zero, x, 2 * y, zero, x * x, 2 * x * y, 3 * y * y], axis=-1) / half[1]
    return along, down
