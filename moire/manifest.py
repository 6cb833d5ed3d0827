"""A checksum manifest in the form of RFC 8493 (BagIt), kept beside a folder ``data``."""

from __future__ import annotations

import hashlib
import os
import re
from pathlib import Path

from moire.errors import OutputRefused
from moire.scanfile import PathLike, write_bytes

_NAME = re.compile(r"^manifest-(sha256|sha512)\.txt$")
_LINE = re.compile(r"^([0-9A-Fa-f]+)[ \t]+(\S.*)$")
_DECLARATION = b"BagIt-Version: 1.0\nTag-File-Character-Encoding: UTF-8\n"


def check_manifest(manifest: PathLike, file: PathLike) -> str:
    """Path of a file as the manifest writes it, or a refusal before any work is done.

    Parameters
    ----------
    manifest : path
        ``manifest-sha256.txt`` or ``manifest-sha512.txt`` in the folder of a bag.
    file : path
        Below the folder ``data`` beside it; need not exist yet.

    Raises
    ------
    OutputRefused
        If the manifest's name, its folder or the file's place does not fit, or it is damaged.
    """
    name, top = str(manifest), Path(manifest).parent
    if not _NAME.match(Path(manifest).name):
        raise OutputRefused(name, "a manifest is named manifest-sha256.txt or manifest-sha512.txt")
    if not top.is_dir():
        raise OutputRefused(name, f"the folder {top} does not exist: make it first")
    place = Path(os.path.relpath(os.path.realpath(file), os.path.realpath(top))).as_posix()
    if not place.startswith("data/"):
        raise OutputRefused(name, f"a manifest lists files below {top / 'data'}: write the derivative there")
    _entries(manifest)
    return place


def add_to_manifest(manifest: PathLike, file: PathLike) -> None:
    """Add a file's digest to a manifest, or renew it there; the other lines stay.

    Raises
    ------
    OutputRefused
    """
    place = check_manifest(manifest, file)
    algorithm = Path(manifest).name.removeprefix("manifest-").removesuffix(".txt")
    with open(file, "rb") as opened:
        digest = hashlib.file_digest(opened, algorithm).hexdigest()
    entries = _entries(manifest) | {_escaped(place): digest}
    text = "".join(f"{entries[path]}  {path}\n" for path in sorted(entries))
    declaration = Path(manifest).parent / "bagit.txt"
    if not declaration.exists():
        write_bytes(_DECLARATION, declaration)
    write_bytes(text.encode(), manifest, force=True)


def _entries(manifest: PathLike) -> dict[str, str]:
    """Escaped path and digest of each line."""
    if not Path(manifest).exists():
        return {}
    try:
        lines = Path(manifest).read_bytes().decode().replace("\r\n", "\n").removesuffix("\n").split("\n")
    except (OSError, UnicodeDecodeError) as error:
        raise OutputRefused(str(manifest), f"cannot be read as a manifest ({error})") from error
    found = {}
    for number, line in enumerate(lines if lines != [""] else [], 1):
        match = _LINE.match(line)
        if match is None:
            raise OutputRefused(
                str(manifest), f"line {number} is no digest and path: mend the manifest by hand first"
            )
        found[match[2]] = match[1]
    return found


def _escaped(place: str) -> str:
    # RFC 8493, 2.1.3: only line ends, and the sign that encodes them, are encoded.
    return place.replace("%", "%25").replace("\n", "%0A").replace("\r", "%0D")
