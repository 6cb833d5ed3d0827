"""Scans come in with all that is known of them, and go out whole or not at all."""

from __future__ import annotations

import hashlib
import io
import json
import os
import stat
import struct
import subprocess
import sys
import zlib
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
import tifffile
from PIL import Image
from scanrig import HEIGHT, ICC, WHOLE, WIDTH, plain, samples, scan_of

from moire import scanfile
from moire.errors import OutputRefused, ScanUnreadable
from moire.model import Scan
from moire.scanfile import check_target, digest, pages, read, write, write_bytes


def test_content_decides_not_the_name(tmp_path: Path) -> None:
    Image.fromarray(samples(3)).save(tmp_path / "a.png")
    (tmp_path / "a.png").rename(tmp_path / "a.tif")
    np.testing.assert_array_equal(read(tmp_path / "a.tif").pixels, samples(3))


@pytest.mark.parametrize("suffix", [".tif", ".png", ".jpg", ".webp"])
def test_profile_digest_name_and_write_lock(tmp_path: Path, suffix: str) -> None:
    path = tmp_path / f"leaf 1{suffix}"
    Image.fromarray(samples(3)).save(path, icc_profile=ICC)
    scan = read(str(path))
    assert scan.icc == ICC
    assert scan.name == f"leaf 1{suffix}"
    assert scan.sha256 == hashlib.sha256(path.read_bytes()).hexdigest() == digest(path)
    with pytest.raises(ValueError, match="read-only"):
        scan.pixels[0, 0] = 0


ROUND_TRIPS = [
    (suffix, mode, bits, alpha)
    for suffix in (".tif", ".tiff", ".png", ".jpg")
    for mode in ("grey", "rgb", "cmyk")
    for bits in (8, 16)
    for alpha in (False, True)
    if not (suffix == ".png" and mode == "cmyk") and not (suffix == ".jpg" and (alpha or bits == 16))
]


@pytest.mark.parametrize(("suffix", "mode", "bits", "alpha"), ROUND_TRIPS)
def test_round_trip(tmp_path: Path, suffix: str, mode: str, bits: int, alpha: bool) -> None:
    pixels = samples({"grey": 1, "rgb": 3, "cmyk": 4}[mode], bits)
    cover = samples(1, bits, seed=9) if alpha else None
    scan = scan_of(pixels, mode, alpha=cover, icc=ICC, ppi=(600.0, 300.0), ppi_source="option")
    target = tmp_path / f"out{suffix}"
    write(scan, target, jpeg_quality=100)
    again = read(target)
    if suffix == ".jpg":
        assert np.abs(again.pixels.astype(int) - pixels).max() <= 4
    else:
        np.testing.assert_array_equal(again.pixels, pixels)
    assert (again.mode, again.bit_depth, again.icc) == (mode, bits, ICC)
    assert (again.ppi, again.ppi_source, again.ppi_in_file) == ((600.0, 300.0), "file", (600.0, 300.0))
    if alpha:
        np.testing.assert_array_equal(again.alpha, cover)
    else:
        assert again.alpha is None
    assert [path.name for path in tmp_path.iterdir()] == [target.name]


@pytest.mark.parametrize("suffix", [".tif", ".png"])
def test_16_bit_rgb_as_other_programs_read_it(tmp_path: Path, suffix: str) -> None:
    values = samples(3, 16)
    write(scan_of(values, icc=ICC, ppi=(300.0, 300.0)), tmp_path / f"a{suffix}")
    by_opencv = cv2.imread(str(tmp_path / f"a{suffix}"), cv2.IMREAD_UNCHANGED)
    np.testing.assert_array_equal(by_opencv[..., ::-1], values)
    with Image.open(tmp_path / f"a{suffix}") as image:
        assert image.info["icc_profile"] == ICC
        assert image.info["dpi"] == pytest.approx((300, 300), abs=0.001)
        image.load()
    if suffix == ".png":
        data = (tmp_path / "a.png").read_bytes()
        # 300 / 0.0254 = 11811.02 (ISO/IEC 15948, clause 11.3.5.3)
        assert data[data.index(b"pHYs") + 4 :][:9] == struct.pack(">IIB", 11811, 11811, 1)


def test_tags_of_a_written_tiff(tmp_path: Path) -> None:
    """TIFF 6.0 (1992): photometric 5 is CMYK (section 16), extra sample 2 unassociated alpha (18)."""
    scan = scan_of(samples(4, 16), "cmyk", alpha=samples(1, 16), ppi=(300.0, 400.0))
    write(scan, tmp_path / "a.tif")
    with tifffile.TiffFile(tmp_path / "a.tif") as tiff:
        page = tiff.pages[0]
        assert (page.photometric, page.extrasamples, page.bitspersample) == (5, (2,), 16)
        assert (page.compression, page.predictor) == (8, 2)
        assert [page.tags[tag].value for tag in (282, 283, 296)] == [(300, 1), (400, 1), 2]


@pytest.mark.parametrize("suffix", [".tif", ".png"])
def test_a_one_bit_page_is_written_with_8(tmp_path: Path, suffix: str) -> None:
    Image.fromarray(samples(1) > 120).save(tmp_path / "in.tif", compression="group4")
    page = read(tmp_path / "in.tif")
    write(page, tmp_path / f"a{suffix}")
    again = read(tmp_path / f"a{suffix}")
    np.testing.assert_array_equal(again.pixels, page.pixels)
    assert (page.bit_depth, again.bit_depth) == (1, 8)


def test_the_same_scan_gives_the_same_bytes(tmp_path: Path) -> None:
    for suffix in (".tif", ".png", ".jpg"):
        for name in "ab":
            write(scan_of(samples(3), ppi=(300.0, 300.0)), tmp_path / f"{name}{suffix}")
        assert digest(tmp_path / f"a{suffix}") == digest(tmp_path / f"b{suffix}")


@pytest.mark.parametrize(
    ("scan", "name", "advice"),
    [
        (scan_of(samples(3, 16)), "a.jpg", "JPEG holds no 16 bits: .*tif or .png"),
        (scan_of(samples(3), alpha=samples(1)), "a.JPEG", "JPEG holds no alpha: .*tif or .png"),
        (scan_of(samples(4), "cmyk"), "a.png", "PNG holds no CMYK: .*tif"),
        (scan_of(samples(3)), "a.webp", "must end in .tif, .tiff, .png, .jpg or .jpeg"),
        (scan_of(samples(3)), "a", "must end in"),
        (scan_of(samples(3)), "no/a.tif", "folder .*no does not exist"),
    ],
)
def test_targets_that_are_refused(tmp_path: Path, scan: Scan, name: str, advice: str) -> None:
    with pytest.raises(OutputRefused, match=advice) as caught:
        write(scan, tmp_path / name)
    assert str(tmp_path / name) in str(caught.value)
    assert list(tmp_path.iterdir()) == []


def test_an_existing_target_needs_force(tmp_path: Path) -> None:
    target = tmp_path / "a.tif"
    target.write_bytes(b"mine")
    with pytest.raises(OutputRefused, match=r"exists: .*--force"):
        write(scan_of(samples(3)), target)
    assert target.read_bytes() == b"mine"
    write(scan_of(samples(3)), target, force=True)
    np.testing.assert_array_equal(read(target).pixels, samples(3))
    (tmp_path / "b.tif").mkdir()
    with pytest.raises(OutputRefused, match="is a folder"):
        write(scan_of(samples(3)), tmp_path / "b.tif", force=True)


@pytest.mark.parametrize("link", ["same", "relative", "symlink", "hardlink", "source is a link"])
@pytest.mark.parametrize("force", [False, True])
def test_an_input_is_never_overwritten(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, link: str, force: bool
) -> None:
    master = tmp_path / "master.tif"
    write(scan_of(samples(3)), master)
    before = master.read_bytes()
    source, target = master, tmp_path / "other.tif"
    if link == "same":
        target = master
    elif link == "relative":
        monkeypatch.chdir(tmp_path)
        target = Path("./master.tif")
    elif link == "symlink":
        target.symlink_to(master)
    elif link == "hardlink":
        os.link(master, target)
    else:
        target.symlink_to(master)
        source, target = target, master
    for put in (
        lambda: write(scan_of(samples(3, seed=1)), target, force=force, inputs=[source]),
        lambda: write_bytes(b"{}", target, force=force, inputs=[tmp_path / "missing.json", source]),
        lambda: check_target(target, force=force, inputs=[source]),
    ):
        with pytest.raises(OutputRefused, match="is an input, which is never overwritten"):
            put()
    assert master.read_bytes() == before


@pytest.mark.parametrize("suffix", [".tif", ".png", ".jpg"])
@pytest.mark.parametrize("existing", [False, True])
@pytest.mark.parametrize("fault", ["replace", "sync", "interrupt"])
def test_nothing_is_left_of_a_failed_write(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, suffix: str, existing: bool, fault: str
) -> None:
    target = tmp_path / f"a{suffix}"
    if existing:
        target.write_bytes(b"older")

    def fail(*_: Any) -> None:
        raise KeyboardInterrupt if fault == "interrupt" else OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync" if fault == "sync" else "replace", fail)
    expected = KeyboardInterrupt if fault == "interrupt" else OutputRefused
    with pytest.raises(expected, match=None if fault == "interrupt" else "No space left on device"):
        write(scan_of(samples(3)), target, force=True)
    assert [path.read_bytes() for path in tmp_path.iterdir()] == ([b"older"] if existing else [])


def test_a_format_that_cannot_hold_the_size_leaves_nothing(tmp_path: Path) -> None:
    """ITU-T T.81, B.2.2: a JPEG side is stored in 16 bits; libjpeg stops at 65500."""
    with pytest.raises(OutputRefused, match="cannot be written"):
        write(scan_of(np.zeros((1, 65536), np.uint8), "grey"), tmp_path / "a.jpg")
    assert list(tmp_path.iterdir()) == []


def test_a_target_that_appears_meanwhile_is_kept(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    target = tmp_path / "a.tif"
    sync = os.fsync

    def meanwhile(number: int) -> None:
        target.write_bytes(b"someone else's")
        sync(number)

    monkeypatch.setattr(os, "fsync", meanwhile)
    with pytest.raises(OutputRefused, match="exists"):
        write(scan_of(samples(3)), target)
    assert [path.read_bytes() for path in tmp_path.iterdir()] == [b"someone else's"]


def test_side_files_follow_the_same_rules(tmp_path: Path) -> None:
    write_bytes(b"{}", tmp_path / "r.json")
    assert (tmp_path / "r.json").read_bytes() == b"{}"
    with pytest.raises(OutputRefused, match="exists"):
        write_bytes(b"[]", tmp_path / "r.json")
    mask = os.umask(0)
    os.umask(mask)
    assert stat.S_IMODE((tmp_path / "r.json").stat().st_mode) == 0o666 & ~mask


def tiff(path: Path, values: np.ndarray, **options: Any) -> Path:
    tifffile.imwrite(path, values, **{"metadata": None, **options})
    return path


def no_pixels(path: Path) -> Path:
    data = Path(tiff(path, samples(1))).read_bytes()
    with tifffile.TiffFile(path) as file:
        at = file.pages[0].tags[256].valueoffset
    return plain(path, data[:at] + bytes(2) + data[at + 2 :])


def huge(path: Path) -> Path:
    """A PNG header of 40000 x 40000 pixels and next to nothing behind it."""
    body = struct.pack(">IIBBBBB", 40000, 40000, 8, 2, 0, 0, 0)
    chunks = [(b"IHDR", body), (b"IDAT", zlib.compress(bytes(99))), (b"IEND", b"")]
    parts = [struct.pack(">I", len(b)) + n + b + struct.pack(">I", zlib.crc32(n + b)) for n, b in chunks]
    return plain(path, b"\x89PNG\r\n\x1a\n" + b"".join(parts))


BAD_FILES: dict[str, tuple[Callable[[Path], Any], str]] = {
    "missing": (lambda p: None, "no such file: check the name"),
    "folder": (lambda p: p.mkdir(), "is a folder: give one file"),
    "empty": (lambda p: plain(p, b""), "is empty: copy or scan it again"),
    "text": (lambda p: plain(p, b"Dear Sir, the scans are attached.\n"), "is not a picture.*give TIFF, PNG"),
    "pipe": (lambda p: os.mkfifo(p), "is not an ordinary file"),
    "only a signature": (lambda p: plain(p, b"II*\0"), "damaged or cut short.*scan it again"),
    "header, no page": (lambda p: plain(p, b"II*\0\0\0\0\0"), "has 0 page"),
    "jpeg start": (lambda p: plain(p, b"\xff\xd8\xff\xe0"), "damaged or cut short"),
    "png start": (lambda p: plain(p, b"\x89PNG\r\n\x1a\n"), "damaged or cut short"),
    "float": (lambda p: tiff(p, samples(1).astype("f4")), "holds ieeefp samples of 32 bits: save it as TIFF"),
    "half": (lambda p: tiff(p, samples(1).astype("f2")), "holds ieeefp samples of 16 bits: save it"),
    "32 bit": (lambda p: tiff(p, samples(1).astype("u4")), "has 32 bits a sample: save it as TIFF"),
    "signed": (lambda p: tiff(p, samples(1).astype("i2")), "holds int samples of 16 bits: save it as TIFF"),
    "lab": (lambda p: tiff(p, samples(3), photometric="cielab"), "colours stored as cielab: save it as TIFF"),
    "no pixels": (no_pixels, r"has no pixels \(0 x 45\)"),
    "huge": (huge, "40000 x 40000 pixels, more than the 1074 million that are read: cut it"),
}


@pytest.mark.parametrize("what", BAD_FILES)
def test_bad_files_are_named_and_explained(tmp_path: Path, what: str, capfd: pytest.CaptureFixture) -> None:
    make, reason = BAD_FILES[what]
    path = tmp_path / "leaf.tif"
    make(path)
    with pytest.raises(ScanUnreadable, match=reason) as caught:
        read(path)
    assert str(caught.value).startswith(f"{path}: ")
    assert "\n" not in str(caught.value)
    assert capfd.readouterr() == ("", "")


@pytest.mark.parametrize("name", WHOLE)
def test_a_file_cut_anywhere_is_an_error_and_no_grey_area(
    tmp_path: Path, name: str, capfd: pytest.CaptureFixture
) -> None:
    data = WHOLE[name]
    assert read(plain(tmp_path / name, data)).pixels.shape[:2] == (HEIGHT, WIDTH)
    cuts = {20, 60, len(data) // 4, len(data) // 2, len(data) * 3 // 4, len(data) - 40, len(data) - 3}
    for cut in sorted(cuts):
        path = plain(tmp_path / name, data[:cut])
        if name.endswith(".tif") and complete(data, cut):
            continue
        with pytest.raises(ScanUnreadable, match=r"again|no page|no pixels"):
            read(path)
    assert capfd.readouterr() == ("", "")


def complete(data: bytes, cut: int) -> bool:
    """Whether a cut TIFF still has all its tags and strips: only padding was lost."""
    with tifffile.TiffFile(io.BytesIO(data)) as file:
        page = file.pages[0]
        parts = [at + size for at, size in zip(page.dataoffsets, page.databytecounts, strict=True)]
        tags = [tag.valueoffset + tag.valuebytecount for tag in page.tags]
        return max(parts + tags + [page.offset + 2 + 12 * len(page.tags) + 4]) <= cut


@pytest.mark.parametrize(
    "name", ["lzw.tif", "deflate.tif", "packbits.tif", "deep.tif", "rgb.png", "deep.png"]
)
def test_damage_inside_the_pixels_is_an_error(
    tmp_path: Path, name: str, capfd: pytest.CaptureFixture
) -> None:
    data = bytearray(WHOLE[name])
    middle = len(data) // 2
    data[middle : middle + 300] = bytes(300)
    with pytest.raises(ScanUnreadable, match="damaged or cut short"):
        read(plain(tmp_path / name, bytes(data)))
    assert capfd.readouterr() == ("", "")


def test_page_two_of_a_single_page_format(tmp_path: Path) -> None:
    Image.fromarray(samples(3)).save(tmp_path / "a.png")
    assert pages(tmp_path / "a.png") == 1
    with pytest.raises(ScanUnreadable, match=r"has 1 page.*no page 2"):
        read(tmp_path / "a.png", page=2)
    with pytest.raises(ScanUnreadable, match=r"no such file"):
        pages(tmp_path / "b.png")


@pytest.mark.skipif(os.geteuid() == 0, reason="root may read everything")
def test_a_file_without_permission(tmp_path: Path) -> None:
    path = plain(tmp_path / "a.png", WHOLE["rgb.png"])
    path.chmod(0)
    with pytest.raises(ScanUnreadable, match=r"cannot be opened.*permissions"):
        read(path)


def test_every_format_is_read_without_the_optional_codecs(tmp_path: Path) -> None:
    """The same pixels come out in a process where imagecodecs cannot be imported."""
    for name, data in WHOLE.items():
        plain(tmp_path / name, data)
    code = (
        "import sys, json, hashlib, pathlib; sys.modules['imagecodecs'] = None\n"
        "from moire.scanfile import read, write\n"
        "folder = pathlib.Path(sys.argv[1])\n"
        "names = sorted(path.name for path in folder.iterdir())\n"
        "scans = {name: read(folder / name) for name in names}\n"
        "write(scans['deep.tif'], folder / 'written.tif')\n"
        "sums = {name: hashlib.sha256(scan.pixels.tobytes()).hexdigest() for name, scan in scans.items()}\n"
        "print(json.dumps(sums))\n"
    )
    run = subprocess.run(
        [sys.executable, "-W", "error", "-c", code, str(tmp_path)],
        capture_output=True,
        text=True,
        check=False,
    )
    assert (run.returncode, run.stderr) == (0, "")
    assert json.loads(run.stdout) == {
        name: hashlib.sha256(read(tmp_path / name).pixels.tobytes()).hexdigest() for name in WHOLE
    }
    np.testing.assert_array_equal(read(tmp_path / "written.tif").pixels, read(tmp_path / "deep.tif").pixels)


def test_nothing_of_a_scan_is_lost_between_formats(tmp_path: Path) -> None:
    scan = scan_of(samples(3, 16), icc=ICC, ppi=(400.0, 400.0), alpha=samples(1, 16, seed=3))
    write(scan, tmp_path / "a.tif")
    write(read(tmp_path / "a.tif"), tmp_path / "b.png")
    write(read(tmp_path / "b.png"), tmp_path / "c.tif")
    first, last = (replace(read(tmp_path / name), name="", sha256="") for name in ("a.tif", "c.tif"))
    np.testing.assert_array_equal(first.pixels, last.pixels)
    np.testing.assert_array_equal(first.alpha, last.alpha)
    assert (first.icc, first.ppi, first.bit_depth) == (last.icc, last.ppi, last.bit_depth)


def test_public_names() -> None:
    import moire

    assert (moire.read, moire.write) == (scanfile.read, scanfile.write)
