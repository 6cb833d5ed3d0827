"""TIFF pages as pixels and header facts, with or without the optional codecs."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from moire.decode import EXIF_ORIENTATION, PIXELS_AT_MOST, Decoded
from moire.errors import ScanUnreadable
from moire.resolution import per_inch


def is_tiff(data: bytes) -> bool:
    return data[:4] in (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+")


def decode_tiff(data: bytes, name: str, page: int) -> Decoded:
    import io

    import tifffile

    with tifffile.TiffFile(io.BytesIO(data)) as tif:
        if not 1 <= page <= len(tif.pages):
            raise ScanUnreadable(name, f"has {len(tif.pages)} pages, page {page} was asked for")
        sheet: Any = tif.pages[page - 1]
        if sheet.imagewidth * sheet.imagelength > PIXELS_AT_MOST:
            raise ScanUnreadable(name, f"is larger than {PIXELS_AT_MOST:.0e} pixels: cut it")
        if sheet.bitspersample not in (1, 2, 4, 8, 16) or sheet.sampleformat not in (1, None):
            kind = f"{sheet.bitspersample} bits, sample format {sheet.sampleformat}"
            raise ScanUnreadable(name, f"holds {kind}: convert it to 8 or 16 bits a channel")
        _check_segments(sheet, len(data), name)
        pixels, photometric = _tiff_pixels(sheet, data, page, name)
        tags = sheet.tags
        resolution = [tags[t].value if t in tags else None for t in (282, 283)]
        rate = None
        if all(r is not None and r[1] for r in resolution):
            unit = int(tags[296].value) if 296 in tags else 2
            rate = per_inch(resolution[0][0] / resolution[0][1], resolution[1][0] / resolution[1][1], unit)
        icc = bytes(tags[34675].value) if 34675 in tags else b""
        orientation = int(tags[EXIF_ORIENTATION].value) if EXIF_ORIENTATION in tags else 1
        jpeg = int(sheet.compression) in (6, 7, 34892)
        pixels, mode, alpha = _named_planes(pixels, photometric, name)
        depth = 1 if sheet.bitspersample == 1 else 16 if pixels.dtype == np.uint16 else 8
    return Decoded(
        pixels=pixels,
        mode=mode,
        bit_depth=depth,
        rate=rate,
        icc=icc,
        orientation=orientation,
        jpeg=jpeg,
        alpha=alpha,
    )


def _check_segments(sheet: Any, length: int, name: str) -> None:
    """A truncated TIFF still has its directory; its strips then lie beyond the end."""
    ends = [o + c for o, c in zip(sheet.dataoffsets, sheet.databytecounts, strict=False)]
    if not ends or max(ends) > length:
        raise ScanUnreadable(name, "is truncated: its pixels end before they should, copy it again")


def _tiff_pixels(sheet: Any, data: bytes, page: int, name: str) -> tuple[NDArray[Any], int]:
    """Pixels with samples last, and the photometric code that they now have."""
    import io

    photometric = int(sheet.photometric)
    try:
        pixels = np.asarray(sheet.asarray())
        if sheet.planarconfig == 2 and pixels.ndim == 3:
            pixels = np.moveaxis(pixels, 0, -1)
        if int(sheet.compression) in (6, 7) and photometric == 6:
            photometric = 2
        if sheet.bitspersample == 1:
            pixels = pixels.astype(np.uint8) * 255
        elif sheet.bitspersample in (2, 4) and photometric != 3:
            pixels = (pixels.astype(np.uint16) * 255 // (2**sheet.bitspersample - 1)).astype(np.uint8)
    except (ValueError, ImportError, KeyError, RuntimeError, NotImplementedError):
        # Without the optional codecs tifffile decodes few compressions; Pillow and OpenCV know others.
        if sheet.bitspersample == 16:
            return _opencv_pixels(data, page, photometric, name)
        from PIL import Image

        Image.MAX_IMAGE_PIXELS = None
        with Image.open(io.BytesIO(data)) as image:
            image.seek(page - 1)
            return _pillow_tiff(image, photometric)
    if photometric == 0:
        pixels = np.iinfo(pixels.dtype).max - pixels
        photometric = 1
    if photometric == 3:
        table = np.asarray(sheet.colormap)
        pixels = np.moveaxis(table, 0, -1)[pixels]
        pixels = (pixels >> 8).astype(np.uint8) if pixels.dtype == np.uint16 else pixels
        photometric = 2
    return pixels, photometric


def _pillow_tiff(image: Any, photometric: int) -> tuple[NDArray[Any], int]:
    if image.mode == "1":
        return np.asarray(image.convert("L")), 1
    if image.mode == "P":
        return np.asarray(image.convert("RGB")), 2
    if image.mode in ("L", "LA", "RGB", "RGBA", "CMYK"):
        code = {"L": 1, "LA": 1, "RGB": 2, "RGBA": 2, "CMYK": 5}[image.mode]
        return np.asarray(image), code
    return np.asarray(image.convert("RGB")), 2


def _opencv_pixels(data: bytes, page: int, photometric: int, name: str) -> tuple[NDArray[Any], int]:
    import cv2

    done, sheets = cv2.imdecodemulti(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
    if not done or len(sheets) < page:
        raise ScanUnreadable(name, "needs the optional codecs: pip install 'moire-scan[codecs]'")
    pixels = np.asarray(sheets[page - 1])
    if pixels.ndim == 3 and photometric == 2:
        pixels = pixels[..., [2, 1, 0, *range(3, pixels.shape[2])]]
    # OpenCV has already turned a MinIsWhite picture.
    return pixels, 1 if photometric == 0 else photometric


def _named_planes(
    pixels: NDArray[Any], photometric: int, name: str
) -> tuple[NDArray[Any], Literal["grey", "rgb", "cmyk"], NDArray[Any] | None]:
    if pixels.dtype not in (np.uint8, np.uint16):
        raise ScanUnreadable(name, f"holds {pixels.dtype} samples: convert it to 8 or 16 bits a channel")
    wanted = {1: 1, 2: 3, 5: 4}.get(photometric)
    planes = 1 if pixels.ndim == 2 else pixels.shape[2]
    if wanted is None or planes < wanted or pixels.ndim > 3:
        raise ScanUnreadable(
            name, f"has photometric code {photometric} with {planes} samples: convert it to RGB"
        )
    alpha = pixels[..., wanted] if planes > wanted else None
    if wanted == 1:
        return (pixels if pixels.ndim == 2 else pixels[..., 0]), "grey", alpha
    return pixels[..., :wanted], "rgb" if wanted == 3 else "cmyk", alpha
