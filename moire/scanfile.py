"""Scans as files: every usual format in, TIFF, PNG and JPEG out, nothing lost on the way."""

from __future__ import annotations

import contextlib
import hashlib
import logging
import os
import warnings
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from moire.decode import Decoded, decode_raster
from moire.decode_tiff import decode_tiff, is_tiff
from moire.encode import encode_jpeg, encode_png, encode_tiff
from moire.errors import OutputRefused, ScanUnreadable
from moire.model import Scan
from moire.outputs import PathLike, check_target, write_bytes
from moire.resolution import Rate, measured


def read(path: PathLike, *, ppi: Rate | None = None, page: int = 1) -> Scan:
    """Read one page of a scan.

    Parameters
    ----------
    path : path
        TIFF, PNG, JPEG, JPEG 2000, WebP or BMP.
    ppi : (float, float) or None
        Sampling rate given by the user; wins over the file's own.
    page : int
        From 1.

    Returns
    -------
    Scan
        Pixels upright, read-only.

    Raises
    ------
    ScanUnreadable
        If the file is missing, damaged, of another kind, or holds no such page.
    """
    name = os.fspath(path)
    data = _bytes_of(name)
    with _quiet(), _explained(name):
        decoded = decode_tiff(data, name, page) if is_tiff(data) else decode_raster(data, name, page)
    pixels, alpha, rate = _upright(decoded)
    stored = rate
    used: Rate | None = ppi or measured(stored)
    pixels = np.ascontiguousarray(pixels)
    pixels.setflags(write=False)
    return Scan(
        pixels=pixels,
        mode=decoded.mode,
        bit_depth=decoded.bit_depth,
        ppi=used,
        ppi_source=None if used is None else "option" if ppi else "file",
        ppi_in_file=stored,
        alpha=alpha,
        icc=decoded.icc,
        name=Path(name).name,
        sha256=hashlib.sha256(data).hexdigest(),
        jpeg=decoded.jpeg,
        page=page,
    )


def pages(path: PathLike) -> int:
    """Number of pages in a file.

    Raises
    ------
    ScanUnreadable
    """
    import io

    name = os.fspath(path)
    data = _bytes_of(name)
    with _quiet(), _explained(name):
        if not is_tiff(data):
            return 1
        import tifffile

        with tifffile.TiffFile(io.BytesIO(data)) as tif:
            return len(tif.pages)


def write(
    scan: Scan,
    path: PathLike,
    *,
    force: bool = False,
    inputs: Sequence[PathLike] = (),
    jpeg_quality: int = 92,
) -> None:
    """Write a scan as TIFF (deflate), PNG or JPEG, with its depth, ICC profile and ppi.

    Parameters
    ----------
    scan : Scan
    path : path
        The extension decides the format.
    force : bool
        Overwrite an existing file; never one of `inputs`.
    inputs : sequence of path
        Files that must not be overwritten.
    jpeg_quality : int
        1..100.

    Raises
    ------
    OutputRefused
    """
    check_target(path, force=force, inputs=inputs)
    suffix = Path(path).suffix.lower()
    encoders: dict[str, Callable[[], bytes]] = {
        ".tif": lambda: encode_tiff(scan),
        ".tiff": lambda: encode_tiff(scan),
        ".png": lambda: encode_png(scan, str(path)),
        ".jpg": lambda: encode_jpeg(scan, str(path), jpeg_quality),
        ".jpeg": lambda: encode_jpeg(scan, str(path), jpeg_quality),
    }
    if suffix not in encoders:
        raise OutputRefused(str(path), f"extension {suffix!r} is not written: use .tif, .png or .jpg")
    write_bytes(encoders[suffix](), path, force=force, inputs=inputs)


def _bytes_of(name: str) -> bytes:
    try:
        data = Path(name).read_bytes()
    except OSError as error:
        raise ScanUnreadable(name, f"cannot be opened: {error.strerror}") from error
    if not data:
        raise ScanUnreadable(name, "is empty: copy it again from the scanner")
    return data


@contextlib.contextmanager
def _quiet() -> Iterator[None]:
    """Silence what decoders say about odd files; what matters becomes an error."""
    logger = logging.getLogger("tifffile")
    before = logger.disabled
    logger.disabled = True
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    finally:
        logger.disabled = before


@contextlib.contextmanager
def _explained(name: str) -> Iterator[None]:
    """Any decoder's failure as one clear error that names the file."""
    try:
        yield
    except ScanUnreadable:
        raise
    except MemoryError as error:
        raise ScanUnreadable(name, "is too large for this machine's memory") from error
    except Exception as error:  # a decoder may raise anything on a damaged file
        reason = str(error).splitlines()[0] if str(error) else type(error).__name__
        raise ScanUnreadable(
            name, f"is damaged or of a kind not read here ({reason}): scan or copy it again"
        ) from error


def _upright(decoded: Decoded) -> tuple[NDArray[Any], NDArray[Any] | None, Rate | None]:
    """Pixels, alpha and rate with the orientation tag applied (TIFF 6.0, Orientation 1..8)."""
    turn: dict[int, Callable[[NDArray[Any]], NDArray[Any]]] = {
        2: lambda a: a[:, ::-1],
        3: lambda a: a[::-1, ::-1],
        4: lambda a: a[::-1],
        5: lambda a: a.swapaxes(0, 1),
        6: lambda a: a.swapaxes(0, 1)[:, ::-1],
        7: lambda a: a.swapaxes(0, 1)[::-1, ::-1],
        8: lambda a: a.swapaxes(0, 1)[::-1],
    }
    apply = turn.get(decoded.orientation, lambda a: a)
    alpha = None if decoded.alpha is None else np.ascontiguousarray(apply(decoded.alpha))
    rate = decoded.rate
    if rate is not None and decoded.orientation >= 5:
        rate = (rate[1], rate[0])
    return apply(decoded.pixels), alpha, rate
