"""PNG in full depth: Pillow reads 16-bit colour as 8 bits, and writes none.

Chunks are walked here, so that a lost one is an error and not a grey area. Clause numbers
are those of ISO/IEC 15948:2004.
"""

from __future__ import annotations

import struct
import zlib
from collections.abc import Iterable
from dataclasses import replace
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from moire.raster import Raster, check_size, from_pillow, open_pillow, read_exif, split, undisturbed, upright
from moire.resolution import Ppi, from_metre, sharper, to_metre

Chunks = list[tuple[bytes, Any]]

_SIGNATURE = b"\x89PNG\r\n\x1a\n"
_SAMPLES = {0: 1, 2: 3, 3: 1, 4: 2, 6: 4}
_WHOLE = ((0, 0, 1, 1),)
# First column and row of each pass and the steps from there (clause 8.2, Adam7).
_ADAM7 = (
    (0, 0, 8, 8), (4, 0, 8, 8), (0, 4, 4, 8), (2, 0, 4, 4), (0, 2, 2, 4), (1, 0, 2, 2), (0, 1, 1, 2),
)  # fmt: skip


def decode(data: bytes) -> Raster:
    """Decode a PNG file.

    Raises
    ------
    moire.raster.Unfit
        If the picture is too large.
    Exception
        Whatever a decoder raises on a damaged file.
    """
    chunks = _chunks(data)
    width, height, depth = struct.unpack_from(">IIB", chunks[0][1])
    check_size(width, height)
    _check_rows(chunks)
    with undisturbed():
        image = open_pillow(_file(chunks, b"IHDR PLTE tRNS iCCP eXIf IDAT IEND"), "PNG")
        orientation, exif_ppi = read_exif(image)
        icc = image.info.get("icc_profile") or b""
        raster = _deep(chunks) if depth == 16 else from_pillow(image)
    # pHYs: per metre where its unit is 1, else only the pixel's shape (clause 11.3.5.3).
    x, y, unit = next((struct.unpack(">IIB", body) for name, body in chunks if name == b"pHYs"), (0, 0, 0))
    ppi = sharper(from_metre(x, y) if unit == 1 else None, exif_ppi)
    return upright(replace(raster, icc=icc, stored_ppi=ppi), orientation)


def encode_16(file: BinaryIO, values: NDArray[np.uint16], *, ppi: Ppi | None, icc: bytes) -> None:
    """Write a PNG of 16 bits a sample.

    Parameters
    ----------
    file : binary file
    values : ndarray of uint16, shape (rows, columns) or (rows, columns, samples)
        Grey, grey and alpha, RGB, or RGB and alpha.
    ppi : (float, float) or None
        Stored as whole pixels per metre.
    icc : bytes
        Profile, empty for none.
    """
    height, width = values.shape[:2]
    samples = values.reshape(height, -1).astype(">u2").view(np.uint8)
    step = samples.shape[1] // width
    # Every row is filtered by Sub: each byte less the one a pixel before (clause 9.2).
    rows = np.empty((height, samples.shape[1] + 1), np.uint8)
    rows[:, 0] = 1
    rows[:, 1 : 1 + step] = samples[:, :step]
    np.subtract(samples[:, step:], samples[:, :-step], out=rows[:, 1 + step :])
    colour_type = {2: 0, 4: 4, 6: 2, 8: 6}[step]
    chunks: Chunks = [(b"IHDR", struct.pack(">IIBBBBB", width, height, 16, colour_type, 0, 0, 0))]
    if icc:
        chunks.append((b"iCCP", b"ICC profile\0\0" + zlib.compress(icc)))
    if ppi:
        chunks.append((b"pHYs", struct.pack(">IIB", *to_metre(ppi), 1)))
    packer = zlib.compressobj()
    # In pieces, for a chunk's length has 31 bits only.
    packed = [packer.compress(rows[at : at + 1024].tobytes()) for at in range(0, height, 1024)]
    chunks += [(b"IDAT", piece) for piece in (*packed, packer.flush()) if piece]
    file.writelines(_pieces([*chunks, (b"IEND", b"")]))


def _chunks(data: bytes) -> Chunks:
    """Chunks up to IEND, each critical one held to its CRC (clauses 5.3 and 5.4)."""
    view, at, chunks = memoryview(data), len(_SIGNATURE), Chunks()
    while not chunks or chunks[-1][0] != b"IEND":
        body_at = at + 8
        if body_at > len(data):
            raise ValueError("it ends early")
        length, name = struct.unpack_from(">I4s", data, at)
        at = body_at + length + 4
        if at > len(data):
            raise ValueError("it ends early")
        body = view[body_at : at - 4]
        sound = struct.unpack_from(">I", data, at - 4)[0] == _check(name, body)
        if not sound and name[:1].isupper():
            raise ValueError(f"a wrong checksum in {name.decode('latin-1')}")
        if sound:
            chunks.append((name, body))
    return chunks


def _check(name: bytes, body: Any) -> int:
    return zlib.crc32(body, zlib.crc32(name))


def _pieces(chunks: Chunks) -> Iterable[Any]:
    yield _SIGNATURE
    for name, body in chunks:
        yield from (struct.pack(">I", len(body)), name, body, struct.pack(">I", _check(name, body)))


def _file(chunks: Chunks, keep: bytes) -> bytes:
    return b"".join(_pieces([chunk for chunk in chunks if chunk[0] in keep.split()]))


def _check_rows(chunks: Chunks) -> None:
    """Unpack the picture once: decoders pass over a lost or damaged chunk without a word."""
    width, height, depth, colour_type, _, _, interlaced = struct.unpack_from(">IIBBBBB", chunks[0][1])
    wanted = got = 0
    for x, y, dx, dy in _ADAM7 if interlaced else _WHOLE:
        columns, rows = -((x - width) // dx), -((y - height) // dy)
        if columns > 0 and rows > 0:
            wanted += rows * (1 + (columns * depth * _SAMPLES[colour_type] + 7) // 8)
    unpacker = zlib.decompressobj()
    for packed in (body for name, body in chunks if name == b"IDAT"):
        while packed:
            got += len(unpacker.decompress(packed, 1 << 20))
            packed = unpacker.unconsumed_tail
    got += len(unpacker.flush())
    if got < wanted or not unpacker.eof:
        raise ValueError("rows of the picture are missing")


def _deep(chunks: Chunks) -> Raster:
    """Picture of 16 bits a sample; OpenCV is given the pixels only, to keep it silent."""
    import cv2

    colour_type = chunks[0][1][9]
    file = np.frombuffer(_file(chunks, b"IHDR IDAT IEND"), np.uint8)
    values = cv2.imdecode(file, cv2.IMREAD_UNCHANGED)
    if values is None or values.dtype != np.uint16:
        raise ValueError("its pixels cannot be decoded")
    if values.ndim == 3:
        values = values[..., [2, 1, 0, 3][: values.shape[2]]]
    raster = split(values, "rgb" if colour_type & 2 else "grey", 16, alpha=-1 if colour_type & 4 else None)
    # tRNS: the one colour that is clear (clause 11.3.2.1).
    key = next((np.frombuffer(body, ">u2") for name, body in chunks if name == b"tRNS"), None)
    if key is None:
        return raster
    clear = np.all(np.atleast_3d(raster.pixels) == key, axis=2)
    return replace(raster, alpha=np.where(clear, np.uint16(0), np.uint16(65535)))
