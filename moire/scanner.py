"""The scanner: a sheet sampled through a lens and an aperture, aliasing as a real one does."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

_TILE_PX = 256


class Sheet(Protocol):
    """Anything whose reflectance can be asked for on a fine grid."""

    @property
    def width_in(self) -> float: ...
    @property
    def height_in(self) -> float: ...
    @property
    def dpi(self) -> float: ...
    def reflectance(self, x0: int, y0: int, width: int, height: int) -> NDArray[np.float32]: ...


@dataclass(frozen=True, slots=True, kw_only=True)
class Scanner:
    """A capture device.

    Attributes
    ----------
    ppi : (float, float)
        Samples per inch along x and y.
    turn_deg : float
        The sheet's rotation on the platen, counter-clockwise as seen.
    lens_px, aperture_px : float
        Gaussian sigma and width of the sensor's box, in pixels.
    noise : float
        Standard deviation on the encoded 0..1 signal.
    jpeg_quality : int or None
        Pass the result through JPEG (4:2:0).
    """

    ppi: tuple[float, float]
    turn_deg: float = 0.0
    lens_px: float = 0.35
    aperture_px: float = 1.0
    noise: float = 0.004
    jpeg_quality: int | None = None


def srgb_encode(linear: NDArray[Any]) -> NDArray[Any]:
    """Linear light 0..1 to sRGB 0..1 (IEC 61966-2-1)."""
    linear = np.clip(linear, 0, 1)
    return np.where(linear <= 0.0031308, 12.92 * linear, 1.055 * np.power(linear, 1 / 2.4) - 0.055)


def srgb_decode(encoded: NDArray[Any]) -> NDArray[Any]:
    """sRGB 0..1 to linear light 0..1 (IEC 61966-2-1)."""
    return np.where(encoded <= 0.04045, encoded / 12.92, np.power((encoded + 0.055) / 1.055, 2.4))


def sample(sheet: Sheet, scanner: Scanner) -> NDArray[np.float32]:
    """Linear RGB that the sensor integrates, shape (rows, columns, 3), no noise.

    The frame has the size of the sheet and is centred on it; a turned sheet leaves its
    corners. Sampling is by tiles, so memory does not grow with the sheet.
    """
    columns = max(1, round(sheet.width_in * scanner.ppi[0]))
    rows = max(1, round(sheet.height_in * scanner.ppi[1]))
    out = np.empty((rows, columns, 3), np.float32)
    for y in range(0, rows, _TILE_PX):
        for x in range(0, columns, _TILE_PX):
            h, w = min(_TILE_PX, rows - y), min(_TILE_PX, columns - x)
            out[y : y + h, x : x + w] = _sample_tile(sheet, scanner, (columns, rows), (x, y, w, h))
    return out


def digitise(linear: NDArray[np.float32], scanner: Scanner, rng: np.random.Generator) -> NDArray[np.uint8]:
    """sRGB-encoded 8-bit pixels of a sampled sheet, with the scanner's noise and JPEG."""
    import cv2

    encoded = srgb_encode(linear) + rng.normal(0, scanner.noise, linear.shape)
    pixels = np.clip(np.rint(encoded * 255), 0, 255).astype(np.uint8)
    if scanner.jpeg_quality is None:
        return pixels
    _, code = cv2.imencode(".jpg", pixels[..., ::-1], [cv2.IMWRITE_JPEG_QUALITY, scanner.jpeg_quality])
    return np.ascontiguousarray(np.asarray(cv2.imdecode(code, cv2.IMREAD_COLOR), np.uint8)[..., ::-1])


def _sample_tile(
    sheet: Sheet, scanner: Scanner, frame: tuple[int, int], tile: tuple[int, int, int, int]
) -> NDArray[np.float32]:
    import cv2

    x, y, w, h = tile
    # An odd number of subsamples puts one on the pixel's centre.
    sub = tuple(max(3, int(np.ceil(sheet.dpi / ppi)) // 2 * 2 + 1) for ppi in scanner.ppi)
    margin = int(np.ceil(4 * scanner.lens_px + scanner.aperture_px / 2)) + 1
    fine_w, fine_h = (w + 2 * margin) * sub[0], (h + 2 * margin) * sub[1]
    turn = np.radians(scanner.turn_deg)
    cos, sin = np.cos(turn), np.sin(turn)
    # Fine sample (i, j) -> platen inches from the frame's centre -> sheet inches -> device pixels.
    step = np.array([1 / (sub[0] * scanner.ppi[0]), 1 / (sub[1] * scanner.ppi[1])])
    start = np.array([x - margin, y - margin]) * sub + 0.5
    platen_start = start * step - np.array(frame) / (2 * np.array(scanner.ppi))
    back = np.array([[cos, -sin], [sin, cos]])
    linear = back * step * sheet.dpi
    origin = (back @ platen_start + [sheet.width_in / 2, sheet.height_in / 2]) * sheet.dpi - 0.5
    corners = origin + np.array([[0, 0], [fine_w, 0], [0, fine_h], [fine_w, fine_h]]) @ linear.T
    low = np.floor(corners.min(axis=0)).astype(int) - 2
    high = np.ceil(corners.max(axis=0)).astype(int) + 3
    device = sheet.reflectance(int(low[0]), int(low[1]), int(high[0] - low[0]), int(high[1] - low[1]))
    matrix = np.column_stack([linear, origin - low])
    fine = cv2.warpAffine(
        device,
        matrix,
        (fine_w, fine_h),
        flags=cv2.INTER_LINEAR | cv2.WARP_INVERSE_MAP,
        borderMode=cv2.BORDER_REPLICATE,
    )
    kernels = [_pixel_kernel(scanner, s) for s in sub]
    fine = cv2.sepFilter2D(fine, -1, kernels[0], kernels[1], borderType=cv2.BORDER_REPLICATE)
    centre = fine[sub[1] // 2 :: sub[1], sub[0] // 2 :: sub[0]]
    return np.asarray(centre[margin : margin + h, margin : margin + w], np.float32)


def _pixel_kernel(scanner: Scanner, sub: int) -> NDArray[np.float64]:
    """Lens Gaussian convolved with the sensor box, on the fine grid; odd, sums to 1."""
    half = int(np.ceil((4 * scanner.lens_px + scanner.aperture_px / 2) * sub))
    at = np.arange(-half, half + 1)
    box = np.clip(scanner.aperture_px * sub / 2 + 0.5 - np.abs(at), 0, 1)
    if scanner.lens_px > 0:
        gauss = np.exp(-0.5 * (at / (scanner.lens_px * sub)) ** 2)
        box = np.convolve(box, gauss, mode="same")
    return np.asarray(box / box.sum())
