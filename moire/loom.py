"""The loom: woven cloth as reflectance on a fine grid."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

WeavePattern = Literal["plain", "twill", "satin"]
# One repeat each: 1 where the warp lies on top (plain 1/1, twill 2/2, satin of 5 with step 2).
PATTERNS: dict[WeavePattern, NDArray[np.bool_]] = {
    "plain": np.eye(2, dtype=bool),
    "twill": np.array([[1, 1, 0, 0], [0, 1, 1, 0], [0, 0, 1, 1], [1, 0, 0, 1]], bool),
    "satin": np.array([[(c - 2 * r) % 5 == 0 for c in range(5)] for r in range(5)]),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Cloth:
    """A swatch: warp ends run down the sheet, weft picks across it.

    Attributes
    ----------
    ends_per_cm, picks_per_cm : float
    pattern : {"plain", "twill", "satin"}
    warp, weft : (float, float, float)
        Linear RGB reflectance of the yarns.
    unevenness : float
        Slow wander of the threads, in yarn widths.
    woven : bool
        False gives the same yarns' mean colour, without threads.
    """

    width_in: float
    height_in: float
    ends_per_cm: float
    picks_per_cm: float
    pattern: WeavePattern = "plain"
    warp: tuple[float, float, float] = (0.20, 0.26, 0.42)
    weft: tuple[float, float, float] = (0.55, 0.52, 0.44)
    unevenness: float = 0.15
    dpi: float = 1800.0
    seed: int = 0
    woven: bool = True

    def reflectance(self, x0: int, y0: int, width: int, height: int) -> NDArray[np.float32]:
        """Linear RGB reflectance of a window of fine pixels, shape (height, width, 3)."""
        pattern = PATTERNS[self.pattern]
        warp, weft = np.asarray(self.warp, np.float32), np.asarray(self.weft, np.float32)
        if not self.woven:
            share = float(pattern.mean())
            mean = np.float32(_MEAN_SHADE) * (share * warp + (1 - share) * weft)
            return np.broadcast_to(mean, (height, width, 3)).copy()
        x = (np.arange(x0, x0 + width) + 0.5) / self.dpi * 2.54
        y = (np.arange(y0, y0 + height) + 0.5) / self.dpi * 2.54
        end = self.ends_per_cm * x[None, :] + self._wander(y, 0)[:, None]
        pick = self.picks_per_cm * y[:, None] + self._wander(x, 1)[None, :]
        on_top = pattern[
            np.floor(pick).astype(int) % pattern.shape[0], np.floor(end).astype(int) % pattern.shape[1]
        ]
        across_warp, across_weft = np.mod(end, 1) - 0.5, np.mod(pick, 1) - 0.5
        # A yarn is brightest along its ridge and dips where it dives under its neighbour.
        shade_warp = np.cos(np.pi * across_warp) * (0.75 + 0.25 * np.cos(np.pi * across_weft))
        shade_weft = np.cos(np.pi * across_weft) * (0.75 + 0.25 * np.cos(np.pi * across_warp))
        shade = 0.25 + 0.75 * np.where(on_top, shade_warp, shade_weft)
        yarn = np.where(on_top[..., None], warp, weft)
        return np.asarray(shade[..., None] * yarn, np.float32)

    def _wander(self, along_cm: NDArray[np.floating], direction: int) -> NDArray[np.float64]:
        rng = np.random.default_rng((self.seed, direction))
        rates, phases = rng.uniform(0.1, 0.9, 4), rng.uniform(0, 2 * np.pi, 4)
        waves = np.sin(2 * np.pi * rates[:, None] * along_cm + phases[:, None])
        return np.asarray(self.unevenness * waves.sum(axis=0) / 2)


# Mean of the shading over a cell: 1/4 + 3/4 (2/pi) (3/4 + 1/4 (2/pi)).
_MEAN_SHADE = 0.25 + 0.75 * (2 / np.pi) * (0.75 + 0.25 * (2 / np.pi))
