"""Reading scans from files and writing derivatives beside them.

A scan keeps its depth, its ICC profile, its alpha and its sampling rate on the way in and
out. A file is written whole or not at all, and never over an input.
"""

from __future__ import annotations

import hashlib
import os
import secrets
import struct
from collections.abc import Callable, Sequence
from fractions import Fraction
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from moire import pngfile, raster, tiffpage
from moire.errors import OutputRefused, ScanUnreadable
from moire.model import Scan
from moire.resolution import settle

PathLike = str | os.PathLike[str]

_READABLE = "TIFF, PNG, JPEG, JPEG 2000, WebP or BMP"


def read(path: PathLike, *, ppi: tuple[float, float] | None = None, page: int = 1) -> Scan:
    """Read a scan.

    Parameters
    ----------
    path : path
        TIFF, PNG, JPEG, JPEG 2000, WebP or BMP; the content decides, not the name.
    ppi : (float, float) or None
        Sampling rate along x and y of the upright page, 10 to 20000. Wins over the file's.
    page : int
        Page of a multi-page TIFF, from 1.

    Returns
    -------
    Scan
        Upright, with uint8 or uint16 pixels that are read-only.

    Raises
    ------
    ScanUnreadable
        If the file is missing, damaged, cut short, of another format, without that page,
        of float, signed or 32-bit samples, or of more than 2**30 pixels.
    BadRequest
        If `ppi` is no sampling rate.
    """
    settle(ppi, None)
    kind = _kind(path)
    if kind != "TIFF" and page != 1:
        raise ScanUnreadable(str(path), f"has 1 page(s), so no page {page}")
    found = _guarded(path, lambda: _decode(Path(path), kind, page))
    rate, source = settle(ppi, found.stored_ppi)
    return Scan(
        pixels=found.pixels,
        mode=found.mode,
        bit_depth=found.bit_depth,
        ppi=rate,
        ppi_source=source,
        ppi_in_file=found.stored_ppi,
        alpha=found.alpha,
        icc=found.icc,
        name=Path(path).name,
        sha256=digest(path),
        jpeg=found.jpeg,
        page=page,
    )


def pages(path: PathLike) -> int:
    """Number of pages in a file: of a TIFF as many as it has, of any other format 1.

    Raises
    ------
    ScanUnreadable
        If the file cannot be read as a scan.
    """
    return _guarded(path, lambda: tiffpage.count(Path(path))) if _kind(path) == "TIFF" else 1


def digest(path: PathLike) -> str:
    """SHA-256 of a file's bytes, in hexadecimal."""
    with open(path, "rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def write(
    scan: Scan,
    path: PathLike,
    *,
    force: bool = False,
    inputs: Sequence[PathLike] = (),
    jpeg_quality: int = 92,
) -> None:
    """Write a scan as TIFF (deflate), PNG or JPEG, whole or not at all.

    The extension decides: ``.tif``, ``.tiff``, ``.png``, ``.jpg``, ``.jpeg``. TIFF holds every
    scan; PNG no CMYK; JPEG neither 16 bits nor alpha. Pages of 1 bit are written with 8.

    Parameters
    ----------
    scan : Scan
        Its ``ppi`` is stored; where that is None no rate is.
    path : path
        The target.
    force : bool
        Replace an existing target.
    inputs : sequence of paths
        Files that are never overwritten, whatever `force` and however linked.
    jpeg_quality : int
        1 to 100, for JPEG only; colour is never subsampled.

    Raises
    ------
    OutputRefused
        If the target may not or cannot be written; nothing is left behind.
    """
    encode = _encoder(scan, path, jpeg_quality)
    _put(path, encode, force=force, inputs=inputs)


def write_bytes(data: bytes, path: PathLike, *, force: bool = False, inputs: Sequence[PathLike] = ()) -> None:
    """Write a side file, such as a recipe, under the same rules as a scan.

    Raises
    ------
    OutputRefused
        If the target may not or cannot be written; nothing is left behind.
    """
    _put(path, lambda file: file.write(data), force=force, inputs=inputs)


def check_target(path: PathLike, *, force: bool = False, inputs: Sequence[PathLike] = ()) -> None:
    """Refuse a target before any work is done for it.

    Raises
    ------
    OutputRefused
        If it is one of the `inputs` under any name, exists without `force`, is a folder, or
        lies in a folder that does not exist.
    """
    target, name = Path(path), str(path)
    for source in inputs:
        if target.exists() and os.path.exists(source) and os.path.samefile(target, source):
            raise OutputRefused(name, "is an input, which is never overwritten: give another name")
    if target.is_dir():
        raise OutputRefused(name, "is a folder: give a file name")
    if not target.parent.is_dir():
        raise OutputRefused(name, f"the folder {target.parent} does not exist: make it first")
    if not force and os.path.lexists(target):
        raise OutputRefused(name, "exists: give another name or --force")


def _kind(path: PathLike) -> str:
    """Format of a file that is there and is not empty."""
    source, name = Path(path), str(path)
    if source.is_dir():
        raise ScanUnreadable(name, "is a folder: give one file")
    if not source.exists():
        raise ScanUnreadable(name, "no such file: check the name")
    if not source.is_file():
        raise ScanUnreadable(name, "is not an ordinary file: save the scan to disk first")
    try:
        with source.open("rb") as file:
            head = file.read(16)
    except OSError as error:
        raise ScanUnreadable(name, f"cannot be opened ({error.strerror}): check its permissions") from error
    if not head:
        raise ScanUnreadable(name, "is empty: copy or scan it again")
    kind = raster.kind(head)
    if kind is None:
        raise ScanUnreadable(name, f"is not a picture that can be read: give {_READABLE}")
    return kind


def _decode(path: Path, kind: str, page: int) -> raster.Raster:
    if kind == "TIFF":
        return tiffpage.decode(path, page)
    data = path.read_bytes()
    return pngfile.decode(data) if kind == "PNG" else raster.decode(data, kind)


def _guarded(path: PathLike, work: Callable[[], Any]) -> Any:
    """Run a decoder; whatever it raises becomes one line that names the file."""
    try:
        return work()
    except raster.Unfit as error:
        raise ScanUnreadable(str(path), str(error)) from error
    except MemoryError as error:
        raise ScanUnreadable(str(path), "does not fit in memory: cut it into parts") from error
    except Exception as error:  # decoders raise anything at all on damaged files
        what = str(error).split("\n")[0] or type(error).__name__
        raise ScanUnreadable(str(path), f"is damaged or cut short ({what}): copy or scan it again") from error


def _put(
    path: PathLike, encode: Callable[[BinaryIO], Any], *, force: bool, inputs: Sequence[PathLike]
) -> None:
    """Encode into a temporary file beside the target, then move it there in one step."""
    check_target(path, force=force, inputs=inputs)
    target = Path(path)
    part = target.with_name(f".{secrets.token_hex(8)}.part")
    try:
        with part.open("x+b") as file:
            encode(file)
            file.flush()
            os.fsync(file.fileno())
        check_target(path, force=force, inputs=inputs)
        os.replace(part, target)
    except OutputRefused:
        raise
    except (OSError, ValueError, struct.error) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise OutputRefused(str(path), f"cannot be written ({reason}): nothing was left there") from error
    finally:
        part.unlink(missing_ok=True)


def _encoder(scan: Scan, path: PathLike, jpeg_quality: int) -> Callable[[BinaryIO], Any]:
    """Encoder for the target's extension, or a refusal of what that format cannot hold."""
    name, suffix = str(path), Path(path).suffix.lower()
    deep = scan.pixels.dtype == np.uint16
    if suffix in (".tif", ".tiff"):
        return lambda file: _encode_tiff(scan, file)
    if suffix == ".png":
        if scan.mode == "cmyk":
            raise OutputRefused(name, "PNG holds no CMYK: give a name that ends in .tif")
        return lambda file: (
            pngfile.encode_16(file, _with_alpha(scan), ppi=scan.ppi, icc=scan.icc)
            if deep
            else _encode_pillow(scan, file, "PNG")
        )
    if suffix in (".jpg", ".jpeg"):
        if deep or scan.alpha is not None:
            what = "16 bits" if deep else "alpha"
            raise OutputRefused(name, f"JPEG holds no {what}: give a name that ends in .tif or .png")
        return lambda file: _encode_pillow(scan, file, "JPEG", quality=jpeg_quality, subsampling=0)
    raise OutputRefused(name, "the name must end in .tif, .tiff, .png, .jpg or .jpeg")


def _with_alpha(scan: Scan) -> NDArray[Any]:
    return scan.pixels if scan.alpha is None else np.dstack([scan.pixels, scan.alpha])


def _encode_tiff(scan: Scan, file: BinaryIO) -> None:
    import tifffile

    tifffile.imwrite(
        file,
        _with_alpha(scan),
        photometric={"grey": "minisblack", "rgb": "rgb", "cmyk": "separated"}[scan.mode],
        planarconfig="contig" if scan.channels > 1 or scan.alpha is not None else None,
        extrasamples=None if scan.alpha is None else ["unassalpha"],
        compression="zlib",
        predictor=True,
        resolution=scan.ppi,
        resolutionunit="INCH" if scan.ppi else None,
        iccprofile=scan.icc or None,
        metadata=None,
        software=False,
    )


def _encode_pillow(scan: Scan, file: BinaryIO, kind: str, **options: Any) -> None:
    from PIL import Image

    mode = {"grey": "L", "rgb": "RGB", "cmyk": "CMYK"}[scan.mode] + ("" if scan.alpha is None else "A")
    image = Image.frombytes(mode, (scan.width_px, scan.height_px), _with_alpha(scan).tobytes())
    if scan.ppi:
        options["dpi"] = scan.ppi
        if kind == "JPEG" and any(rate != round(rate) for rate in scan.ppi):
            # JFIF holds whole numbers only; EXIF adds the decimals.
            exif = Image.Exif()
            for tag, rate in zip((282, 283), scan.ppi, strict=True):
                exif[tag] = Fraction(rate).limit_denominator(100_000)
            exif[296] = 2
            options["exif"] = exif
    image.save(file, kind, icc_profile=scan.icc or None, **options)
