"""Resampling kernels: what a picture library's resizer does to a line, image by image.

A resizer computes output k from inputs near ``x_k``; its weights repeat with the fraction of
``x_k``. A line at f therefore comes out at ``f + j`` cycles per input pixel with amplitude
A_j(f), the Fourier coefficients of its response over that fraction; j = 0 is the line itself,
the others are images that a coarse kernel leaves.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from fractions import Fraction
from functools import lru_cache
from typing import Literal, get_args

import numpy as np
from numpy.typing import NDArray

Kernel = Literal[
    "opencv-nearest", "opencv-area", "opencv-linear", "opencv-cubic", "opencv-lanczos4",
    "pillow-nearest", "pillow-box", "pillow-bilinear", "pillow-hamming", "pillow-bicubic", "pillow-lanczos",
]  # fmt: skip
KERNELS: tuple[Kernel, ...] = get_args(Kernel)
Responses = Callable[[NDArray[np.float64], int], NDArray[np.complex128]]
IMAGES = (-2, -1, 0, 1, 2)
_PHASES = 96
_DENOMINATOR = 48
_GRID = 129


@lru_cache(maxsize=512)
def image_responses(kernel: Kernel, ratio: float) -> Responses:
    """A_j(f) of a resizer along one axis.

    Parameters
    ----------
    kernel : str
        One of `KERNELS`: the library and the name of its interpolation.
    ratio : float
        Input pixels per output pixel, >= 1 for a reduction; below 1 ``opencv-area`` is taken as linear.

    Returns
    -------
    callable
        From frequencies in cycles per input pixel, each in [-1/2, 1/2], and an image j of `IMAGES`
        to complex amplitudes of the same shape. Images that coincide on the
        output grid with j = 0 are already in it.
    """
    step = Fraction(ratio).limit_denominator(_DENOMINATOR)
    exact = abs(float(step) - ratio) < 1e-9 * ratio
    count = step.denominator if exact else _PHASES
    offset = _first_place(kernel, ratio)
    # Fractions of x_k that occur: all multiples of 1/q for a ratio p/q, any for another.
    places = (offset + ratio * np.arange(count)) if exact else 100 + (np.arange(count) + 0.5) / count
    places = places if not exact else places + 100 * step.numerator
    f = np.linspace(-0.5, 0.5, _GRID)
    response = np.empty((count, _GRID), complex)
    for row, place in enumerate(places):
        taps, weights = _weights(kernel, ratio, float(place))
        response[row] = np.exp(2j * np.pi * f[:, None] * (taps - place)) @ weights
    table = np.zeros((len(IMAGES), _GRID), complex)
    for row, j in enumerate(IMAGES):
        # With q phases only q images differ; for q = 1 all lie on the line itself.
        if -count / 2 < j <= count / 2:
            table[row] = (response * np.exp(-2j * np.pi * j * places)[:, None]).mean(axis=0)

    def at(frequency: NDArray[np.float64], image: int) -> NDArray[np.complex128]:
        row = table[IMAGES.index(image)]
        return np.asarray(np.interp(frequency, f, row.real) + 1j * np.interp(frequency, f, row.imag))

    return at


def _first_place(kernel: Kernel, ratio: float) -> float:
    """Input coordinate of output 0, with input n at coordinate n."""
    # OpenCV's nearest takes floor(k ratio), all others align pixel centres.
    return 0.0 if kernel == "opencv-nearest" else 0.5 * ratio - 0.5


def _weights(kernel: Kernel, ratio: float, place: float) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Input pixels and weights of the output at input coordinate `place`; weights sum to 1."""
    library, name = kernel.split("-")
    if name == "nearest":
        tap = math.floor(place + 1e-9) if library == "opencv" else math.floor(place + 0.5 + 1e-9)
        return np.array([float(tap)]), np.ones(1)
    if name == "area" and ratio < 1:
        # An area below one pixel is no average: such a rate is made by straight lines between samples.
        kernel, name = "opencv-linear", "linear"
    if name == "area":
        low, high = place - ratio / 2, place + ratio / 2
        taps = np.arange(math.floor(low + 0.5), math.ceil(high + 0.5)).astype(float)
        covered = np.clip(np.minimum(taps + 0.5, high) - np.maximum(taps - 0.5, low), 0, None)
        return taps, covered / covered.sum()
    if library == "opencv":
        half = {"linear": 1, "cubic": 2, "lanczos4": 4}[name]
        taps = math.floor(place) + np.arange(1 - half, half + 1).astype(float)
        weights = _SHAPES[kernel](taps - place)
        return taps, weights / weights.sum()
    # Pillow stretches its kernels by the ratio, so that they cut what the new grid cannot hold.
    scale = max(ratio, 1.0)
    support = _SUPPORT[kernel] * scale
    centre = place + 0.5
    first, last = max(int(centre - support + 0.5), 0), int(centre + support + 0.5)
    taps = np.arange(first, last).astype(float)
    weights = _SHAPES[kernel]((taps - centre + 0.5) / scale)
    return taps, weights / weights.sum()


def _cubic(x: NDArray[np.float64], a: float) -> NDArray[np.float64]:
    """Keys' cubic convolution (R. G. Keys, IEEE Trans. ASSP-29 (1981) 1153)."""
    x = np.abs(x)
    near = ((a + 2) * x - (a + 3)) * x * x + 1
    far = (((x - 5) * x + 8) * x - 4) * a
    return np.where(x < 1, near, np.where(x < 2, far, 0.0))


def _lanczos(x: NDArray[np.float64], lobes: int) -> NDArray[np.float64]:
    """Duchon, J. Appl. Meteorol. 18 (1979) 1016."""
    return np.where(np.abs(x) < lobes, np.sinc(x) * np.sinc(x / lobes), 0.0)


def _hamming(x: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.where(np.abs(x) < 1, np.sinc(x) * (0.54 + 0.46 * np.cos(np.pi * x)), 0.0)


_SHAPES: dict[Kernel, Callable[[NDArray[np.float64]], NDArray[np.float64]]] = {
    "opencv-linear": lambda x: np.clip(1 - np.abs(x), 0, None),
    "opencv-cubic": lambda x: _cubic(x, -0.75),
    "opencv-lanczos4": lambda x: _lanczos(x, 4),
    "pillow-box": lambda x: ((x > -0.5) & (x <= 0.5)).astype(float),
    "pillow-bilinear": lambda x: np.clip(1 - np.abs(x), 0, None),
    "pillow-hamming": _hamming,
    "pillow-bicubic": lambda x: _cubic(x, -0.5),
    "pillow-lanczos": lambda x: _lanczos(x, 3),
}
_SUPPORT: dict[Kernel, float] = {
    "pillow-box": 0.5, "pillow-bilinear": 1, "pillow-hamming": 1, "pillow-bicubic": 2, "pillow-lanczos": 3,
}  # fmt: skip
