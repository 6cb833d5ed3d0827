"""Scans as bytes of TIFF (deflate), PNG and JPEG, with depth, profile and density kept."""

from __future__ import annotations

from typing import Any

import numpy as np

from moire.errors import OutputRefused
from moire.model import Scan


def encode_tiff(scan: Scan) -> bytes:
    """Bytes of a deflated TIFF."""
    import io

    import tifffile

    pixels, extra = scan.pixels, {}
    if scan.alpha is not None:
        planes = pixels[..., None] if pixels.ndim == 2 else pixels
        pixels = np.concatenate([planes, scan.alpha[..., None]], axis=2)
        extra["extrasamples"] = ["unassalpha"]
    photometric = {"grey": "minisblack", "rgb": "rgb", "cmyk": "separated"}[scan.mode]
    out = io.BytesIO()
    tifffile.imwrite(
        out,
        pixels,
        photometric=photometric,
        compression="zlib",
        predictor=True,
        resolution=None if scan.ppi is None else scan.ppi,
        resolutionunit=1 if scan.ppi is None else 2,
        iccprofile=scan.icc or None,
        metadata=None,
        software=False,
        planarconfig="contig" if pixels.ndim == 3 else None,
        **extra,
    )
    return out.getvalue()


def encode_png(scan: Scan, name: str) -> bytes:
    """Bytes of a PNG, 8 or 16 bits a channel; OpenCV packs the pixels, the chunks are ours."""
    import cv2

    from moire.png import with_chunks

    if scan.mode == "cmyk":
        raise OutputRefused(name, "PNG holds no CMYK: write a .tif")
    planes = scan.pixels[..., None] if scan.pixels.ndim == 2 else scan.pixels
    if scan.alpha is not None:
        grey = np.repeat(planes, 3, axis=2) if planes.shape[2] == 1 else planes
        planes = np.concatenate([grey[..., ::-1], scan.alpha[..., None]], axis=2)
    else:
        planes = planes[..., ::-1]
    done, code = cv2.imencode(".png", np.ascontiguousarray(planes), [cv2.IMWRITE_PNG_COMPRESSION, 6])
    if not done:
        raise OutputRefused(name, "PNG encoding failed")
    return with_chunks(code.tobytes(), ppi=scan.ppi, icc=scan.icc)


def encode_jpeg(scan: Scan, name: str, quality: int) -> bytes:
    """Bytes of a JPEG, full chroma resolution."""
    import io

    from PIL import Image

    if scan.full_scale != 255:
        raise OutputRefused(name, "JPEG holds 8 bits a channel and this scan has 16: write a .tif or .png")
    if scan.alpha is not None:
        raise OutputRefused(name, "JPEG holds no transparency: write a .tif or .png")
    image = Image.fromarray(
        np.ascontiguousarray(scan.pixels), {"grey": "L", "rgb": "RGB", "cmyk": "CMYK"}[scan.mode]
    )
    # Pillow stores CMYK inverted, as Adobe does, and turns it back on reading.
    options: dict[str, Any] = {"quality": quality, "subsampling": 0}
    if scan.ppi is not None:
        options["dpi"] = scan.ppi
    if scan.icc:
        options["icc_profile"] = scan.icc
    out = io.BytesIO()
    image.save(out, "JPEG", **options)
    return out.getvalue()
