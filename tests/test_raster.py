"""JPEG, JPEG 2000, WebP, BMP and PNG as other programs write and read them, upright."""

from __future__ import annotations

import struct
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
import tifffile
from PIL import Image
from scanrig import ICC, WHOLE, WIDTH, exif, insert_chunk, plain, samples

from moire.scanfile import read

LOSSLESS = {
    ".png": ["1", "L", "LA", "P", "RGB", "RGBA"],
    ".webp": ["1", "L", "LA", "P", "RGB", "RGBA"],
    ".bmp": ["1", "L", "P", "RGB"],
    ".jp2": ["L", "LA", "RGB", "RGBA"],
}


@pytest.mark.parametrize(("suffix", "mode"), [(s, m) for s, modes in LOSSLESS.items() for m in modes])
def test_lossless_formats_by_pillow(tmp_path: Path, suffix: str, mode: str) -> None:
    image = Image.fromarray(samples(3)).convert(mode)
    if mode in ("LA", "RGBA"):
        image.putalpha(Image.fromarray(samples(1, seed=5)))
    lossless = {".webp": {"lossless": True, "exact": True}}.get(suffix, {})
    image.save(tmp_path / f"a{suffix}", **lossless)
    scan = read(tmp_path / f"a{suffix}")
    grey = mode in ("1", "L", "LA") and suffix != ".webp"
    np.testing.assert_array_equal(scan.pixels, np.asarray(image.convert("L" if grey else "RGB")))
    assert scan.bit_depth == (1 if mode == "1" and suffix != ".webp" else 8)
    if mode in ("LA", "RGBA"):
        np.testing.assert_array_equal(scan.alpha, np.asarray(image.getchannel("A")))
    assert not scan.jpeg


@pytest.mark.parametrize("channels", [1, 3, 4])
@pytest.mark.parametrize("suffix", [".png", ".jp2"])
def test_16_bit_png_and_jpeg_2000_by_opencv(tmp_path: Path, suffix: str, channels: int) -> None:
    values = samples(channels, 16)
    stored = values if channels == 1 else values[..., [2, 1, 0, 3][:channels]]
    lossless = [cv2.IMWRITE_JPEG2000_COMPRESSION_X1000, 1000] if suffix == ".jp2" else []
    assert cv2.imwrite(str(tmp_path / f"a{suffix}"), stored, lossless)
    scan = read(tmp_path / f"a{suffix}")
    assert (scan.bit_depth, scan.mode) == (16, "grey" if channels == 1 else "rgb")
    np.testing.assert_array_equal(scan.pixels, values[..., :3] if channels > 1 else values)
    assert (scan.alpha is not None) == (channels == 4)


@pytest.mark.parametrize("mode", ["L", "RGB"])
@pytest.mark.parametrize("options", [{}, {"progressive": True}, {"subsampling": 2}])
def test_jpeg_as_opencv_decodes_it(tmp_path: Path, mode: str, options: dict[str, Any]) -> None:
    Image.fromarray(samples(3)).convert(mode).save(tmp_path / "a.jpg", quality=90, **options)
    scan = read(tmp_path / "a.jpg")
    expected = cv2.imread(str(tmp_path / "a.jpg"), cv2.IMREAD_UNCHANGED)
    expected = expected if mode == "L" else expected[..., ::-1]
    assert np.abs(scan.pixels.astype(int) - expected).max() <= 2
    assert (scan.jpeg, scan.bit_depth, scan.mode) == (True, 8, "grey" if mode == "L" else "rgb")


def test_cmyk_jpeg_is_ink_amounts_with_and_without_adobe_inversion(tmp_path: Path) -> None:
    """Files with Adobe's APP14 marker store 255 - ink; without it they store the ink."""
    ink = np.zeros((32, 32, 4), np.uint8)
    ink[..., 0], ink[..., 3] = 200, 30
    Image.frombytes("CMYK", (32, 32), ink.tobytes()).save(tmp_path / "adobe.jpg", quality=100)
    data = (tmp_path / "adobe.jpg").read_bytes()
    at = data.index(b"\xff\xee")
    plain = data[:at] + data[at + 2 + struct.unpack_from(">H", data, at + 2)[0] :]
    (tmp_path / "plain.jpg").write_bytes(plain)
    assert np.abs(read(tmp_path / "adobe.jpg").pixels.astype(int) - ink).max() <= 2
    assert np.abs(read(tmp_path / "plain.jpg").pixels.astype(int) - (255 - ink)).max() <= 2
    assert read(tmp_path / "adobe.jpg").mode == "cmyk"


def test_profile_of_jpeg_2000(tmp_path: Path) -> None:
    """ITU-T T.800, I.5.3.3: a colour box of method 2 holds a restricted ICC profile."""
    Image.fromarray(samples(3)).save(tmp_path / "a.jp2")
    data = (tmp_path / "a.jp2").read_bytes()
    at, jp2h = data.index(b"colr") - 4, data.index(b"jp2h") - 4
    old = struct.unpack_from(">I", data, at)[0]
    box = struct.pack(">I4sBBB", 11 + len(ICC), b"colr", 2, 0, 0) + ICC
    header = struct.pack(">I", struct.unpack_from(">I", data, jp2h)[0] - old + len(box))
    data = data[:jp2h] + header + data[jp2h + 4 : at] + box + data[at + old :]
    (tmp_path / "a.jp2").write_bytes(data)
    scan = read(tmp_path / "a.jp2")
    assert scan.icc == ICC
    np.testing.assert_array_equal(scan.pixels, samples(3))


ORIENTATIONS: dict[int, Callable[[np.ndarray], np.ndarray]] = {
    # TIFF 6.0 (1992), section 8: where row 0 and column 0 of the stored page lie.
    1: lambda a: a,
    2: lambda a: a[:, ::-1],
    3: lambda a: a[::-1, ::-1],
    4: lambda a: a[::-1],
    5: lambda a: a.transpose(1, 0, *range(2, a.ndim)),
    6: lambda a: np.rot90(a, -1),
    7: lambda a: a[::-1, ::-1].transpose(1, 0, *range(2, a.ndim)),
    8: lambda a: np.rot90(a, 1),
}


@pytest.mark.parametrize("orientation", ORIENTATIONS)
@pytest.mark.parametrize("how", ["tiff", "tiff-16", "tiff-fax", "tiff-lzw", "jpeg", "png"])
def test_pages_come_upright(tmp_path: Path, how: str, orientation: int) -> None:
    values = samples(3)
    path = tmp_path / "a.bin"
    if how == "tiff-16":
        values = samples(3, 16)
        tifffile.imwrite(path, values, photometric="rgb", metadata=None, resolution=(600, 300),
                         resolutionunit="INCH", extratags=[(274, 3, 1, orientation, True)])  # fmt: skip
    elif how.startswith("tiff"):
        values = (samples(1) > 120) * np.uint8(255) if how == "tiff-fax" else values
        image = Image.fromarray(values).convert("1") if how == "tiff-fax" else Image.fromarray(values)
        packing = {"tiff-fax": "group4", "tiff-lzw": "tiff_lzw"}.get(how)
        image.save(path, "TIFF", compression=packing, dpi=(600, 300), tiffinfo={274: orientation})
    else:
        tags = exif(orientation=orientation)
        Image.fromarray(values).save(path, how, dpi=(600, 300), exif=tags, quality=95)
        if how == "jpeg":
            values = np.asarray(Image.open(path))
    scan = read(path)
    np.testing.assert_array_equal(scan.pixels, ORIENTATIONS[orientation](values))
    assert scan.ppi == ((300.0, 600.0) if orientation >= 5 else (600.0, 300.0))
    assert scan.pixels.flags.c_contiguous


def test_option_counts_along_the_upright_page(tmp_path: Path) -> None:
    Image.fromarray(samples(3)).save(tmp_path / "a.jpg", exif=exif(orientation=6))
    assert read(tmp_path / "a.jpg", ppi=(600, 300)).ppi == (600.0, 300.0)


def test_odd_but_sound_files_make_no_noise(tmp_path: Path, capfd: pytest.CaptureFixture) -> None:
    """A broken text chunk, a broken profile and odd EXIF do not concern the pixels."""
    insert_chunk(plain(tmp_path / "b.png", WHOLE["deep.png"]), tmp_path / "a.png", b"iCCP", b"x\0\0junk")
    insert_chunk(tmp_path / "a.png", tmp_path / "a.png", b"eXIf", b"II*\0\xff\xff\xff\xff")
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        scan = read(tmp_path / "a.png")
    np.testing.assert_array_equal(scan.pixels[..., ::-1], samples(3, 16))
    Image.fromarray(samples(3)).save(tmp_path / "a.jpg", exif=b"Exif\0\0II*\0\x08\0\0\0\xff\xff\x12\x01")
    read(tmp_path / "a.jpg")
    assert capfd.readouterr() == ("", "")


def test_the_size_guard_of_pillow_is_left_as_it_was(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Image, "MAX_IMAGE_PIXELS", 100)
    assert read(plain(tmp_path / "a.png", WHOLE["rgb.png"])).width_px == WIDTH
    assert Image.MAX_IMAGE_PIXELS == 100
