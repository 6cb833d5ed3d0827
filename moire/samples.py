"""What of a scan is analysed: code values on one scale, in tiles of a fitting size."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from moire.model import Scan
from moire.patches import Codes


def rgb_codes(scan: Scan) -> NDArray[np.float32]:
    """Pixels as code values on a 0..255 scale, shape (rows, columns, 1 or 3)."""
    values = scan.pixels.astype(np.float32) * np.float32(255 / scan.full_scale)
    if scan.mode == "cmyk":
        # Without its profile a CMYK file is shown as ink amounts that multiply.
        values = (255 - values[..., :3]) * (1 - values[..., 3:4] / 255)
    return np.ascontiguousarray(values[..., None] if values.ndim == 2 else values)


def code_planes(scan: Scan) -> Codes:
    """The same codes as `rgb_codes`, left in bytes where the scan has them so."""
    if scan.mode == "cmyk" or scan.pixels.dtype != np.uint8:
        return rgb_codes(scan)
    return scan.pixels[..., None] if scan.pixels.ndim == 2 else scan.pixels


def mixed_plane(codes: Codes) -> NDArray[np.float32]:
    """Mean of the channels, shape (rows, columns): one plane that sees every ink."""
    count = codes.shape[2]
    if codes.dtype != np.uint8:
        return np.asarray(codes.mean(axis=2), np.float32)
    total = codes[..., 0].astype(np.uint16)
    for c in range(1, count):
        total += codes[..., c].astype(np.uint16)
    return total.astype(np.float32) * np.float32(1 / count)


def tile_size(scan: Scan) -> int:
    """Tile side for a scan: 128, coarser for high rates, 64 for small pictures, 0 if none fits."""
    short = min(scan.width_px, scan.height_px)
    if short < 128:
        return 0
    if short < 300:
        return 64
    return 256 if scan.ppi and min(scan.ppi) > 700 and short >= 1024 else 128


def rate_aspect(scan: Scan) -> tuple[float, float]:
    """ppi of each axis over their geometric mean; (1, 1) when unknown."""
    if scan.ppi is None:
        return (1.0, 1.0)
    mean = math.sqrt(scan.ppi[0] * scan.ppi[1])
    return (scan.ppi[0] / mean, scan.ppi[1] / mean)
