"""PNG chunks that encoders leave out: density and colour profile (ISO/IEC 15948)."""

from __future__ import annotations

import struct
import zlib

from moire.resolution import to_per_metre

_SIGNATURE_AND_IHDR = 8 + 25


def with_chunks(png: bytes, *, ppi: tuple[float, float] | None, icc: bytes) -> bytes:
    """A PNG with pHYs and iCCP chunks set right after its header, in place of any it had."""
    head, rest = png[:_SIGNATURE_AND_IHDR], png[_SIGNATURE_AND_IHDR:]
    out = [head]
    if icc:
        out.append(_chunk(b"iCCP", b"profile\0\0" + zlib.compress(icc)))
    if ppi is not None:
        out.append(_chunk(b"pHYs", struct.pack(">IIB", *to_per_metre(ppi), 1)))
    at = 0
    while at < len(rest):
        length = struct.unpack(">I", rest[at : at + 4])[0] + 12
        if rest[at + 4 : at + 8] not in (b"pHYs", b"iCCP", b"sRGB", b"gAMA", b"cHRM"):
            out.append(rest[at : at + length])
        at += length
    return b"".join(out)


def _chunk(kind: bytes, data: bytes) -> bytes:
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))
