"""PNG comes in and goes out in full depth."""

from __future__ import annotations

import struct
import zlib
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from PIL import Image
from scanrig import HEIGHT, WHOLE, imagecodecs, insert_chunk, plain, samples, scan_of

from moire.errors import ScanUnreadable
from moire.scanfile import read, write


@pytest.mark.parametrize("channels", [1, 2, 3, 4])
def test_16_bit_png_by_imagecodecs(tmp_path: Path, channels: int) -> None:
    values = samples(channels, 16)
    (tmp_path / "a.png").write_bytes(imagecodecs().png_encode(values))
    scan = read(tmp_path / "a.png")
    colours = {1: values, 2: values[..., 0]}.get(channels, values[..., :3])
    np.testing.assert_array_equal(scan.pixels, colours)
    if channels in (2, 4):
        np.testing.assert_array_equal(scan.alpha, values[..., -1])


@pytest.mark.parametrize(("mode", "bits"), [("L", 8), ("RGB", 8), ("P", 8), ("grey", 16), ("rgb", 16)])
def test_transparent_colour_of_a_png_becomes_alpha(tmp_path: Path, mode: str, bits: int) -> None:
    """ISO/IEC 15948, clause 11.3.2.1: tRNS names one colour, or an alpha for each palette entry."""
    if bits == 8:
        image = Image.fromarray(samples(3)).convert(mode)
        key: Any = image.getpixel((3, 2))
        image.save(tmp_path / "a.png", transparency=key)
        values = np.atleast_3d(np.asarray(image))
    else:
        values = np.atleast_3d(samples(3 if mode == "rgb" else 1, 16))
        key = tuple(int(v) for v in values[2, 3])
        write(scan_of(values.squeeze(), mode), tmp_path / "b.png")
        insert_chunk(tmp_path / "b.png", tmp_path / "a.png", b"tRNS", struct.pack(f">{len(key)}H", *key))
    scan = read(tmp_path / "a.png")
    clear = np.all(values == key, axis=2)
    assert clear[2, 3]
    np.testing.assert_array_equal(scan.alpha, np.where(clear, 0, 2**bits - 1))


def adam7(values: np.ndarray) -> bytes:
    """Interlaced PNG of 8-bit RGB, made by hand with unfiltered rows."""
    passes = (0, 0, 8, 8), (4, 0, 8, 8), (0, 4, 4, 8), (2, 0, 4, 4), (0, 2, 2, 4), (1, 0, 2, 2), (0, 1, 1, 2)
    rows = b"".join(
        b"\0" + row.tobytes() for x, y, dx, dy in passes for row in values[y::dy, x::dx] if row.size
    )
    header = struct.pack(">IIBBBBB", values.shape[1], values.shape[0], 8, 2, 0, 0, 1)
    chunks = [(b"IHDR", header), (b"IDAT", zlib.compress(rows)), (b"IEND", b"")]
    parts = [struct.pack(">I", len(b)) + n + b + struct.pack(">I", zlib.crc32(n + b)) for n, b in chunks]
    return b"\x89PNG\r\n\x1a\n" + b"".join(parts)


@pytest.mark.parametrize("size", [(1, 1), (3, 5), (45, 70)])
def test_interlaced_png(tmp_path: Path, size: tuple[int, int]) -> None:
    """ISO/IEC 15948, clause 8.2: seven passes, some of them empty in a small picture."""
    values = samples(3)[: size[0], : size[1]]
    (tmp_path / "a.png").write_bytes(adam7(values))
    np.testing.assert_array_equal(read(tmp_path / "a.png").pixels, values)


@pytest.mark.parametrize("channels", [1, 2, 3, 4])
def test_16_bit_png_as_imagecodecs_reads_it(tmp_path: Path, channels: int) -> None:
    decode = imagecodecs().png_decode
    values = samples(channels, 16)
    alpha = values[..., -1] if channels in (2, 4) else None
    pixels = {1: values, 2: values[..., 0]}.get(channels, values[..., :3])
    write(scan_of(pixels, "rgb" if channels > 2 else "grey", alpha=alpha), tmp_path / "a.png")
    np.testing.assert_array_equal(decode((tmp_path / "a.png").read_bytes()), values)


@pytest.mark.parametrize("lost", [0, 1, 2])
@pytest.mark.parametrize("name", ["rgb.png", "line.png", "deep.png"])
def test_a_png_that_lost_a_chunk_is_an_error(tmp_path: Path, name: str, lost: int) -> None:
    """Decoders pass over what cannot be unpacked, and leave grey."""
    data = WHOLE[name]
    bodies, at = [], 33
    while at < len(data):
        (length,) = struct.unpack_from(">I", data, at)
        bodies += [data[at + 8 : at + 8 + length]] if data[at + 4 : at + 8] == b"IDAT" else []
        at += 12 + length
    packed = b"".join(bodies)
    third = len(packed) // 3
    parts = [packed[:third], packed[third : 2 * third], packed[2 * third :]]
    plain(tmp_path / "b.png", data[:33] + data[-12:])
    for part in [part for i, part in enumerate(parts) if i != lost][::-1]:
        insert_chunk(tmp_path / "b.png", tmp_path / "b.png", b"IDAT", part)
    with pytest.raises(ScanUnreadable, match="damaged or cut short"):
        read(tmp_path / "b.png")


@pytest.mark.parametrize("name", ["rgb.png", "deep.png"])
def test_a_png_with_too_few_rows_is_an_error(tmp_path: Path, name: str) -> None:
    """Sound checksums, but the picture in them ends early."""
    data = WHOLE[name]
    ihdr = data[16:20] + struct.pack(">I", HEIGHT * 2) + data[24:29]
    longer = data[:16] + ihdr + struct.pack(">I", zlib.crc32(b"IHDR" + ihdr)) + data[33:]
    with pytest.raises(ScanUnreadable, match="damaged or cut short"):
        read(plain(tmp_path / name, longer))
