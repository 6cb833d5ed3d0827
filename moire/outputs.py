"""Files written whole or not at all, and never over an input."""

from __future__ import annotations

import contextlib
import hashlib
import os
import tempfile
from collections.abc import Sequence
from pathlib import Path

from moire.errors import OutputRefused

PathLike = str | os.PathLike[str]


def digest(path: PathLike) -> str:
    """SHA-256 of a file's bytes (FIPS 180-4), as hexadecimal."""
    return hashlib.sha256(Path(path).read_bytes()).hexdigest()


def check_target(path: PathLike, *, force: bool = False, inputs: Sequence[PathLike] = ()) -> None:
    """Refuse a target that is an input, that exists, or that has nowhere to go.

    Raises
    ------
    OutputRefused
    """
    target = Path(path)
    if target.is_dir():
        raise OutputRefused(str(path), "is a folder: give a file name")
    if not target.parent.is_dir():
        raise OutputRefused(str(path), "its folder does not exist: make it first")
    if not target.exists():
        return
    for source in inputs:
        if os.path.exists(source) and os.path.samefile(source, target):
            raise OutputRefused(str(path), "is the input: a master is never overwritten, give another name")
    if not force:
        raise OutputRefused(str(path), "exists: give another name or --force")


def write_bytes(data: bytes, path: PathLike, *, force: bool = False, inputs: Sequence[PathLike] = ()) -> None:
    """Write a file whole or not at all: to a temporary one beside it, then a rename.

    Raises
    ------
    OutputRefused
    """
    check_target(path, force=force, inputs=inputs)
    target = Path(path)
    temporary = ""
    try:
        handle, temporary = tempfile.mkstemp(dir=target.parent, prefix=f".{target.name}.", suffix=".part")
        with os.fdopen(handle, "wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        os.chmod(temporary, 0o666 & ~_umask())
        os.replace(temporary, target)
    except OSError as error:
        if temporary:
            with contextlib.suppress(OSError):
                os.unlink(temporary)
        raise OutputRefused(str(path), f"cannot be written: {error.strerror or error}") from error


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
