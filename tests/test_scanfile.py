"""Scans as files: every format comes back, metadata kept, inputs safe, bad files named."""

import io
import os
import struct
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
import tifffile
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from PIL import Image, ImageCms

from moire.errors import OutputRefused, ScanUnreadable
from moire.model import Scan
from moire.outputs import write_bytes
from moire.resolution import measured, per_inch, per_metre, to_per_metre
from moire.scanfile import pages, read, write

ICC = ImageCms.ImageCmsProfile(ImageCms.createProfile("sRGB")).tobytes()
RNG = np.random.default_rng(5)
GREY8 = RNG.integers(0, 256, (40, 50), dtype=np.uint8)
RGB8 = RNG.integers(0, 256, (40, 50, 3), dtype=np.uint8)
CMYK8 = RNG.integers(0, 256, (40, 50, 4), dtype=np.uint8)
GREY16 = RNG.integers(0, 65536, (40, 50), dtype=np.uint16)
RGB16 = RNG.integers(0, 65536, (40, 50, 3), dtype=np.uint16)
ALPHA8 = RNG.integers(0, 256, (40, 50), dtype=np.uint8)
BILEVEL = (RNG.random((40, 50)) < 0.5).astype(np.uint8) * 255
SMOOTH = np.clip(np.add.outer(np.arange(40) * 3, np.arange(50) * 2), 0, 255).astype(np.uint8)


def codecs() -> Any:
    """The optional codecs: may be missing on a user's machine, never in CI."""
    if os.environ.get("CI"):
        import imagecodecs

        return imagecodecs
    return pytest.importorskip("imagecodecs", reason="the optional codecs are not installed")


def scan_of(pixels: NDArray[Any], **more: Any) -> Scan:
    mode = {2: "grey"}.get(pixels.ndim) or {3: "rgb", 4: "cmyk"}[pixels.shape[2]]
    depth = 8 * pixels.dtype.itemsize
    return Scan(
        pixels=pixels, mode=mode, bit_depth=depth, ppi=(400.0, 300.0), ppi_source="file", icc=ICC, **more
    )


@pytest.mark.parametrize("suffix", [".tif", ".png"])
@pytest.mark.parametrize("pixels", [GREY8, RGB8, GREY16, RGB16], ids=["grey8", "rgb8", "grey16", "rgb16"])
def test_lossless_round_trip_is_exact(tmp_path: Path, suffix: str, pixels: NDArray[Any]) -> None:
    target = tmp_path / f"leaf{suffix}"
    write(scan_of(pixels), target)
    back = read(target)
    assert back.pixels.dtype == pixels.dtype
    assert (back.pixels == pixels).all()
    assert back.ppi == (400.0, 300.0)
    assert back.ppi_source == "file"
    assert back.icc == ICC
    assert back.bit_depth == 8 * pixels.dtype.itemsize
    assert not back.pixels.flags.writeable
    assert [p.name for p in tmp_path.iterdir()] == [target.name]


@pytest.mark.parametrize("suffix", [".tif", ".png"])
@pytest.mark.parametrize("pixels", [GREY8, RGB8, RGB16], ids=["grey8", "rgb8", "rgb16"])
def test_alpha_is_kept_apart(tmp_path: Path, suffix: str, pixels: NDArray[Any]) -> None:
    alpha = ALPHA8.astype(pixels.dtype) * (257 if pixels.dtype == np.uint16 else 1)
    write(scan_of(pixels, alpha=alpha), tmp_path / f"a{suffix}")
    back = read(tmp_path / f"a{suffix}")
    assert back.alpha is not None
    assert (back.alpha == alpha).all()
    shown = back.pixels if back.pixels.ndim == pixels.ndim else back.pixels[..., 0]
    assert (shown == pixels).all()


def test_cmyk_tiff_keeps_ink_amounts(tmp_path: Path) -> None:
    write(scan_of(CMYK8), tmp_path / "c.tif")
    back = read(tmp_path / "c.tif")
    assert back.mode == "cmyk"
    assert (back.pixels == CMYK8).all()


def test_written_files_open_elsewhere(tmp_path: Path) -> None:
    """OpenCV and Pillow are the outside readers."""
    write(scan_of(RGB16), tmp_path / "x.png")
    write(scan_of(RGB16), tmp_path / "x.tif")
    for name in ("x.png", "x.tif"):
        assert (cv2.imread(str(tmp_path / name), cv2.IMREAD_UNCHANGED)[..., ::-1] == RGB16).all()
    write(scan_of(RGB8), tmp_path / "y.png")
    with Image.open(tmp_path / "y.png") as image:
        image.load()
        assert image.info["icc_profile"] == ICC
        assert image.info["dpi"] == pytest.approx((400, 300), rel=1e-4)


def test_jpeg_round_trip_is_close(tmp_path: Path) -> None:
    pixels = np.stack([SMOOTH, SMOOTH[::-1], np.full_like(SMOOTH, 90)], axis=2)
    write(scan_of(pixels), tmp_path / "p.jpg")
    back = read(tmp_path / "p.jpg")
    assert np.abs(back.pixels.astype(int) - pixels).max() < 16
    assert back.jpeg
    assert back.ppi == (400.0, 300.0)
    assert back.icc == ICC


def test_cmyk_jpeg_is_stored_inverted_and_read_as_ink(tmp_path: Path) -> None:
    """Adobe's convention (Adobe Technical Note 5116, value from memory): stored samples are inverted."""
    solid_cyan = np.zeros((32, 32, 4), np.uint8)
    solid_cyan[..., 0] = 255
    write(scan_of(solid_cyan), tmp_path / "c.jpg")
    assert np.abs(read(tmp_path / "c.jpg").pixels.astype(int) - solid_cyan).max() < 6
    raw = codecs().jpeg8_decode((tmp_path / "c.jpg").read_bytes(), colorspace="CMYK", outcolorspace="CMYK")
    assert raw[16, 16] == pytest.approx([0, 255, 255, 255], abs=6)


def _tiff(**options: Any) -> Callable[[Path, NDArray[Any]], None]:
    return lambda path, pixels: tifffile.imwrite(path, pixels, metadata=None, **options)


def _pillow(**options: Any) -> Callable[[Path, NDArray[Any]], None]:
    return lambda path, pixels: Image.fromarray(pixels).save(path, **options)


@pytest.mark.parametrize("bare", [False, True], ids=["with-codecs", "without-codecs"])
@pytest.mark.parametrize(
    ("make", "pixels"),
    [
        pytest.param(_tiff(), RGB8, id="plain-strips"),
        pytest.param(_tiff(tile=(16, 16)), RGB8, id="tiles"),
        pytest.param(_tiff(bigtiff=True), RGB16, id="bigtiff"),
        pytest.param(
            _tiff(planarconfig="separate", photometric="rgb"), np.moveaxis(RGB8, -1, 0), id="planar"
        ),
        pytest.param(_tiff(byteorder=">"), GREY16, id="big-endian"),
        pytest.param(_tiff(compression="zlib", predictor=True), RGB16, id="deflate-predictor"),
        pytest.param(_pillow(compression="tiff_lzw"), RGB8, id="lzw"),
        pytest.param(_pillow(compression="packbits"), GREY8, id="packbits"),
        pytest.param(_pillow(compression="tiff_adobe_deflate"), RGB8, id="deflate"),
        pytest.param(
            lambda path, pixels: cv2.imwrite(str(path), pixels[..., ::-1], [cv2.IMWRITE_TIFF_COMPRESSION, 5]),
            RGB16,
            id="lzw-16",
        ),
        pytest.param(_tiff(photometric="miniswhite"), GREY8, id="min-is-white"),
    ],
)
def test_tiff_kinds(
    tmp_path: Path,
    make: Callable[[Path, NDArray[Any]], None],
    pixels: NDArray[Any],
    bare: bool,
    monkeypatch: pytest.MonkeyPatch,
    request: pytest.FixtureRequest,
) -> None:
    if bare:
        monkeypatch.setitem(sys.modules, "imagecodecs", None)
        monkeypatch.setattr(tifffile.TIFF, "DECOMPRESSORS", _FewDecompressors())
    make(tmp_path / "t.tif", pixels)
    back = read(tmp_path / "t.tif").pixels
    expected = np.moveaxis(pixels, 0, -1) if pixels.shape[0] == 3 else pixels
    if "min-is-white" in request.node.name:
        expected = 255 - expected
    assert back.dtype == expected.dtype
    assert (back == expected).all()


class _FewDecompressors:
    """What tifffile decodes by itself: nothing but plain and deflated samples."""

    def __getitem__(self, key: int) -> Any:
        import zlib

        if key in (1,):
            return None
        if key in (8, 32946):
            return lambda data, out=None: zlib.decompress(data)
        raise KeyError(f"{key} needs codecs")

    def __contains__(self, key: int) -> bool:
        return key in (1, 8, 32946)


@pytest.mark.parametrize("compression", [None, "group3", "group4", "tiff_lzw"])
def test_bilevel_tiff_is_black_and_white(tmp_path: Path, compression: str | None) -> None:
    Image.fromarray(BILEVEL).convert("1").save(tmp_path / "b.tif", compression=compression)
    back = read(tmp_path / "b.tif")
    assert back.bit_depth == 1
    assert (back.pixels == BILEVEL).all()


@pytest.mark.parametrize("suffix", [".tif", ".png", ".bmp"])
def test_palette_becomes_rgb(tmp_path: Path, suffix: str) -> None:
    picture = Image.fromarray(RGB8).quantize(16)
    picture.save(tmp_path / f"p{suffix}")
    back = read(tmp_path / f"p{suffix}")
    assert back.mode == "rgb"
    assert (back.pixels == np.asarray(picture.convert("RGB"))).all()


def test_jpeg_in_tiff_is_known_as_jpeg(tmp_path: Path) -> None:
    pixels = np.stack([SMOOTH] * 3, axis=2)
    Image.fromarray(pixels).save(tmp_path / "j.tif", compression="jpeg", quality=95)
    back = read(tmp_path / "j.tif")
    assert back.jpeg
    assert np.abs(back.pixels.astype(int) - pixels).max() < 12


@pytest.mark.parametrize(
    ("name", "options", "tolerance"),
    [
        ("w.webp", {"lossless": True}, 0),
        ("b.bmp", {}, 0),
        ("j.jp2", {"irreversible": False}, 0),
        ("g.jpg", {}, 40),
    ],
)
def test_other_formats(tmp_path: Path, name: str, options: dict[str, Any], tolerance: int) -> None:
    pixels = np.stack([SMOOTH, SMOOTH[:, ::-1], SMOOTH[::-1]], axis=2)
    Image.fromarray(pixels).save(tmp_path / name, **options)
    back = read(tmp_path / name)
    assert np.abs(back.pixels.astype(int) - pixels).max() <= tolerance
    # Pillow writes 96 per inch into a BMP that was given nothing.
    assert back.ppi == (pytest.approx((96, 96), rel=1e-3) if name == "b.bmp" else None)


def test_pages_are_chosen(tmp_path: Path) -> None:
    tifffile.imwrite(
        tmp_path / "m.tif", np.stack([GREY8, GREY8[::-1]]), photometric="minisblack", metadata=None
    )
    assert pages(tmp_path / "m.tif") == 2
    assert (read(tmp_path / "m.tif", page=2).pixels == GREY8[::-1]).all()
    with pytest.raises(ScanUnreadable, match="2 pages, page 3"):
        read(tmp_path / "m.tif", page=3)


@pytest.mark.parametrize("orientation", range(1, 9))
def test_orientation_is_applied(tmp_path: Path, orientation: int) -> None:
    """Source: Pillow's ImageOps.exif_transpose, an independent reading of the tag."""
    from PIL import ImageOps

    image = Image.fromarray(RGB8)
    exif = image.getexif()
    exif[274] = orientation
    image.save(tmp_path / "o.png", exif=exif, dpi=(400, 300))
    tifffile.imwrite(tmp_path / "o.tif", RGB8, metadata=None, resolution=(400, 300), resolutionunit=2,
                     extratags=[(274, "H", 1, orientation, False)])  # fmt: skip
    with Image.open(tmp_path / "o.png") as stored:
        expected = np.asarray(ImageOps.exif_transpose(stored))
    for name in ("o.png", "o.tif"):
        back = read(tmp_path / name)
        assert (back.pixels == expected).all()
        assert back.ppi == ((400, 300) if orientation < 5 else (300, 400))


@pytest.mark.parametrize(
    ("ppi", "stored", "back"),
    # Source: PNG pHYs is whole pixels per metre (ISO/IEC 15948): 300 ppi is 11811, which reads 299.9994.
    [(72, 2835, 72.009), (150, 5906, 150.0124), (300, 11811, 299.9994), (600, 23622, 599.9988)],
)
def test_png_density_arithmetic(ppi: float, stored: int, back: float) -> None:
    assert to_per_metre((ppi, ppi)) == (stored, stored)
    assert stored * 0.0254 == pytest.approx(back, abs=5e-5)


@pytest.mark.parametrize(
    ("values", "unit", "rate"),
    # Source: TIFF 6.0 (1992) ResolutionUnit 1 none, 2 inch, 3 cm; JFIF density (ITU-T T.871).
    [
        ((300, 300), 2, (300, 300)),
        ((118.11, 118.11), 3, (299.9994, 299.9994)),
        ((300, 300), 1, None),
        ((300, 300), None, None),
        ((0, 300), 2, None),
        ((2, 2), 2, None),
        ((90000, 90000), 2, None),
    ],
)
def test_density_units(
    values: tuple[float, float], unit: int | None, rate: tuple[float, float] | None
) -> None:
    found = per_inch(*values, unit)
    assert (found is None) == (rate is None)
    if rate is not None:
        assert found == pytest.approx(rate, rel=1e-5)


@given(st.integers(10, 2400))
def test_whole_rates_survive_the_metre(ppi: int) -> None:
    assert per_metre(*to_per_metre((ppi, ppi))) == pytest.approx((ppi, ppi), rel=0.003)
    if ppi >= 300 and ppi % 100 == 0:
        assert per_metre(*to_per_metre((ppi, ppi))) == (ppi, ppi)


def test_a_stored_72_is_a_placeholder(tmp_path: Path) -> None:
    Image.fromarray(RGB8).save(tmp_path / "s.jpg", dpi=(72, 72))
    back = read(tmp_path / "s.jpg")
    assert back.ppi is None
    assert back.ppi_in_file == (72, 72)
    assert measured((72.009, 72.009)) is None


def test_a_given_rate_wins_and_both_are_told(tmp_path: Path) -> None:
    Image.fromarray(RGB8).save(tmp_path / "s.png", dpi=(300, 300))
    back = read(tmp_path / "s.png", ppi=(400.0, 400.0))
    assert back.ppi == (400, 400)
    assert back.ppi_source == "option"
    assert back.ppi_in_file == (300, 300)


def _damaged() -> dict[str, bytes]:
    png, jpg, tif = io.BytesIO(), io.BytesIO(), io.BytesIO()
    big = np.random.default_rng(0).integers(0, 256, (200, 200, 3), dtype=np.uint8)
    Image.fromarray(big).save(png, "PNG")
    Image.fromarray(big).save(jpg, "JPEG")
    tifffile.imwrite(tif, big, metadata=None)
    huge = png.getvalue()[:16] + struct.pack(">II", 200_000, 200_000) + png.getvalue()[24:]
    return {
        "empty.tif": b"",
        "text.tif": b"Dear archivist, please find enclosed.",
        "cut.png": png.getvalue()[:9000],
        "cut.jpg": jpg.getvalue()[:9000],
        "cut.tif": tif.getvalue()[:9000],
        "head.tif": tif.getvalue()[:6],
        "noise.jpg": jpg.getvalue()[:20] + bytes(range(256)) * 20,
        "huge.png": huge,
        "float.tif": _float_tiff(),
    }


def _float_tiff() -> bytes:
    out = io.BytesIO()
    tifffile.imwrite(out, np.zeros((20, 20), np.float32), metadata=None)
    return out.getvalue()


@pytest.mark.parametrize("name", sorted(_damaged()))
def test_bad_files_are_named_in_one_line(tmp_path: Path, name: str) -> None:
    (tmp_path / name).write_bytes(_damaged()[name])
    with pytest.raises(ScanUnreadable) as caught:
        read(tmp_path / name)
    assert name in str(caught.value)
    assert "\n" not in str(caught.value)


def test_missing_files_and_folders(tmp_path: Path) -> None:
    for path in (tmp_path / "none.tif", tmp_path):
        with pytest.raises(ScanUnreadable, match="cannot be opened"):
            read(path)


def test_an_input_is_never_overwritten(tmp_path: Path) -> None:
    master = tmp_path / "m.tif"
    write(scan_of(RGB8), master)
    before = master.read_bytes()
    (tmp_path / "link.tif").symlink_to(master)
    os.link(master, tmp_path / "hard.tif")
    for target in (master, tmp_path / "link.tif", tmp_path / "hard.tif"):
        with pytest.raises(OutputRefused, match="never overwritten"):
            write(scan_of(GREY8), target, force=True, inputs=[master])
    assert master.read_bytes() == before


def test_an_existing_file_needs_force(tmp_path: Path) -> None:
    target = tmp_path / "t.png"
    write(scan_of(RGB8), target)
    with pytest.raises(OutputRefused, match="--force"):
        write(scan_of(GREY8), target)
    write(scan_of(GREY8), target, force=True)
    assert read(target).mode == "grey"


def test_nothing_is_left_half_written(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fails(*_: Any) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", fails)
    with pytest.raises(OutputRefused, match="No space left"):
        write(scan_of(RGB8), tmp_path / "t.tif")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("name", "scan", "word"),
    [
        ("x.gif", scan_of(RGB8), "extension"),
        ("x.jpg", scan_of(RGB16), "16"),
        ("x.jpg", scan_of(RGB8, alpha=ALPHA8), "transparency"),
        ("x.png", scan_of(CMYK8), "CMYK"),
        ("none/x.png", scan_of(RGB8), "folder"),
    ],
)
def test_what_cannot_be_written_says_so(tmp_path: Path, name: str, scan: Scan, word: str) -> None:
    with pytest.raises(OutputRefused, match=word):
        write(scan, tmp_path / name)
    assert list(tmp_path.iterdir()) == []


def test_bytes_are_written_whole(tmp_path: Path) -> None:
    write_bytes(b"{}", tmp_path / "r.json")
    assert (tmp_path / "r.json").read_bytes() == b"{}"
