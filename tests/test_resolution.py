"""A stored rate counts where it is a measurement, whatever unit it is stored in."""

from __future__ import annotations

import struct
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st
from PIL import Image
from scanrig import exif, insert_chunk, samples, scan_of

from moire.errors import BadRequest
from moire.scanfile import read, write


def tiff_rate(path: Path, x: Any, y: Any, unit: int | None) -> None:
    """A TIFF of 2 x 2 grey pixels put together by hand (TIFF 6.0 (1992), section 2)."""
    entries = [
        (256, 3, 1, 2), (257, 3, 1, 2), (258, 3, 1, 8), (259, 3, 1, 1), (262, 3, 1, 1), (273, 4, 1, 8),
        (277, 3, 1, 1), (278, 3, 1, 2), (279, 4, 1, 4), (282, 5, 1, 12), (283, 5, 1, 20),
        *([(296, 3, 1, unit)] if unit else []),
    ]  # fmt: skip
    ifd = struct.pack("<H", len(entries)) + b"".join(struct.pack("<HHII", *e) for e in entries) + bytes(4)
    path.write_bytes(struct.pack("<4sI4s4I", b"II*\0", 28, b"\x01\x02\x03\x04", *x, *y) + ifd)


@pytest.mark.parametrize(
    ("x", "y", "unit", "ppi", "in_file"),
    [
        ((300, 1), (300, 1), 2, (300.0, 300.0), (300.0, 300.0)),
        ((600, 1), (300, 1), 2, (600.0, 300.0), (600.0, 300.0)),
        ((1181, 10), (1181, 10), 3, (299.974, 299.974), (299.974, 299.974)),
        ((11811, 100), (11811, 100), 3, (300.0, 300.0), (300.0, 300.0)),
        ((2999994, 10000), (2999994, 10000), 2, (300.0, 300.0), (300.0, 300.0)),
        ((29995, 100), (29995, 100), 2, (299.95, 299.95), (299.95, 299.95)),
        ((300, 1), (300, 1), 1, None, None),
        ((72, 1), (72, 1), 2, None, (72.0, 72.0)),
        ((0, 1), (0, 1), 2, None, None),
        ((300, 0), (300, 0), 2, None, None),
        ((1, 1), (1, 1), 2, None, None),
        ((20001, 1), (20001, 1), 2, None, None),
        ((300, 1), (0, 1), 2, None, None),
    ],
)
def test_rate_of_a_tiff(tmp_path: Path, x: Any, y: Any, unit: int, ppi: Any, in_file: Any) -> None:
    """TIFF 6.0 (1992), section 8: ResolutionUnit 1 none, 2 inch, 3 centimetre."""
    tiff_rate(tmp_path / "a.tif", x, y, unit)
    scan = read(tmp_path / "a.tif")
    assert scan.ppi == (pytest.approx(ppi) if ppi else None)
    assert scan.ppi_in_file == (pytest.approx(in_file) if in_file else None)
    assert scan.ppi_source == ("file" if ppi else None)


def test_unit_of_a_tiff_defaults_to_the_inch(tmp_path: Path) -> None:
    """TIFF 6.0 (1992), section 8: ResolutionUnit, default = 2."""
    tiff_rate(tmp_path / "a.tif", (300, 1), (300, 1), None)
    assert read(tmp_path / "a.tif").ppi == (300.0, 300.0)


@pytest.mark.parametrize(
    ("per_metre", "unit", "ppi", "in_file"),
    [
        # 300 / 0.0254 = 11811.02 is stored as 11811, which is 299.9994 ppi.
        ((11811, 11811), 1, (300.0, 300.0), (300.0, 300.0)),
        ((23622, 11811), 1, (600.0, 300.0), (600.0, 300.0)),
        ((5906, 5906), 1, (150.0, 150.0), (150.0, 150.0)),
        ((11820, 11820), 1, (300.228, 300.228), (300.228, 300.228)),
        ((2835, 2835), 1, None, (72.0, 72.0)),
        ((11811, 11811), 0, None, None),
        ((0, 0), 1, None, None),
    ],
)
def test_rate_of_a_png(tmp_path: Path, per_metre: Any, unit: int, ppi: Any, in_file: Any) -> None:
    """ISO/IEC 15948, clause 11.3.5.3: pHYs holds whole pixels per metre where its unit is 1."""
    Image.fromarray(samples(1)).save(tmp_path / "b.png")
    insert_chunk(tmp_path / "b.png", tmp_path / "a.png", b"pHYs", struct.pack(">IIB", *per_metre, unit))
    scan = read(tmp_path / "a.png")
    assert scan.ppi == (pytest.approx(ppi) if ppi else None)
    assert scan.ppi_in_file == (pytest.approx(in_file) if in_file else None)


@pytest.mark.parametrize(
    ("unit", "density", "ppi", "in_file"),
    [
        (1, (300, 300), (300.0, 300.0), (300.0, 300.0)),
        (1, (300, 600), (300.0, 600.0), (300.0, 600.0)),
        (2, (118, 118), (299.72, 299.72), (299.72, 299.72)),
        (0, (300, 300), None, None),
        (0, (1, 1), None, None),
        (1, (72, 72), None, (72.0, 72.0)),
        (1, (1, 1), None, None),
    ],
)
def test_rate_of_a_jpeg(tmp_path: Path, unit: int, density: Any, ppi: Any, in_file: Any) -> None:
    """ITU-T T.871, clause 10.1: units 0 aspect ratio only, 1 dots per inch, 2 dots per cm."""
    Image.fromarray(samples(1)).save(tmp_path / "a.jpg")
    data = bytearray((tmp_path / "a.jpg").read_bytes())
    at = data.index(b"JFIF\0")
    data[at + 7 : at + 12] = struct.pack(">BHH", unit, *density)
    (tmp_path / "a.jpg").write_bytes(data)
    scan = read(tmp_path / "a.jpg")
    assert scan.ppi == (pytest.approx(ppi) if ppi else None)
    assert scan.ppi_in_file == (pytest.approx(in_file) if in_file else None)


@pytest.mark.parametrize("suffix", [".jpg", ".png", ".webp"])
def test_rate_of_exif(tmp_path: Path, suffix: str) -> None:
    path = tmp_path / f"a{suffix}"
    Image.fromarray(samples(3)).save(path, exif=exif(400.0))
    assert read(path).ppi == (400.0, 400.0)
    Image.fromarray(samples(3)).save(path, exif=exif(100.0, unit=3))
    assert read(path).ppi == (254.0, 254.0)


@pytest.mark.parametrize(
    ("jfif", "in_exif", "ppi"), [(300, 350.0, 300), (72, 350.0, 350), (300, 300.25, 300.25), (300, 72.0, 300)]
)
def test_jfif_stands_but_for_a_placeholder_or_lost_decimals(
    tmp_path: Path, jfif: int, in_exif: float, ppi: float
) -> None:
    Image.fromarray(samples(3)).save(tmp_path / "a.jpg", dpi=(jfif, jfif), exif=exif(in_exif))
    assert read(tmp_path / "a.jpg").ppi == pytest.approx((ppi, ppi))


def test_rate_of_a_bmp(tmp_path: Path) -> None:
    Image.fromarray(samples(3)).save(tmp_path / "a.bmp", dpi=(300, 150))
    assert read(tmp_path / "a.bmp").ppi == (300.0, 150.0)


def test_the_option_wins_and_both_are_told(tmp_path: Path) -> None:
    Image.fromarray(samples(3)).save(tmp_path / "a.png", dpi=(300, 300))
    scan = read(tmp_path / "a.png", ppi=(600, 601.5))
    assert (scan.ppi, scan.ppi_source, scan.ppi_in_file) == ((600.0, 601.5), "option", (300.0, 300.0))
    for bad in ((0.0, 300.0), (300.0, float("nan")), (-1.0, -1.0), (1e9, 1e9)):
        with pytest.raises(BadRequest, match="give 10 to 20000"):
            read(tmp_path / "a.png", ppi=bad)


RATES = st.floats(10, 20000).filter(lambda rate: abs(rate - 72) > 0.05)


@pytest.mark.parametrize(("suffix", "step"), [(".tif", 0.0), (".png", 0.0254), (".jpg", 0.0)])
@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(x=RATES, y=RATES)
@example(x=300.0, y=300.0)
@example(x=150.0, y=72.5)
@example(x=299.72, y=20000.0)
def test_any_rate_survives(tmp_path: Path, suffix: str, step: float, x: float, y: float) -> None:
    """Within half a step of the format's unit and the snapping to whole rates, 0.002 %."""
    for bits in (8, 16) if suffix == ".png" else (8,):
        write(scan_of(samples(3, bits)[:2, :2], ppi=(x, y)), tmp_path / f"a{suffix}", force=True)
        got = read(tmp_path / f"a{suffix}").ppi
        assert got is not None
        for rate, back in zip((x, y), got, strict=True):
            assert abs(back - rate) <= step / 2 * 1.001 + 2.2e-5 * rate


@given(rate=st.integers(10, 20000).filter(lambda rate: rate != 72))
@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_whole_rates_survive_exactly(tmp_path: Path, rate: int) -> None:
    for suffix in (".tif", ".png", ".jpg"):
        write(scan_of(samples(1)[:2, :2], "grey", ppi=(rate, rate)), tmp_path / f"a{suffix}", force=True)
        assert read(tmp_path / f"a{suffix}").ppi == (rate, rate)


@pytest.mark.parametrize("suffix", [".tif", ".png", ".jpg"])
def test_an_unknown_rate_stays_unknown(tmp_path: Path, suffix: str) -> None:
    write(scan_of(samples(3), ppi_in_file=(72.0, 72.0)), tmp_path / f"a{suffix}")
    scan = read(tmp_path / f"a{suffix}")
    assert (scan.ppi, scan.ppi_source, scan.ppi_in_file) == (None, None, None)
