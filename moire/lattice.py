"""Lattices on the sampling grid: the record, and the geometry of wrapped frequencies."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.peaks import Peak

Vector = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Lattice:
    """A two-vector lattice as observed on the sampling grid.

    Attributes
    ----------
    k1, k2 : ndarray, shape (2,)
        Generators ``(fx, fy)`` in cycles per pixel.
    first, second : Peak
        The peaks they come from.
    strength : float
        Geometric mean amplitude times coherence, in code values.
    squareness_bins : float
        Distance of k2 from k1 turned by 90 degrees, in bins.
    """

    k1: Vector
    k2: Vector
    first: Peak
    second: Peak
    strength: float
    squareness_bins: float

    @property
    def colour(self) -> Vector:
        """Modulation of each channel, both lines together."""
        return self.first.colour * self.first.amplitude + self.second.colour * self.second.amplitude


def wrap(f: NDArray[np.float64]) -> NDArray[np.float64]:
    """Frequency folded into [-1/2, 1/2) cycles per pixel on each axis."""
    return f - np.floor(f + 0.5)


def grid_distance(a: NDArray[np.float64], b: NDArray[np.float64]) -> NDArray[np.float64]:
    """Distance of two frequencies modulo the sampling grid and sign, cycles per pixel."""
    same, opposite = wrap(a - b), wrap(a + b)
    least = np.minimum(same[..., 0] ** 2 + same[..., 1] ** 2, opposite[..., 0] ** 2 + opposite[..., 1] ** 2)
    return np.asarray(np.sqrt(least))


def quarter_turn(f: NDArray[np.float64], aspect: tuple[float, float] = (1.0, 1.0)) -> NDArray[np.float64]:
    """Frequency turned by 90 degrees on the page.

    `aspect` is the ppi of each axis over a common rate.
    """
    return np.array([f[1] * aspect[1] / aspect[0], -f[0] * aspect[0] / aspect[1]])


def transfer(f: NDArray[np.float64]) -> float:
    """Typical scanner MTF at a frequency: box aperture and a lens of 0.45 px, floored at 0.12."""
    box = float(np.sinc(f[0]) * np.sinc(f[1]))
    return max(0.12, box * float(np.exp(-2 * np.pi**2 * 0.45**2 * (f @ f))))


def alike(a: Vector, b: Vector) -> float:
    """Cosine of two colours."""
    return float(a @ b / (np.linalg.norm(a) * np.linalg.norm(b) + 1e-12))


def overlap(a: NDArray[np.float32], b: NDArray[np.float32]) -> float:
    both, smaller = float(np.minimum(a, b).sum()), float(min(a.sum(), b.sum()))
    return both / smaller if smaller > 0 else 0.0
