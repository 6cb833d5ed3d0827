"""PNG, JPEG, JPEG 2000, WebP and BMP as pixels and header facts."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from moire.errors import ScanUnreadable
from moire.resolution import Rate, jp2_rate, stored_rate

PIXELS_AT_MOST = 2_000_000_000
EXIF_ORIENTATION = 274
_FORMATS = {"PNG", "JPEG", "JPEG2000", "WEBP", "BMP", "DIB", "MPO"}


@dataclass(frozen=True, slots=True, kw_only=True)
class Decoded:
    """Pixels as stored, with what the header says, before orientation."""

    pixels: NDArray[Any]
    mode: Literal["grey", "rgb", "cmyk"]
    bit_depth: int
    rate: Rate | None
    icc: bytes
    orientation: int
    jpeg: bool
    alpha: NDArray[Any] | None = None


def decode_raster(data: bytes, name: str, page: int) -> Decoded:
    import io

    from PIL import Image

    if page != 1:
        raise ScanUnreadable(name, f"has 1 page, page {page} was asked for")
    Image.MAX_IMAGE_PIXELS = None
    with Image.open(io.BytesIO(data)) as image:
        if image.format not in _FORMATS:
            raise ScanUnreadable(name, f"is {image.format}: convert it to TIFF or PNG")
        if image.width * image.height > PIXELS_AT_MOST:
            raise ScanUnreadable(name, f"is larger than {PIXELS_AT_MOST:.0e} pixels: cut it")
        rate = jp2_rate(data) if image.format == "JPEG2000" else stored_rate(image)
        icc = image.info.get("icc_profile") or b""
        orientation = int(image.getexif().get(EXIF_ORIENTATION, 1))
        bits = 16 if image.mode.startswith("I;16") else _png_depth(data)
        if bits == 16:
            pixels = _opencv_16(data, name)
        else:
            image.load()
            pixels = _pillow_array(image)
        depth = 1 if image.mode == "1" else bits
        jpeg = image.format in ("JPEG", "MPO")
    planes = 1 if pixels.ndim == 2 else pixels.shape[2]
    if planes == 4 and image.mode == "CMYK":
        return Decoded(
            pixels=pixels,
            mode="cmyk",
            bit_depth=depth,
            rate=rate,
            icc=icc,
            orientation=orientation,
            jpeg=jpeg,
        )
    alpha = pixels[..., -1] if planes in (2, 4) else None
    if planes <= 2:
        grey = pixels if pixels.ndim == 2 else pixels[..., 0]
        return Decoded(
            pixels=grey, mode="grey", bit_depth=depth, rate=rate, icc=icc, orientation=orientation, jpeg=jpeg,
            alpha=alpha,
        )  # fmt: skip
    return Decoded(
        pixels=pixels[..., :3], mode="rgb", bit_depth=depth, rate=rate, icc=icc, orientation=orientation,
        jpeg=jpeg, alpha=alpha,
    )  # fmt: skip


def _png_depth(data: bytes) -> int:
    """Bits a channel: 16 only where a PNG header says so (ISO/IEC 15948, IHDR)."""
    return 16 if data[:8] == b"\x89PNG\r\n\x1a\n" and data[24] == 16 else 8


def _pillow_array(image: Any) -> NDArray[Any]:
    if image.mode == "1":
        return np.asarray(image.convert("L"))
    if image.mode in ("P", "PA"):
        transparent = "transparency" in image.info or image.mode == "PA"
        return np.asarray(image.convert("RGBA" if transparent else "RGB"))
    if image.mode in ("L", "LA", "RGB", "RGBA", "CMYK"):
        return np.asarray(image)
    return np.asarray(image.convert("RGB"))


def _opencv_16(data: bytes, name: str) -> NDArray[Any]:
    import cv2

    pixels = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
    if pixels is None or pixels.dtype != np.uint16:
        raise ScanUnreadable(name, "its 16-bit pixels cannot be decoded: convert it to TIFF")
    if pixels.ndim == 3 and pixels.shape[2] >= 3:
        pixels = pixels[..., [2, 1, 0, *range(3, pixels.shape[2])]]
    return np.asarray(pixels)
