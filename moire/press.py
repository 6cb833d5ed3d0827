"""The press: halftone prints of a picture, as reflectance on a fine device grid.

A print is ink layers on paper. Each layer compares the ink amount wanted at a device
pixel with a threshold that repeats on the ink's own screen. The threshold is evaluated at
the pixel's exact place, so the lattice printed is the lattice asked for, not a rational
cell near it.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from moire.errors import BadRequest
from moire.units import page_vector

Spot = Literal["round", "ellipse", "diamond", "square", "line"]
Array = NDArray[np.float32]

SPOTS: tuple[Spot, ...] = ("round", "ellipse", "diamond", "square", "line")
# Linear RGB transmittance twice through a solid: sRGB of the ISO 12647-2 coated solids over paper
# white, CIELAB C 55/-37/-50, M 48/74/-3, Y 89/-5/93, K 16/0/0 (value from memory), clipped at 0.02.
INKS: dict[str, tuple[float, float, float]] = {
    "cyan": (0.02, 0.36, 0.82),
    "magenta": (0.66, 0.02, 0.22),
    "yellow": (0.95, 0.80, 0.04),
    "black": (0.02, 0.02, 0.02),
}
PAPER: tuple[float, float, float] = (0.86, 0.85, 0.80)
_CELL = 256


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class InkLayer:
    """Ink amounts of one separation and the screen that prints it.

    Attributes
    ----------
    ink : str
        A key of `INKS`.
    coverage : ndarray, shape (rows, columns), 0..1
        Ink amount over the whole sheet, at picture resolution.
    ruling_lpi, angle_deg : float
        Screen on the sheet, angle from +x counter-clockwise, y up.
    spot : str
        Dot shape.
    phase : (float, float)
        Shift of the lattice in cells.
    """

    ink: str
    coverage: Array
    ruling_lpi: float
    angle_deg: float
    spot: Spot = "round"
    phase: tuple[float, float] = (0.0, 0.0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Print:
    """A printed sheet; ``screened=False`` lays the same ink amounts without a screen."""

    width_in: float
    height_in: float
    layers: tuple[InkLayer, ...]
    dpi: float = 2400.0
    paper: tuple[float, float, float] = PAPER
    spread_um: float = 20.0
    gain: float = 0.12
    screened: bool = True

    def reflectance(self, x0: int, y0: int, width: int, height: int) -> Array:
        """Linear RGB reflectance of a window of device pixels, shape (height, width, 3)."""
        import cv2

        sigma = self.spread_um / 25400.0 * self.dpi
        margin = int(np.ceil(4 * sigma)) + 1
        window = (x0 - margin, y0 - margin, width + 2 * margin, height + 2 * margin)
        sheet = np.ones((height, width, 3), np.float32) * np.asarray(self.paper, np.float32)
        for layer in self.layers:
            ink = _lay_ink(self, layer, window)
            if sigma > 0:
                blurred = cv2.GaussianBlur(ink, (0, 0), sigma, borderType=cv2.BORDER_REPLICATE)
                ink = np.asarray(blurred, np.float32)
            ink = ink[margin : margin + height, margin : margin + width]
            sheet *= 1 - ink[..., None] * (1 - np.asarray(INKS[layer.ink], np.float32))
        return sheet


def _lay_ink(sheet: Print, layer: InkLayer, window: tuple[int, int, int, int]) -> Array:
    import cv2

    x0, y0, width, height = window
    rows, columns = layer.coverage.shape
    sx, sy = columns / (sheet.width_in * sheet.dpi), rows / (sheet.height_in * sheet.dpi)
    # Device pixel centre (x + 1/2) lies at picture pixel (x + 1/2) s - 1/2.
    to_picture = np.array([[sx, 0, (x0 + 0.5) * sx - 0.5], [0, sy, (y0 + 0.5) * sy - 0.5]])
    wanted = np.asarray(
        cv2.warpAffine(
            layer.coverage,
            to_picture,
            (width, height),
            flags=cv2.INTER_LINEAR | cv2.WARP_INVERSE_MAP,
            borderMode=cv2.BORDER_REPLICATE,
        ),
        np.float32,
    )
    x = (np.arange(x0, x0 + width) + 0.5) / sheet.dpi
    y = (np.arange(y0, y0 + height) + 0.5) / sheet.dpi
    wanted = wanted + np.float32(4 * sheet.gain) * wanted * (1 - wanted)
    wanted *= ((y >= 0) & (y < sheet.height_in)).astype(np.float32)[:, None]
    wanted *= ((x >= 0) & (x < sheet.width_in)).astype(np.float32)
    if not sheet.screened:
        return wanted
    fx, fy = page_vector(layer.ruling_lpi / sheet.dpi, layer.angle_deg)
    columns_at, rows_at = np.arange(x0, x0 + width) + 0.5, np.arange(y0, y0 + height) + 0.5
    u = _cell_index(fx * columns_at, fy * rows_at, layer.phase[0])
    v = _cell_index(-fy * columns_at, fx * rows_at, layer.phase[1])
    place = v * _CELL + u
    threshold, slope = (table.ravel()[place] for table in _threshold_tables(layer.spot))
    # A device pixel that the dot's edge crosses is inked in part: without this the device's own grid
    # would beat with a screen that does not fit it, which no press prints.
    step = slope * np.float32(layer.ruling_lpi / sheet.dpi) + np.float32(1e-6)
    return np.clip((wanted - threshold) / step + np.float32(0.5), 0, 1)


def _cell_index(
    along_columns: NDArray[np.floating], along_rows: NDArray[np.floating], shift: float
) -> NDArray[np.int32]:
    cycles = np.mod(along_columns, 1.0)[None, :] + np.mod(along_rows + shift, 1.0)[:, None]
    return (cycles * _CELL).astype(np.int32) % _CELL


def threshold_cell(spot: Spot) -> Array:
    """Thresholds over one cell, shape (256, 256): ink lies where a tone is above its threshold."""
    return _threshold_tables(spot)[0]


@lru_cache(maxsize=len(SPOTS))
def _threshold_tables(spot: Spot) -> tuple[Array, Array]:
    """Thresholds over one cell, ranked so that a share `a` lies below `a`, and their slope per cell."""
    at = (np.arange(_CELL) + 0.5) / _CELL
    u, v = at[None, :], at[:, None]
    cu, cv = np.cos(2 * np.pi * u), np.cos(2 * np.pi * v)
    du, dv = np.abs(u - 0.5), np.abs(v - 0.5)
    height = {
        "round": cu + cv,
        "ellipse": cu + 0.65 * cv,
        "diamond": du + dv,
        "square": np.minimum(du, dv) + 1e-3 * np.maximum(du, dv),
        "line": cu + 1e-6 * cv,
    }[spot]
    rank = np.empty(_CELL * _CELL, np.float32)
    rank[np.argsort(-height, axis=None, kind="stable")] = (np.arange(_CELL * _CELL) + 0.5) / (_CELL * _CELL)
    table = rank.reshape(_CELL, _CELL)
    across = (np.roll(table, -1, axis=1) - np.roll(table, 1, axis=1)) * (_CELL / 2)
    down = (np.roll(table, -1, axis=0) - np.roll(table, 1, axis=0)) * (_CELL / 2)
    return table, np.asarray(np.maximum(np.abs(across), np.abs(down)), np.float32)


def separate(picture: Array, inks: tuple[str, ...]) -> dict[str, Array]:
    """Ink amounts that reproduce a picture, one array per ink.

    Parameters
    ----------
    picture : ndarray, shape (rows, columns) or (rows, columns, 3)
        Linear-light reflectance relative to paper, 0..1.
    inks : tuple of str
        Keys of `INKS`. Cyan, magenta and yellow absorb red, green and blue; black, if
        present, replaces most of what the three share, or carries the lightness alone.

    Returns
    -------
    dict of str to ndarray, shape (rows, columns), 0..1

    Raises
    ------
    BadRequest
        If an ink is not known.
    """
    unknown = [ink for ink in inks if ink not in INKS]
    if unknown:
        raise BadRequest(f"unknown ink {unknown[0]!r}: choose from {', '.join(INKS)}")
    rgb = picture if picture.ndim == 3 else np.repeat(picture[..., None], 3, axis=2)
    absorbed = 1 - np.clip(rgb.astype(np.float32), 0, 1)
    channel = {"cyan": 0, "magenta": 1, "yellow": 2}
    coloured = [ink for ink in inks if ink in channel]
    amounts = {ink: absorbed[..., channel[ink]] / (1 - INKS[ink][channel[ink]]) for ink in coloured}
    if "black" in inks:
        luminance = absorbed @ np.asarray([0.2126, 0.7152, 0.0722], np.float32)
        shared = absorbed.min(axis=2) if coloured else luminance
        black = np.clip((shared - 0.35) / 0.65, 0, 1) * 0.9 if coloured else shared / 0.98
        amounts = {ink: (a - black) / np.maximum(1 - black, 0.05) for ink, a in amounts.items()}
        amounts["black"] = black
    return {ink: np.clip(amounts[ink], 0, 1).astype(np.float32) for ink in inks}
