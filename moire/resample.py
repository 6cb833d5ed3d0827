"""Alias-free reduction of a picture, in linear light."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from moire.scanner import srgb_decode, srgb_encode


def reduce_picture(picture: NDArray[np.float32], width: int, height: int) -> NDArray[np.float32]:
    """sRGB-encoded picture, 0..1, band-limited and resampled to `width` x `height` pixels.

    A Lanczos kernel scaled to the new pitch (Duchon, J. Appl. Meteorol. 18 (1979) 1016) cuts
    what the new grid cannot hold; averages are taken in linear light.
    """
    from PIL import Image

    out = np.empty((height, width, picture.shape[2]), np.float32)
    for c in range(picture.shape[2]):
        plane = Image.fromarray(srgb_decode(picture[..., c]).astype(np.float32))
        out[..., c] = np.asarray(plane.resize((width, height), Image.Resampling.LANCZOS), np.float32)
    return srgb_encode(out).astype(np.float32)
