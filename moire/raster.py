"""Decoded pages: pixels and their capture data, out of JPEG, JPEG 2000, WebP and BMP.

TIFF and PNG, which Pillow alone would not read in full depth, have rooms of their own.
"""

from __future__ import annotations

import logging
import os
import struct
import tempfile
import threading
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from io import BytesIO
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

from moire.resolution import Ppi, from_metre, from_unit, sharper

if TYPE_CHECKING:
    from PIL.Image import Image

Mode = Literal["grey", "rgb", "cmyk"]

#: Pixels of the largest page that is read: what OpenCV's decoders can take (32768 x 32768).
PIXEL_LIMIT = 2**30

_JP2_SIGNATURE = b"\x00\x00\x00\x0cjP  \r\n\x87\n"
_PILLOW_MODES: dict[str, tuple[str, Mode, bool]] = {
    # Pillow's mode: what to convert to, our mode, alpha last
    "1": ("L", "grey", False),
    "L": ("L", "grey", False),
    "LA": ("LA", "grey", True),
    "La": ("LA", "grey", True),
    "RGB": ("RGB", "rgb", False),
    "RGBX": ("RGB", "rgb", False),
    "P": ("RGB", "rgb", False),
    "PA": ("RGBA", "rgb", True),
    "RGBA": ("RGBA", "rgb", True),
    "RGBa": ("RGBA", "rgb", True),
    "CMYK": ("CMYK", "cmyk", False),
    "I;16": ("I;16", "grey", False),
}
_lock = threading.RLock()


class Unfit(ValueError):
    """A file is sound but holds something that a scan cannot be; the message says what to do."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Raster:
    """One decoded page, upright, before it is known whether its rate counts.

    Attributes are those of `moire.model.Scan`; ``stored_ppi`` is None if not credible.
    """

    pixels: NDArray[Any]
    mode: Mode
    bit_depth: int
    alpha: NDArray[Any] | None = None
    icc: bytes = b""
    stored_ppi: Ppi | None = None
    jpeg: bool = False


def kind(head: bytes) -> str | None:
    """Format by a file's first bytes, whatever its name says; None if not one we read.

    Parameters
    ----------
    head : bytes
        The first 16 bytes or more.
    """
    if head[:4] in (b"II*\0", b"MM\0*", b"II+\0", b"MM\0+"):
        return "TIFF"
    if head.startswith((_JP2_SIGNATURE, b"\xff\x4f\xff\x51")):
        return "JPEG2000"
    if head[:4] == b"RIFF" and head[8:12] == b"WEBP":
        return "WEBP"
    starts = {b"\xff\xd8\xff": "JPEG", b"\x89PNG\r\n\x1a\n": "PNG", b"BM": "BMP"}
    return next((name for start, name in starts.items() if head.startswith(start)), None)


def decode(data: bytes, kind: str) -> Raster:
    """Decode a file that is neither TIFF nor PNG.

    Parameters
    ----------
    data : bytes
        The whole file.
    kind : {"JPEG", "JPEG2000", "WEBP", "BMP"}

    Raises
    ------
    Unfit
        If the file holds something that a scan cannot be.
    Exception
        Whatever a decoder raises on a damaged file.
    """
    with undisturbed():
        image = open_pillow(data, kind)
        orientation, exif_ppi = read_exif(image)
        raster = _decode_jpeg_2000(image, data) if kind == "JPEG2000" else from_pillow(image)
        icc = image.info.get("icc_profile") or b""
        if kind == "JPEG":
            if raster.mode == "cmyk" and "adobe" not in image.info:
                # Pillow undoes the inversion of Adobe's files in all; others are not inverted.
                raster = replace(raster, pixels=255 - raster.pixels)
            ppi = sharper(_jfif_ppi(image), exif_ppi)
        elif kind == "BMP":
            ppi = from_metre(*struct.unpack_from("<ii", data, 38))
        else:
            x, y = image.info.get("dpi", (0, 0))
            ppi = sharper(from_unit(x, y, 2), exif_ppi)
    if kind == "JPEG2000":
        icc = _jp2_profile(data)
    return upright(replace(raster, icc=icc, stored_ppi=ppi, jpeg=kind == "JPEG"), orientation)


def open_pillow(data: bytes, kind: str) -> Image:
    """Open with Pillow, without decoding yet, and hold the page to `PIXEL_LIMIT`."""
    from PIL import Image

    image = Image.open(BytesIO(data), formats=[kind])
    check_size(*image.size)
    return image


def check_size(width: int, height: int) -> None:
    """Refuse a page of no pixels or of more than `PIXEL_LIMIT`."""
    if width < 1 or height < 1:
        raise Unfit(f"has no pixels ({width} x {height}): scan it again")
    if width * height > PIXEL_LIMIT:
        raise Unfit(
            f"has {width} x {height} pixels, more than the {PIXEL_LIMIT / 1e6:.0f} million that are read: "
            "cut it into parts"
        )


def from_pillow(image: Image) -> Raster:
    """Decode an open Pillow image as it is stored, orientation untouched."""
    image.load()
    if image.mode not in _PILLOW_MODES:
        raise Unfit(f"holds {image.mode} pixels: save it as grey, RGB or CMYK of 8 or 16 bits")
    target, mode, has_alpha = _PILLOW_MODES[image.mode]
    if "transparency" in image.info or (image.palette and image.palette.mode == "RGBA"):
        target, has_alpha = {"L": "LA", "RGB": "RGBA"}[target], True
    depth = {"1": 1, "I;16": 16}.get(image.mode, 8)
    values = np.asarray(image if image.mode == target else image.convert(target))
    return split(values, mode, depth, alpha=-1 if has_alpha else None)


def split(values: NDArray[Any], mode: Mode, bit_depth: int, *, alpha: int | None) -> Raster:
    """Raster of decoded samples.

    Parameters
    ----------
    values : ndarray, shape (rows, columns) or (rows, columns, samples)
        Colour first; samples beyond the colours of `mode` are dropped.
    mode : {"grey", "rgb", "cmyk"}
    bit_depth : int
    alpha : int or None
        Index of the sample that is kept as alpha.
    """
    if values.ndim == 2:
        return Raster(pixels=values, mode=mode, bit_depth=bit_depth)
    colours = {"grey": 1, "rgb": 3, "cmyk": 4}[mode]
    pixels = values[..., 0] if colours == 1 else values[..., :colours]
    return Raster(
        pixels=pixels, mode=mode, bit_depth=bit_depth, alpha=None if alpha is None else values[..., alpha]
    )


def upright(raster: Raster, orientation: int) -> Raster:
    """Turn a stored page as its orientation tag (1 to 8) says; the rate's axes turn with it.

    References
    ----------
    TIFF 6.0 (1992), section 8, Orientation: where the stored row 0 and column 0 lie.
    """
    turned = orientation in (5, 6, 7, 8)

    def place(values: NDArray[Any]) -> NDArray[Any]:
        values = values.swapaxes(0, 1) if turned else values
        rows = slice(None, None, -1 if orientation in (3, 4, 7, 8) else 1)
        columns = slice(None, None, -1 if orientation in (2, 3, 6, 7) else 1)
        out = np.ascontiguousarray(values[rows, columns])
        out.setflags(write=False)
        return out

    ppi = raster.stored_ppi
    return replace(
        raster,
        pixels=place(raster.pixels),
        alpha=None if raster.alpha is None else place(raster.alpha),
        stored_ppi=(ppi[1], ppi[0]) if ppi and turned else ppi,
    )


@contextmanager
def undisturbed() -> Iterator[None]:
    """Decode without warnings, log lines or stderr noise of the libraries, one file at a time.

    Warning filters, Pillow's size guard (ours takes its place) and the process's stderr are
    shared by all threads, hence the lock.
    """
    from PIL import Image

    for name in ("tifffile", "PIL"):
        # Without any handler Python itself would print these to stderr.
        logger = logging.getLogger(name)
        if not logger.handlers:
            logger.addHandler(logging.NullHandler())
    with _lock, warnings.catch_warnings(), _without_stderr():
        warnings.simplefilter("ignore")
        guard, Image.MAX_IMAGE_PIXELS = Image.MAX_IMAGE_PIXELS, None
        try:
            yield
        finally:
            Image.MAX_IMAGE_PIXELS = guard


@contextmanager
def _without_stderr() -> Iterator[None]:
    try:
        saved = os.dup(2)
    except OSError:  # no stderr, so nothing to silence
        yield
        return
    try:
        with tempfile.TemporaryFile() as sink:
            os.dup2(sink.fileno(), 2)
            yield
    finally:
        os.dup2(saved, 2)
        os.close(saved)


def read_exif(image: Image) -> tuple[int, Ppi | None]:
    """Orientation, 1 if none is known, and credible rate of an open image's EXIF."""
    try:
        tags = image.getexif()
        orientation = int(tags.get(274, 1))
        return orientation, from_unit(tags.get(282), tags.get(283), tags.get(296, 2))
    except Exception:  # odd EXIF says nothing, but the pixels may be sound
        return 1, None


def _jfif_ppi(image: Image) -> Ppi | None:
    """JFIF density; its units 1 and 2 are TIFF's 2 and 3 (ITU-T T.871, clause 10.1)."""
    x, y = image.info.get("jfif_density", (0, 0))
    return from_unit(x, y, image.info.get("jfif_unit", 0) + 1)


def _decode_jpeg_2000(image: Image, data: bytes) -> Raster:
    at = data.index(b"\xff\x4f\xff\x51") + 40
    count = struct.unpack_from(">H", data, at)[0]
    # Ssiz of the SIZ marker: depth less one, sign in the top bit (ITU-T T.800, A.5.1).
    depths = {data[at + 2 + 3 * i] + 1 for i in range(count)}
    raster = from_pillow(image)
    if depths == {8} or (depths == {16} and raster.bit_depth == 16):
        return raster
    if depths != {16} or raster.mode == "cmyk":
        raise Unfit(f"is JPEG 2000 of {sorted(depths)} bits in {raster.mode}: save it as TIFF, 8 or 16 bits")
    import cv2

    values = cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
    if values is None or values.dtype != np.uint16 or values.ndim != 3:
        raise ValueError("its pixels cannot be decoded")
    values = values[..., [2, 1, 0, 3][: values.shape[2]]]
    return split(values, "rgb", 16, alpha=None if raster.alpha is None else -1)


def _jp2_profile(data: bytes) -> bytes:
    """ICC profile of the colour box, empty if none (ITU-T T.800, I.5.3.3)."""
    at = data.find(b"colr", 0, data.find(b"jp2c"))
    if at < 4 or data[at + 4] not in (2, 3):
        return b""
    return data[at + 7 : at - 4 + struct.unpack_from(">I", data, at - 4)[0]]
