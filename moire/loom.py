"""The loom: cloth as reflectance on a fine grid, woven or knitted."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from moire.bindings import parse_binding
from moire.yarns import YarnSet, draw_hair, lay_yarns

Colour = tuple[float, float, float]
Stripes = tuple[tuple[int, Colour], ...]
KNIT = "knit"
_HAIR_STRENGTH = 0.25


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Cloth:
    """A swatch: warp ends run down the sheet, weft picks across it.

    Attributes
    ----------
    ends_per_cm, picks_per_cm : float
        Counted at right angles to the threads; wales and courses of a knit.
    pattern : str
        Short name of a binding (`parse_binding`), or ``knit`` for single jersey.
    warp, weft : (float, float, float)
        Linear RGB reflectance of the yarns; a knit has the warp's.
    warp_stripes, weft_stripes : tuple of (int, (float, float, float))
        Number and colour of neighbouring threads, repeated over the cloth, instead of one colour.
        In both directions they make checks.
    unevenness : float
        Slow wander of the threads, in yarn widths.
    jitter, thickness : float
        Standard deviations of gaps and of yarn thickness, as shares.
    hair : float
        How hairy the yarn is, 0..1.
    skew_deg : float
        How far the weft rises to the right from a right angle with the warp.
    bow : float
        Depth of the weft's arc as a share of the width (positive: middle lower).
    figure : ndarray, shape (rows, columns, 3), or None
        Picture printed on the cloth, what it lets through of linear RGB.
    woven : bool
        False gives the same yarns' mean colour, without threads.
    """

    width_in: float
    height_in: float
    ends_per_cm: float
    picks_per_cm: float
    pattern: str = "plain"
    warp: Colour = (0.20, 0.26, 0.42)
    weft: Colour = (0.55, 0.52, 0.44)
    warp_stripes: Stripes = ()
    weft_stripes: Stripes = ()
    unevenness: float = 0.15
    jitter: float = 0.0
    thickness: float = 0.0
    hair: float = 0.0
    skew_deg: float = 0.0
    bow: float = 0.0
    figure: NDArray[np.float32] | None = None
    dpi: float = 1800.0
    seed: int = 0
    woven: bool = True

    def reflectance(self, x0: int, y0: int, width: int, height: int) -> NDArray[np.float32]:
        """Linear RGB reflectance of a window of fine pixels, shape (height, width, 3)."""
        x = ((np.arange(x0, x0 + width) + 0.5) / self.dpi * 2.54)[None, :]
        y = ((np.arange(y0, y0 + height) + 0.5) / self.dpi * 2.54)[:, None]
        end, pick = self._coordinates(x, y)
        warp = _colours(self.warp_stripes, self.warp, end)
        if self.pattern == KNIT:
            yarn = _colours(self.weft_stripes, self.warp, pick) if self.weft_stripes else warp
            shade = _stocking(end, pick) if self.woven else _STOCKING_MEAN
            cloth = np.asarray(shade)[..., None] * yarn
        else:
            weft = _colours(self.weft_stripes, self.weft, pick)
            cloth = self._weave(end, pick, x, y, warp, weft)
        cloth = np.broadcast_to(cloth, (height, width, 3)).astype(np.float32)
        if self.hair:
            hairs = _window(draw_hair(self.width_in, self.height_in, self.seed), self, x0, y0, width, height)
            cloth = np.clip(cloth * (1 + self.hair * _HAIR_STRENGTH * hairs[..., None]), 0, 1)
        if self.figure is not None:
            cloth = cloth * _window(self.figure, self, x0, y0, width, height)
        return np.ascontiguousarray(cloth, np.float32)

    def true_setts(self) -> tuple[float, float]:
        """Ends and picks per cm as they lie on this very sheet, mean over it."""
        width, height = 2.54 * self.width_in, 2.54 * self.height_in
        across = np.linspace(0, width, 65)[None, :]
        down = np.linspace(0, height, 65)[:, None]
        end, pick = self._coordinates(across, down)
        end, pick = np.broadcast_arrays(end, pick)
        ends = float((end[:, -1] - end[:, 0]).mean()) / width
        picks = float((pick[-1] - pick[0]).mean()) / height
        return ends, picks / float(np.cos(np.radians(self.skew_deg)))

    def _coordinates(
        self, x: NDArray[np.floating], y: NDArray[np.floating]
    ) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Numbers of the end and of the pick at places in cm, as continuous coordinates."""
        skew = np.radians(self.skew_deg)
        width = 2.54 * self.width_in
        arc = self.bow * width * (1 - (2 * x / width - 1) ** 2)
        down = x * np.sin(skew) + y * np.cos(skew) - arc
        warp, weft = self._yarns()
        # Each direction's wander moves all its threads alike.
        return (
            warp.coordinate(x) + self._wander(y, 0),
            weft.coordinate(down) + self._wander(x, 1),
        )

    def _yarns(self) -> tuple[YarnSet, YarnSet]:
        width, height = 2.54 * self.width_in, 2.54 * self.height_in
        return (
            _lay(self.ends_per_cm, width, self.jitter, self.thickness, self.seed, 2),
            _lay(self.picks_per_cm, height, self.jitter, self.thickness, self.seed, 3),
        )

    def _weave(
        self,
        end: NDArray[np.float64],
        pick: NDArray[np.float64],
        x: NDArray[np.floating],
        y: NDArray[np.floating],
        warp: NDArray[np.float32],
        weft: NDArray[np.float32],
    ) -> NDArray[np.floating]:
        matrix = parse_binding(self.pattern).matrix
        if not self.woven:
            share = float(matrix.mean())
            return np.asarray(np.float32(_MEAN_SHADE) * (share * warp + (1 - share) * weft))
        ends, picks = np.floor(end).astype(int), np.floor(pick).astype(int)
        on_top = matrix[picks % matrix.shape[0], ends % matrix.shape[1]]
        across_warp, across_weft = np.mod(end, 1) - 0.5, np.mod(pick, 1) - 0.5
        ridge_warp, ridge_weft = across_warp, across_weft
        if self.thickness:
            warps, wefts = self._yarns()
            ridge_warp = across_warp / warps.thickness(ends, y)
            ridge_weft = across_weft / wefts.thickness(picks, x)
        # A yarn is brightest along its ridge and dips where it dives under its neighbour.
        shade_warp = _ridge(ridge_warp) * (0.75 + 0.25 * np.cos(np.pi * across_weft))
        shade_weft = _ridge(ridge_weft) * (0.75 + 0.25 * np.cos(np.pi * across_warp))
        shade = 0.25 + 0.75 * np.where(on_top, shade_warp, shade_weft)
        return np.asarray(shade[..., None] * np.where(on_top[..., None], warp, weft), np.float32)

    def _wander(self, along_cm: NDArray[np.floating], direction: int) -> NDArray[np.float64]:
        rng = np.random.default_rng((self.seed, direction))
        rates, phases = rng.uniform(0.1, 0.9, 4), rng.uniform(0, 2 * np.pi, 4)
        waves = np.sin(2 * np.pi * rates * along_cm[..., None] + phases)
        return np.asarray(self.unevenness * waves.sum(axis=-1) / 2)


def stripes(threads: int, *colours: Colour) -> Stripes:
    """Stripes of equal numbers of threads."""
    return tuple((threads, colour) for colour in colours)


@lru_cache(maxsize=8)
def _lay(
    per_cm: float, length_cm: float, jitter: float, thickness: float, seed: int, direction: int
) -> YarnSet:
    rng = np.random.default_rng((seed, direction))
    return lay_yarns(per_cm, length_cm, jitter=jitter, thickness=thickness, rng=rng)


def _colours(stripes: Stripes, plain: Colour, coordinate: NDArray[np.float64]) -> NDArray[np.float32]:
    """Colour of the thread at each place, shape of the coordinate + (3,)."""
    if not stripes:
        return np.asarray(plain, np.float32)
    table = np.repeat(
        np.array([colour for _, colour in stripes], np.float32), [count for count, _ in stripes], axis=0
    )
    return table[np.floor(coordinate).astype(int) % len(table)]


def _ridge(across: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(np.where(np.abs(across) < 0.5, np.cos(np.pi * across), 0.0))


def _stocking(wale: NDArray[np.float64], course: NDArray[np.float64]) -> NDArray[np.float64]:
    """Shade of the face of single jersey: each loop shows two legs that open upwards."""
    across = np.mod(wale, 1) - 0.5
    up = 1 - np.mod(course, 1)
    shade = np.zeros(np.broadcast_shapes(across.shape, up.shape))
    for rise in (up, up + 1):
        # The top of a leg goes under the loop above it.
        leg = np.abs(across) - (0.05 + 0.22 * rise)
        shade = np.maximum(shade, _ridge(leg / 0.36) * np.clip(1.5 - 0.7 * rise, 0, 1))
    return 0.2 + 0.8 * shade


def _window(
    picture: NDArray[np.float32], cloth: Cloth, x0: int, y0: int, width: int, height: int
) -> NDArray[np.float32]:
    """A picture stretched over the sheet, seen through a window of fine pixels."""
    import cv2

    rows, columns = picture.shape[:2]
    step = (columns / (cloth.width_in * cloth.dpi), rows / (cloth.height_in * cloth.dpi))
    matrix = np.array(
        [
            [step[0], 0, (x0 + 0.5) * step[0] - 0.5],
            [0, step[1], (y0 + 0.5) * step[1] - 0.5],
        ]
    )
    flags = cv2.INTER_LINEAR | cv2.WARP_INVERSE_MAP
    return np.asarray(
        cv2.warpAffine(picture, matrix, (width, height), flags=flags, borderMode=cv2.BORDER_REPLICATE)
    )


# Mean of the shading over a cell: 1/4 + 3/4 (2/pi) (3/4 + 1/4 (2/pi)).
_MEAN_SHADE = 0.25 + 0.75 * (2 / np.pi) * (0.75 + 0.25 * (2 / np.pi))
_GRID = (np.arange(64) + 0.5) / 64
_STOCKING_MEAN = float(_stocking(_GRID[None, :], _GRID[:, None]).mean())
