"""Find, explain and mend periodic artifacts in scans.

``read(path) -> Scan``, ``examine(scan) -> Examination``,
``mend(scan, examination) -> Mending``, ``write(scan, path)``.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from moire.examine import examine
    from moire.mend import mend
    from moire.scanfile import read, write

__version__ = "0.1.0"
__all__ = ["__version__", "examine", "mend", "read", "write"]

_ROOMS = {"examine": "examine", "mend": "mend", "read": "scanfile", "write": "scanfile"}


def __getattr__(name: str) -> Any:
    if name in _ROOMS:
        value = getattr(import_module(f"moire.{_ROOMS[name]}"), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module 'moire' has no attribute {name!r}")
