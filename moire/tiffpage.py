"""One page of a TIFF file, decoded exactly, with or without the optional codecs.

tifffile reads the tags, and the pixels of files that are uncompressed, deflated or packed.
libtiff, through Pillow, does the rest, but never where it would drop to 8 bits unasked.
"""

from __future__ import annotations

import struct
from collections.abc import Sequence
from dataclasses import replace
from io import BytesIO
from itertools import accumulate
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from moire.raster import (
    Mode,
    Raster,
    Unfit,
    check_size,
    from_pillow,
    open_pillow,
    split,
    undisturbed,
    upright,
)
from moire.resolution import from_unit

if TYPE_CHECKING:
    from tifffile import TiffPage

_ORIENTATION, _X, _Y, _UNIT, _ICC = 274, 282, 283, 296, 34675
_PLAIN = {1, 8, 32946, 32773}  # none, deflate (new, old), PackBits
_LZW = 5
_FAX = {2, 3, 4}
_JPEG = {6, 7}
_PALETTE, _YCBCR = 3, 6
_TYPE_BYTES = dict(enumerate((0, 1, 1, 2, 4, 8, 1, 1, 2, 4, 8, 4, 8, 4, 0, 0, 8, 8, 8)))
_MODES: dict[int, Mode] = {0: "grey", 1: "grey", 2: "rgb", _PALETTE: "rgb", 5: "cmyk", _YCBCR: "rgb"}


def count(path: Path) -> int:
    """Number of pages."""
    from tifffile import TiffFile

    with undisturbed(), TiffFile(path) as tiff:
        return len(tiff.pages)


def decode(path: Path, number: int) -> Raster:
    """Decode page `number`, counted from 1.

    Raises
    ------
    Unfit
        If there is no such page or it holds something that a scan cannot be.
    Exception
        Whatever a decoder raises on a damaged file.

    References
    ----------
    TIFF 6.0 (1992); BigTIFF and the deflate codes are Adobe's and libtiff's later additions.
    """
    from tifffile import TiffFile

    with undisturbed(), TiffFile(path) as tiff:
        if not 1 <= number <= len(tiff.pages):
            raise Unfit(f"has {len(tiff.pages)} page(s), so no page {number}")
        page: Any = tiff.pages[number - 1]
        _check_kind(page)
        _check_whole(page, tiff.tiff, path)
        raster = _decoded(page, path, number)
        tags = page.tags
        return upright(
            replace(
                raster,
                icc=bytes(tags.valueof(_ICC) or b""),
                stored_ppi=from_unit(tags.valueof(_X), tags.valueof(_Y), tags.valueof(_UNIT, 2)),
                jpeg=page.compression in _JPEG,
            ),
            int(tags.valueof(_ORIENTATION, 1)),
        )


def _check_kind(page: TiffPage) -> None:
    """Refuse samples that are no scan's: wrong type, depth, colour space or size."""
    wanted = "save it as TIFF with 8 or 16 bits in grey, RGB or CMYK"
    check_size(page.imagewidth, page.imagelength)
    bits, colour = page.bitspersample, page.photometric
    if page.sampleformat != 1:
        raise Unfit(f"holds {_word(page.sampleformat)} samples of {bits} bits: {wanted}")
    if bits not in (1, 2, 4, 8, 16) or page.imagedepth != 1 or (colour == _PALETTE and bits == 16):
        raise Unfit(f"has {bits} bits a sample: {wanted}")
    if colour not in _MODES or (colour == _YCBCR and page.compression not in _JPEG):
        raise Unfit(f"has colours stored as {_word(colour)}: {wanted}")
    if page.samplesperpixel < (1 if colour == _PALETTE else _colours(page)):
        raise Unfit(f"has only {page.samplesperpixel} sample(s) a pixel for {_MODES[colour]}: {wanted}")


def _check_whole(page: TiffPage, form: Any, path: Path) -> None:
    """Every tag, strip and tile must be there: what is missing is filled in without a word."""
    size = path.stat().st_size
    parts = list(zip(page.dataoffsets, page.databytecounts, strict=False))
    if len(parts) < int(np.prod(page.chunked)) or not all(
        start > 0 and length > 0 for start, length in parts
    ):
        raise ValueError("parts of the picture are missing")
    with path.open("rb") as file:
        file.seek(page.offset)
        (number,) = struct.unpack(form.tagnoformat, file.read(form.tagnosize))
        tags = file.read(number * form.tagsize)
        if len(file.read(form.offsetsize)) < form.offsetsize:  # of the next page
            raise ValueError("it ends early")
    wide = form.tagsize == 20  # BigTIFF: counts and offsets of 8 bytes, values up to 8 in place
    layout = f"{form.byteorder}HHQQ" if wide else f"{form.byteorder}HHII"
    for _, kind, count, at in struct.iter_unpack(layout, tags):
        length = count * _TYPE_BYTES.get(kind, 0)
        parts.append((at, length) if length > (8 if wide else 4) else (0, 0))
    if any(start + length > size for start, length in parts):
        raise ValueError("it ends early")


def _decoded(page: TiffPage, path: Path, number: int) -> Raster:
    """Samples by the decoder that is exact for this kind of page."""
    bits, mode = page.bitspersample, _MODES[page.photometric]
    through_libtiff = bits < 8 or page.photometric == _PALETTE
    if page.compression in _JPEG | _FAX or (through_libtiff and page.compression in _PLAIN | {_LZW}):
        image = open_pillow(_unturned(page, path), "TIFF")
        image.seek(number - 1)
        return replace(from_pillow(image), bit_depth=max(bits, 8) if bits > 1 else 1)
    if through_libtiff:
        raise Unfit(f"is packed as {_word(page.compression)}: save it uncompressed or with LZW")
    samples = _unpacked(page, path) if page.compression == _LZW else _by_tifffile(page)
    kinds = [int(kind) for kind in page.extrasamples]
    at = next((i for i, kind in enumerate(kinds) if kind in (1, 2)), None)
    raster = split(samples, mode, bits, alpha=None if at is None else _colours(page) + at)
    if at is not None and kinds[at] == 1:
        raster = _unmultiplied(raster)
    white_is_zero = page.photometric == 0
    return replace(raster, pixels=np.iinfo(samples.dtype).max - raster.pixels) if white_is_zero else raster


def _colours(page: TiffPage) -> int:
    return {"grey": 1, "rgb": 3, "cmyk": 4}[_MODES[page.photometric]]


def _word(code: Any) -> str:
    """A tag's value as tifffile spells it, as a number where it has no word."""
    return str(getattr(code, "name", code)).lower()


def _by_tifffile(page: TiffPage) -> NDArray[Any]:
    """Samples, shape (rows, columns[, samples]), in the machine's byte order."""
    try:
        values = page.asarray()
    except ValueError as error:
        if "imagecodecs" not in str(error):
            raise
        raise Unfit(
            f"is packed as {_word(page.compression)}: install moire-scan[codecs], or save it uncompressed"
        ) from error
    if page.planarconfig == 2 and page.samplesperpixel > 1:
        values = np.moveaxis(values, 0, -1)
    return values.astype(values.dtype.newbyteorder("="), copy=False)


def _unmultiplied(raster: Raster) -> Raster:
    """Colours of a page whose alpha was multiplied in (TIFF 6.0, section 18, ExtraSamples 1)."""
    assert raster.alpha is not None
    top = np.iinfo(raster.pixels.dtype).max
    alpha = np.maximum(raster.alpha, 1).reshape(raster.alpha.shape + (1,) * (raster.pixels.ndim - 2))
    straight = np.minimum(np.rint(raster.pixels * (top / alpha)), top)
    return replace(raster, pixels=straight.astype(raster.pixels.dtype))


def _unturned(page: TiffPage, path: Path) -> bytes:
    """The file with this page's orientation set to 1: Pillow would turn the page itself."""
    data = path.read_bytes()
    tag = page.tags.get(_ORIENTATION)
    if tag is None or tag.value == 1:
        return data
    order = page.parent.byteorder
    return data[: tag.valueoffset] + struct.pack(order + "H", 1) + data[tag.valueoffset + 2 :]


def _unpacked(page: TiffPage, path: Path) -> NDArray[Any]:
    """Samples of an LZW page, shape (rows, columns, samples), any depth, layout and planes."""
    height, width, samples = page.imagelength, page.imagewidth, page.samplesperpixel
    planes = samples if page.planarconfig == 2 else 1
    rows, columns = (page.tilelength, page.tilewidth) if page.is_tiled else (page.rowsperstrip, width)
    rows = rows if page.is_tiled else min(rows, height)
    across, down = -(-width // columns), -(-height // rows)
    dtype = np.dtype(f"{page.parent.byteorder}u{page.bitspersample // 8}")
    row_bytes = columns * samples // planes * dtype.itemsize
    out = np.empty((height, width, samples), dtype.newbyteorder("="))
    data = path.read_bytes()
    parts = [data[at : at + size] for at, size in zip(page.dataoffsets, page.databytecounts, strict=True)]
    for plane in range(planes):
        packed = parts[plane * across * down : (plane + 1) * across * down]
        total = rows * len(packed) if page.is_tiled else height
        block = np.frombuffer(_lzw_rows(packed, row_bytes, rows, total), dtype)
        block = block.reshape(total, columns, samples // planes)
        if page.predictor == 2:
            block = np.cumsum(block, axis=1, dtype=out.dtype)
        if page.is_tiled:
            # Side by side: (down, across, row, ...) to (down, row, across, ...).
            block = block.reshape(down, across, rows, *block.shape[1:]).swapaxes(1, 2)
        block = block.reshape(-1, across * columns, samples // planes)
        out[..., plane : plane + samples // planes] = block[:height, :width]
    return out


def _lzw_rows(packed: Sequence[bytes], row_bytes: int, rows: int, total: int) -> bytes:
    """Unpack LZW strips: put down as an 8-bit grey page, whose bytes libtiff gives back as they are.

    Parameters
    ----------
    packed : sequence of bytes
        Strips, in order.
    row_bytes, rows, total : int
        Bytes a row, rows a strip, rows in all.
    """
    from PIL import Image

    number, head = len(packed), 8 + 2 + 9 * 12 + 4
    lengths = [len(strip) for strip in packed]
    starts = list(accumulate(lengths[:-1], initial=head + 8 * number))
    if starts[-1] + lengths[-1] >= 2**32:
        raise Unfit("has more than 4 GB of LZW data: save it with deflate or uncompressed")
    table = struct.pack(f"<{2 * number}I", *starts, *lengths)
    # A tag of one value holds it in place of the offset to its values.
    where = (head, head + 4 * number) if number > 1 else (starts[0], lengths[0])
    long, short = 4, 3
    entries = [
        (256, long, 1, row_bytes), (257, long, 1, total), (258, short, 1, 8), (259, short, 1, _LZW),
        (262, short, 1, 1), (273, long, number, where[0]), (277, short, 1, 1), (278, long, 1, rows),
        (279, long, number, where[1]),
    ]  # fmt: skip
    ifd = struct.pack("<H", len(entries)) + b"".join(struct.pack("<HHII", *e) for e in entries) + bytes(4)
    page = b"".join([b"II*\0\x08\0\0\0", ifd, table, *packed])
    return from_pillow(Image.open(BytesIO(page), formats=["TIFF"])).pixels.tobytes()
