"""Find, explain and mend periodic artifacts in scans.

``read(path) -> Scan``, ``examine(scan) -> Examination``,
``mend(scan, examination) -> Mending``, ``plan(source, rates=...) -> Plan``, ``write(scan, path)``,
``examine_many(paths, executor=...)`` -> iterator of outcomes.
"""

from __future__ import annotations

import sys
from importlib import import_module
from types import ModuleType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from moire.crew import examine_many
    from moire.examine import examine
    from moire.mend import mend
    from moire.plan import plan
    from moire.scanfile import read, write

__version__ = "0.1.0"
__all__ = ["__version__", "examine", "examine_many", "mend", "plan", "read", "write"]

_ROOMS = {
    "examine": "examine",
    "examine_many": "crew",
    "mend": "mend",
    "plan": "plan",
    "read": "scanfile",
    "write": "scanfile",
}


class _Package(ModuleType):
    """The package, whose functions keep their names when the rooms of the same name load."""

    def __setattr__(self, name: str, value: Any) -> None:
        # Importing the room moire.examine must not hide the function moire.examine.
        if not (name in _ROOMS and isinstance(value, ModuleType)):
            super().__setattr__(name, value)

    def __getattr__(self, name: str) -> Any:
        if name not in _ROOMS:
            raise AttributeError(f"module 'moire' has no attribute {name!r}")
        value = getattr(import_module(f"moire.{_ROOMS[name]}"), name)
        setattr(self, name, value)
        return value


sys.modules[__name__].__class__ = _Package
