"""Slow amplitudes of many lines at once, on a grid of square blocks.

A line that varies slowly needs no more than one complex number a block: the mean of the picture
times the conjugate wave. For all lines together that is one matrix product of the blocks' pixels
with a small table, and its transpose puts the waves back.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Waves:
    """Lines and the grid on which their amplitudes live.

    Attributes
    ----------
    frequencies : ndarray, shape (lines, 2)
        ``(fx, fy)`` cycles per pixel.
    shape : (int, int)
        Rows and columns of the picture.
    step : int
        Side of a block in pixels.
    """

    frequencies: NDArray[np.float64]
    shape: tuple[int, int]
    step: int

    @property
    def grid(self) -> tuple[int, int]:
        """Rows and columns of blocks that cover the picture."""
        return -(-self.shape[0] // self.step), -(-self.shape[1] // self.step)

    def analyse(self, plane: NDArray[np.float32]) -> NDArray[np.complex64]:
        """Block means of a plane times each conjugate wave, shape (grid rows, grid columns, lines)."""
        across, down = self._within()
        waves = np.exp(-2j * np.pi * (down + across)) / self.step**2
        table = np.concatenate([waves.real, waves.imag], axis=1).astype(np.float32)
        found = self._blocks(plane) @ table
        count = len(self.frequencies)
        values = (found[:, :count] + 1j * found[:, count:]).reshape(*self.grid, count)
        return np.asarray(values * np.conj(self._origins()), np.complex64)

    def synthesise(self, amplitudes: NDArray[np.complex64]) -> NDArray[np.float32]:
        """Sum of the waves, twice the real part of amplitude times wave, shape `shape`.

        Inside a block the amplitude goes on along its slope.
        """
        around = np.pad(amplitudes, ((1, 1), (1, 1), (0, 0)), mode="edge")
        down_slope = (around[2:, 1:-1] - around[:-2, 1:-1]) / (2 * self.step)
        across_slope = (around[1:-1, 2:] - around[1:-1, :-2]) / (2 * self.step)
        origins = self._origins()
        parts = [a * origins for a in (amplitudes, down_slope, across_slope)]
        values = np.concatenate([p for part in parts for p in (part.real, part.imag)], axis=2)
        across, down = self._within()
        waves = 2 * np.exp(2j * np.pi * (across + down))
        centred = np.arange(self.step) - (self.step - 1) / 2
        from_y, from_x = (c.reshape(-1, 1) for c in np.meshgrid(centred, centred, indexing="ij"))
        tables = [waves, waves * from_y, waves * from_x]
        table = np.concatenate([p for t in tables for p in (t.real, -t.imag)], axis=1).astype(np.float32)
        blocks = values.reshape(-1, values.shape[2]).astype(np.float32) @ table.T
        rows, columns = self.grid
        plane = blocks.reshape(rows, columns, self.step, self.step).swapaxes(1, 2)
        whole = plane.reshape(rows * self.step, columns * self.step)
        return np.ascontiguousarray(whole[: self.shape[0], : self.shape[1]])

    def means(self, plane: NDArray[np.float32]) -> NDArray[np.float32]:
        """Block means of a plane, zero beyond its borders, shape `grid`."""
        rows, columns = self.grid
        return np.asarray(self._padded(plane).reshape(rows, self.step, columns, self.step).mean(axis=(1, 3)))

    def _padded(self, plane: NDArray[np.float32]) -> NDArray[np.float32]:
        rows, columns = (n * self.step for n in self.grid)
        if (rows, columns) == plane.shape:
            return plane
        whole = np.zeros((rows, columns), np.float32)
        whole[: plane.shape[0], : plane.shape[1]] = plane
        return whole

    def _blocks(self, plane: NDArray[np.float32]) -> NDArray[np.float32]:
        rows, columns = self.grid
        blocks = self._padded(plane).reshape(rows, self.step, columns, self.step).swapaxes(1, 2)
        return blocks.reshape(rows * columns, self.step**2)

    def _within(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Phases inside a block, in turns, shape (pixels of a block, lines)."""
        at = np.arange(self.step)
        y, x = (p.reshape(-1, 1) for p in np.meshgrid(at, at, indexing="ij"))
        return x * self.frequencies[:, 0], y * self.frequencies[:, 1]

    def _origins(self) -> NDArray[np.complex64]:
        """Each wave at the first pixel of each block, shape (grid rows, grid columns, lines)."""
        rows, columns = self.grid
        down = np.exp(2j * np.pi * self.step * np.arange(rows)[:, None] * self.frequencies[:, 1])
        across = np.exp(2j * np.pi * self.step * np.arange(columns)[:, None] * self.frequencies[:, 0])
        return down[:, None, :].astype(np.complex64) * across[None, :, :].astype(np.complex64)


def smooth(values: NDArray[np.complex64], sigma: float) -> NDArray[np.complex64]:
    """Gaussian of `sigma` blocks over a grid of complex amplitudes, shape (rows, columns, lines)."""
    import cv2

    flat = np.ascontiguousarray(values).view(np.float32)
    return np.asarray(
        cv2.GaussianBlur(flat, (0, 0), sigma, borderType=cv2.BORDER_REFLECT).reshape(flat.shape)
    ).view(np.complex64)
