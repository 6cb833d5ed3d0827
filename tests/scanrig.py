"""Small pages with a known content, and sound files of every kind, for the tests of scans."""

from __future__ import annotations

import importlib
import io
import os
import struct
import zlib
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
import tifffile
from PIL import Image, ImageCms

from moire.model import Scan

HEIGHT, WIDTH = 45, 70
ICC = ImageCms.ImageCmsProfile(ImageCms.createProfile("sRGB")).tobytes()


def samples(channels: int, bits: int = 8, seed: int = 0) -> np.ndarray:
    """Ramp plus noise, shape (45, 70[, channels]): compresses, but every row and column differs."""
    rng = np.random.default_rng(seed)
    rows, columns, channel = np.ogrid[:HEIGHT, :WIDTH, :channels]
    values = (rows * 3 + columns * 2 + channel * 60 + rng.integers(0, 9, (HEIGHT, WIDTH, channels))) % 256
    values = values * 257 - rng.integers(0, 200, values.shape) if bits == 16 else values
    values = np.clip(values, 0, 2**bits - 1).astype(np.uint8 if bits == 8 else np.uint16)
    return values[..., 0] if channels == 1 else values


def scan_of(pixels: np.ndarray, mode: str = "rgb", **known: Any) -> Scan:
    return Scan(pixels=pixels, mode=mode, bit_depth=pixels.dtype.itemsize * 8, **known)


def imagecodecs() -> Any:
    """The optional codecs; a machine of continuous integration must have them."""
    if os.environ.get("CI"):
        return importlib.import_module("imagecodecs")
    return pytest.importorskip("imagecodecs", reason="the extra [codecs] writes this test's file")


def plain(path: Path, data: bytes) -> Path:
    path.write_bytes(data)
    return path


def exif(rate: float | None = None, unit: int = 2, orientation: int | None = None) -> Image.Exif:
    tags = Image.Exif()
    if rate is not None:
        tags[282] = tags[283] = rate
        tags[296] = unit
    if orientation is not None:
        tags[274] = orientation
    return tags


def insert_chunk(source: Path, target: Path, name: bytes, body: bytes) -> None:
    """Copy of a PNG with one more chunk right after IHDR (ISO/IEC 15948, clause 5.3)."""
    data = source.read_bytes()
    chunk = struct.pack(">I", len(body)) + name + body + struct.pack(">I", zlib.crc32(name + body))
    target.write_bytes(data[:33] + chunk + data[33:])


def whole_files() -> dict[str, bytes]:
    """One sound file of every kind whose pixels a decoder might fill up with grey."""
    out = {}
    for name, mode, options in [
        ("raw.tif", "RGB", {}),
        ("lzw.tif", "RGB", {"compression": "tiff_lzw"}),
        ("deflate.tif", "RGB", {"compression": "tiff_adobe_deflate"}),
        ("packbits.tif", "RGB", {"compression": "packbits"}),
        ("jpeg.tif", "RGB", {"compression": "jpeg"}),
        ("group3.tif", "1", {"compression": "group3"}),
        ("group4.tif", "1", {"compression": "group4"}),
        ("baseline.jpg", "RGB", {}),
        ("progressive.jpg", "RGB", {"progressive": True}),
        ("cmyk.jpg", "CMYK", {}),
        ("rgb.png", "RGB", {}),
        ("line.png", "1", {}),
        ("a.jp2", "RGB", {}),
        ("a.webp", "RGB", {}),
        ("a.bmp", "RGB", {}),
    ]:
        buffer = io.BytesIO()
        image = Image.fromarray(samples(3)).convert(mode)
        kind = {"tif": "TIFF", "jpg": "JPEG", "jp2": "JPEG2000"}.get(name[-3:], name.split(".")[1])
        image.save(buffer, kind, **options)
        out[name] = buffer.getvalue()
    deep = samples(3, 16)
    for suffix in (".tif", ".png", ".jp2"):
        out[f"deep{suffix}"] = cv2.imencode(suffix, deep)[1].tobytes()
    buffer = io.BytesIO()
    tifffile.imwrite(buffer, deep, photometric="rgb", compression="zlib", predictor=True, rowsperstrip=8)
    out["deep-deflate.tif"] = buffer.getvalue()
    return out


WHOLE = whole_files()
