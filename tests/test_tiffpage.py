"""Every kind of TIFF comes in with every sample as stored."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
import tifffile
from PIL import Image
from scanrig import imagecodecs, samples

from moire.errors import ScanUnreadable
from moire.model import Scan
from moire.scanfile import pages, read

LAYOUTS = {
    "strips": {"rowsperstrip": 7},
    "tiles": {"tile": (16, 32)},
    "planar": {"rowsperstrip": 7, "planarconfig": "separate"},
    "planar-tiles": {"tile": (16, 32), "planarconfig": "separate"},
}


KINDS = {
    "grey": (1, "minisblack", []),
    "min-is-white": (1, "miniswhite", []),
    "grey-alpha": (1, "minisblack", ["unassalpha"]),
    "rgb": (3, "rgb", []),
    "rgba": (3, "rgb", ["unassalpha"]),
    "rgb-extra": (3, "rgb", ["unspecified"]),
    "cmyk": (4, "separated", []),
    "cmyk-alpha": (4, "separated", ["unassalpha"]),
}


def save_tiff(path: Path, kind: str, bits: int, layout: str, packing: str | None, **more: Any) -> np.ndarray:
    colours, photometric, extras = KINDS[kind]
    values = samples(colours + len(extras), bits)
    planar = LAYOUTS[layout].get("planarconfig")
    shape = {"planarconfig": planar or "contig"} if values.ndim == 3 else {}
    tifffile.imwrite(
        path,
        np.moveaxis(values, -1, 0) if planar and values.ndim == 3 else values,
        photometric=photometric,
        extrasamples=extras or None,
        compression=packing,
        metadata=None,
        **{**LAYOUTS[layout], "planarconfig": None, **shape, **more},
    )
    return values


def assert_holds(scan: Scan, values: np.ndarray, kind: str) -> None:
    colours, photometric, extras = KINDS[kind]
    colour = values if values.ndim == 2 else values[..., 0] if colours == 1 else values[..., :colours]
    if photometric == "miniswhite":
        colour = np.iinfo(values.dtype).max - colour
    assert scan.pixels.dtype == values.dtype
    np.testing.assert_array_equal(scan.pixels, colour)
    assert scan.mode == {1: "grey", 3: "rgb", 4: "cmyk"}[colours]
    if extras == ["unassalpha"]:
        np.testing.assert_array_equal(scan.alpha, values[..., -1])
    else:
        assert scan.alpha is None


@pytest.mark.parametrize("layout", LAYOUTS)
@pytest.mark.parametrize("packing", [None, "zlib"])
@pytest.mark.parametrize("bits", [8, 16])
@pytest.mark.parametrize("kind", KINDS)
def test_plain_and_deflated_tiff_by_tifffile(
    tmp_path: Path, kind: str, bits: int, packing: str | None, layout: str
) -> None:
    values = save_tiff(tmp_path / "a.tif", kind, bits, layout, packing, predictor=packing is not None)
    scan = read(tmp_path / "a.tif")
    assert_holds(scan, values, kind)
    assert (scan.bit_depth, scan.jpeg) == (bits, False)


@pytest.mark.parametrize("packing", ["lzw", "packbits"])
@pytest.mark.parametrize("bits", [8, 16])
@pytest.mark.parametrize(
    ("kind", "layout"), [(k, la) for k in KINDS for la in LAYOUTS if la != "planar-tiles" or k == "rgba"]
)
def test_lzw_and_packbits_tiff_by_imagecodecs(
    tmp_path: Path, kind: str, bits: int, packing: str, layout: str
) -> None:
    imagecodecs()
    values = save_tiff(tmp_path / "a.tif", kind, bits, layout, packing, predictor=packing == "lzw")
    assert_holds(read(tmp_path / "a.tif"), values, kind)


@pytest.mark.parametrize("byteorder", ["<", ">"])
@pytest.mark.parametrize("bigtiff", [False, True])
@pytest.mark.parametrize("packing", [None, "zlib", "lzw"])
def test_byte_orders_and_bigtiff(tmp_path: Path, packing: str | None, bigtiff: bool, byteorder: str) -> None:
    if packing == "lzw":
        imagecodecs()
    for predictor in (False, True) if packing else (False,):
        options = {"bigtiff": bigtiff, "byteorder": byteorder, "predictor": predictor}
        values = save_tiff(tmp_path / "a.tif", "rgb", 16, "strips", packing, **options)
        scan = read(tmp_path / "a.tif")
        assert_holds(scan, values, "rgb")
        assert scan.pixels.dtype.isnative


def test_16_bit_lzw_with_predictor_by_opencv(tmp_path: Path) -> None:
    """OpenCV packs TIFF with LZW and predictor 2 by default."""
    values = samples(3, 16)
    assert cv2.imwrite(str(tmp_path / "a.tif"), values[..., ::-1])
    with tifffile.TiffFile(tmp_path / "a.tif") as tiff:
        assert (tiff.pages[0].compression, tiff.pages[0].predictor) == (5, 2)
    np.testing.assert_array_equal(read(tmp_path / "a.tif").pixels, values)


@pytest.mark.parametrize("packing", [None, "tiff_lzw", "tiff_adobe_deflate", "packbits"])
@pytest.mark.parametrize("mode", ["1", "L", "LA", "P", "RGB", "RGBA", "CMYK", "I;16"])
def test_tiff_by_pillow(tmp_path: Path, mode: str, packing: str | None) -> None:
    values = samples(1, 16) if mode == "I;16" else samples(3)
    image = Image.fromarray(values).convert(mode)
    image.save(tmp_path / "a.tif", compression=packing)
    scan = read(tmp_path / "a.tif")
    shown = np.asarray(image.convert({"1": "L", "P": "RGB"}.get(mode, mode)))
    colours = {"L": 1, "LA": 1, "1": 1, "I;16": 1, "CMYK": 4}.get(mode, 3)
    expected = shown if shown.ndim == 2 else shown[..., 0] if colours == 1 else shown[..., :colours]
    np.testing.assert_array_equal(scan.pixels, expected)
    assert scan.bit_depth == {"1": 1, "I;16": 16}.get(mode, 8)
    assert (scan.alpha is not None) == (mode in ("LA", "RGBA"))


@pytest.mark.parametrize("packing", ["group3", "group4", "tiff_ccitt"])
@pytest.mark.parametrize("white_is_zero", [False, True])
def test_fax_tiff_is_one_bit_of_0_and_255(tmp_path: Path, packing: str, white_is_zero: bool) -> None:
    page = samples(1) > 120
    Image.fromarray(page).save(
        tmp_path / "a.tif", compression=packing, tiffinfo={262: 0 if white_is_zero else 1}
    )
    with tifffile.TiffFile(tmp_path / "a.tif") as tiff:
        white_is_zero = tiff.pages[0].photometric == 0
    scan = read(tmp_path / "a.tif")
    assert (scan.bit_depth, scan.mode, scan.pixels.dtype) == (1, "grey", np.uint8)
    np.testing.assert_array_equal(scan.pixels, page * 255)


def test_one_bit_tiff_with_white_as_zero(tmp_path: Path) -> None:
    """TIFF 6.0 (1992), section 3: WhiteIsZero is the usual kind of a bilevel page."""
    page = samples(1) > 120
    tifffile.imwrite(tmp_path / "a.tif", ~page, photometric="miniswhite", metadata=None)
    np.testing.assert_array_equal(read(tmp_path / "a.tif").pixels, page * 255)


@pytest.mark.parametrize("mode", ["L", "RGB", "CMYK"])
def test_jpeg_in_tiff_is_marked_as_jpeg(tmp_path: Path, mode: str) -> None:
    smooth = cv2.GaussianBlur(np.tile(np.arange(80, dtype=np.uint8) * 3, (64, 1)), (0, 0), 2)
    image = Image.fromarray(np.dstack([smooth, 255 - smooth, smooth // 2])).convert(mode)
    image.save(tmp_path / "a.tif", compression="jpeg", quality=95)
    scan = read(tmp_path / "a.tif")
    assert scan.jpeg
    assert scan.mode == {"L": "grey", "RGB": "rgb", "CMYK": "cmyk"}[mode]
    assert np.abs(scan.pixels.astype(int) - np.asarray(image)).max() < 16


def test_jpeg_in_tiff_by_imagecodecs(tmp_path: Path) -> None:
    imagecodecs()
    smooth = np.tile(np.arange(96, dtype=np.uint8) * 2, (64, 1))
    values = np.dstack([smooth, 255 - smooth, smooth // 2])
    tifffile.imwrite(tmp_path / "a.tif", values, photometric="rgb", compression="jpeg", tile=(32, 32))
    scan = read(tmp_path / "a.tif")
    assert scan.jpeg
    assert np.abs(scan.pixels.astype(int) - values).max() < 16


def test_palette_of_a_tiff_becomes_rgb(tmp_path: Path) -> None:
    index = samples(1)
    table = np.stack([np.arange(256) * 257, 65535 - np.arange(256) * 257, np.full(256, 1000)]).astype("u2")
    tifffile.imwrite(tmp_path / "a.tif", index, photometric="palette", colormap=table, metadata=None)
    scan = read(tmp_path / "a.tif")
    assert (scan.mode, scan.bit_depth) == ("rgb", 8)
    np.testing.assert_array_equal(scan.pixels, np.dstack([index, 255 - index, np.full_like(index, 3)]))


def test_multiplied_alpha_is_divided_out(tmp_path: Path) -> None:
    """TIFF 6.0 (1992), section 18: ExtraSamples 1 is alpha that the colours carry in them."""
    half = np.full((8, 8, 4), (100, 50, 0, 128), np.uint8)
    tifffile.imwrite(tmp_path / "a.tif", half, photometric="rgb", extrasamples=["assocalpha"])
    scan = read(tmp_path / "a.tif")
    assert scan.pixels[0, 0].tolist() == [199, 100, 0]
    assert scan.alpha is not None
    assert scan.alpha[0, 0] == 128


def test_a_page_of_several(tmp_path: Path) -> None:
    path = tmp_path / "leaves.tif"
    with tifffile.TiffWriter(path) as tiff:
        for number, rate in enumerate((300, 400, 600)):
            tiff.write(samples(3, 16, seed=number), photometric="rgb", resolution=(rate, rate),
                       resolutionunit="INCH", metadata=None)  # fmt: skip
    assert pages(path) == 3
    second = read(path, page=2)
    assert (second.page, second.ppi) == (2, (400.0, 400.0))
    np.testing.assert_array_equal(second.pixels, samples(3, 16, seed=1))
    for page in (0, 4, -1):
        with pytest.raises(ScanUnreadable, match=f"leaves.tif: has 3 page.*no page {page}"):
            read(path, page=page)


def test_a_fax_page_of_several(tmp_path: Path) -> None:
    leaves = [Image.fromarray(samples(1, seed=seed) > 90 + 40 * seed) for seed in range(3)]
    leaves[0].save(tmp_path / "a.tif", compression="group4", save_all=True, append_images=leaves[1:])
    assert pages(tmp_path / "a.tif") == 3
    np.testing.assert_array_equal(read(tmp_path / "a.tif", page=3).pixels, np.asarray(leaves[2]) * 255)


def tiff(path: Path, values: np.ndarray, **options: Any) -> Path:
    tifffile.imwrite(path, values, **{"metadata": None, **options})
    return path


def test_what_only_the_optional_codecs_read_is_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    imagecodecs()
    tiff(tmp_path / "a.tif", samples(3, 16), photometric="rgb", compression="zstd")
    np.testing.assert_array_equal(read(tmp_path / "a.tif").pixels, samples(3, 16))

    def without(*_: Any, **__: Any) -> None:
        raise ValueError("<COMPRESSION.ZSTD: 50000> requires the 'imagecodecs' package")

    monkeypatch.setattr(tifffile.TiffPage, "asarray", without)
    with pytest.raises(ScanUnreadable, match=r"packed as zstd: install moire-scan\[codecs\]"):
        read(tmp_path / "a.tif")
