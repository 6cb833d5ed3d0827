"""Lines brought to rest: each multiplied down by its frequency and smoothed to a coarse grid."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

_BAND = 0.12
_APART = 0.45
_PLACES = 256


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RestingLines:
    """Complex amplitudes of lines on a grid about half a thread apart.

    Attributes
    ----------
    frame : ndarray, shape (2, 2)
        Warp and weft frequency as columns, cycles per pixel.
    orders : ndarray, shape (n, 2)
    values : ndarray, shape (n, rows, columns)
    x, y : ndarray
        Places of the grid in pixels.
    shares : ndarray, shape (n,)
        How much each line has to say: its power, none dominant.
    period, smoothing : float
        Mean distance of threads, and sigma of the Gaussian that the lines were seen through, pixels.
    """

    frame: NDArray[np.float64]
    orders: NDArray[np.float64]
    values: NDArray[np.complex64]
    x: NDArray[np.float64]
    y: NDArray[np.float64]
    shares: NDArray[np.float64]
    period: float
    smoothing: float

    @property
    def step(self) -> tuple[float, float]:
        return (float(self.x[1] - self.x[0]), float(self.y[1] - self.y[0]))


def bring_to_rest(
    image: NDArray[np.float32], frame: NDArray[np.float64], orders: NDArray[np.float64]
) -> RestingLines:
    import cv2

    period = 1 / math.sqrt(abs(float(np.linalg.det(frame))))
    lines = orders @ frame.T
    apart = min(
        float(np.hypot(*(a - b * s)))
        for i, a in enumerate(lines)
        for b in [*lines[:i], np.zeros(2)]
        for s in (1, -1)
    )
    smoothing = max(1 / (2 * math.pi * _BAND) * period, _APART / max(apart, 1e-6))
    smoothing = min(smoothing, 4 * period)
    step = max(1, int(smoothing / 2))
    rows, columns = image.shape
    size = (max(2, columns // step), max(2, rows // step))
    flat = image - cv2.GaussianBlur(image, (0, 0), period)
    # Strong edges of a picture on the cloth must not outshout its threads.
    limit = 4 * float(np.abs(flat).mean()) + 1e-6
    flat = np.clip(flat, -limit, limit)
    values = np.empty((len(lines), size[1], size[0]), np.complex64)
    for i, f in enumerate(lines):
        x = np.exp(-2j * np.pi * f[0] * np.arange(columns)).astype(np.complex64)
        y = np.exp(-2j * np.pi * f[1] * np.arange(rows)).astype(np.complex64)
        product = flat * y[:, None] * x[None, :]
        for part, out in ((product.real, values[i].real), (product.imag, values[i].imag)):
            small = cv2.resize(np.ascontiguousarray(part), size, interpolation=cv2.INTER_AREA)
            out[...] = cv2.GaussianBlur(
                small, (0, 0), smoothing * size[0] / columns, sigmaY=smoothing * size[1] / rows
            )
    # A median needs no more places than these, however large the picture.
    thin = max(1, max(size) // _PLACES)
    power = np.array([np.median(np.abs(v[::thin, ::thin])) for v in values])
    return RestingLines(
        frame=frame,
        orders=orders,
        values=values,
        x=(np.arange(size[0]) + 0.5) * columns / size[0] - 0.5,
        y=(np.arange(size[1]) + 0.5) * rows / size[1] - 0.5,
        shares=np.clip(power / max(float(power.max()), 1e-9), 0.05, 1.0),
        period=period,
        smoothing=smoothing,
    )


def blur(v: NDArray[np.complex64], fields: RestingLines, across: float, down: float) -> NDArray[np.complex64]:
    import cv2

    sx, sy = across * fields.period / fields.step[0], down * fields.period / fields.step[1]
    parts = [
        cv2.GaussianBlur(np.ascontiguousarray(part, np.float32), (0, 0), max(sx, 1e-3), sigmaY=max(sy, 1e-3))
        for part in (v.real, v.imag)
    ]
    return np.asarray(parts[0] + 1j * parts[1], np.complex64)


def advance_along(v: NDArray[np.complex64], axis: int) -> NDArray[np.complex64]:
    """Products of neighbours along x (axis 0) or y (1), same shape as the field (last one repeated)."""
    if axis == 0:
        product = v[:, 1:] * np.conj(v[:, :-1])
        return np.concatenate([product, product[:, -1:]], axis=1)
    product = v[1:] * np.conj(v[:-1])
    return np.concatenate([product, product[-1:]])


def departures_along(fields: RestingLines, axis: int, across: float, down: float) -> NDArray[np.float64]:
    """Departures of both thread frequencies around each place along one axis, shape (rows, columns, 2)."""
    weight = fields.shares[:, None]
    solve = np.linalg.pinv(fields.orders * weight) * weight.T
    out = np.zeros((*fields.values.shape[1:], 2))
    for i, v in enumerate(fields.values):
        turn = np.angle(blur(advance_along(v, axis), fields, across, down))
        for thread in (0, 1):
            out[..., thread] += turn * (solve[thread, i] / (2 * np.pi * fields.step[axis]))
    return out


def local_departures(fields: RestingLines, across: float, down: float) -> NDArray[np.float64]:
    """Departures of both thread frequencies around each place, shape (rows, columns, 2, 2).

    The last axis is (fx, fy), the one before it warp and weft.
    """
    return np.stack([departures_along(fields, axis, across, down) for axis in (0, 1)], axis=-1)
