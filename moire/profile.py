"""A bureau's profile: its scanner, its materials with their limits, and what stops the line."""

from __future__ import annotations

import os
import tomllib
from fnmatch import fnmatchcase
from typing import Literal, get_args

import msgspec

from moire.errors import BadRequest
from moire.model import Kind, Verdict
from moire.outcome import Terms

_WORDS = {
    "viewing": ("monitor", "print"),
    "accept": get_args(Kind),
    "fail_on": get_args(Verdict),
    "on": get_args(Verdict),
}


class _Strict(msgspec.Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    pass


class Rules(_Strict, frozen=True, kw_only=True):
    """What may be set for the whole bureau and again for a material; None where it is not.

    Attributes
    ----------
    ppi : float or None
        Rate at which these scans were made; wins over the files' own.
    viewing : {"monitor", "print"} or None
        Condition under which visibility is judged.
    visible_from : float or None
        Visibility from which an artifact counts; the eye's threshold is 1.
    accept : tuple of str or None
        Kinds that never count.
    fail_on : tuple of str or None
        Verdicts that stop the line: exit code 10.
    """

    ppi: float | None = None
    viewing: Literal["monitor", "print"] | None = None
    visible_from: float | None = None
    accept: tuple[Kind, ...] | None = None
    fail_on: tuple[Verdict, ...] | None = None

    def __post_init__(self) -> None:
        if self.ppi is not None and not 10 <= self.ppi <= 20000:
            raise ValueError(f"ppi is {self.ppi:g}: give 10 to 20000 pixels per inch")
        if self.visible_from is not None and not 0.05 <= self.visible_from <= 1000:
            raise ValueError(f"visible_from is {self.visible_from:g}: give 0.05 to 1000")


class Material(Rules, frozen=True, kw_only=True):
    """Rules for the files of some folders.

    ``folders`` are patterns of a path below the folder that is taken in, such as
    ``"newspapers/*"``; ``*`` matches any signs, ``/`` among them.
    """

    name: str
    folders: tuple[str, ...]

    def __post_init__(self) -> None:
        # Zero-argument super() is lost when msgspec makes the class anew.
        Rules.__post_init__(self)
        if not self.name or not self.folders:
            raise ValueError("name and folders must not be empty")


class Profile(Rules, frozen=True, kw_only=True):
    """A whole profile.

    Attributes
    ----------
    scanner_ppi : tuple of float
        Rates that the scanner has; advice names the coarsest that serves.
    material : tuple of Material
        The first whose folders match a file rules over it.
    on : dict
        Command to call for each verdict while watching: a list of arguments, in which
        ``{path}``, ``{file}``, ``{verdict}`` and ``{visibility}`` are filled in.
    """

    scanner_ppi: tuple[float, ...] = ()
    material: tuple[Material, ...] = ()
    on: dict[Verdict, tuple[str, ...]] = {}

    def __post_init__(self) -> None:
        Rules.__post_init__(self)
        if any(not 10 <= rate <= 20000 for rate in self.scanner_ppi):
            raise ValueError("scanner_ppi: give rates of 10 to 20000 pixels per inch")
        for verdict, arguments in self.on.items():
            if not arguments or not arguments[0]:
                raise ValueError(f"on.{verdict} is empty: give a program and its arguments")

    def material_of(self, place: str) -> Material | None:
        """The first material whose folders match a path below the folder that is taken in."""
        return next(
            (m for m in self.material if any(fnmatchcase(place, pattern) for pattern in m.folders)), None
        )

    def terms_of(self, place: str, *, given: Terms) -> Terms:
        """What a file is examined under; what the command line gave comes last."""
        material = self.material_of(place)
        levels: tuple[Rules, ...] = (self,) if material is None else (material, self)
        ppi = next((r.ppi for r in levels if r.ppi is not None), None)
        viewing = next((r.viewing for r in levels if r.viewing is not None), given.viewing)
        visible = next((r.visible_from for r in levels if r.visible_from is not None), given.visible_from)
        accept = next((r.accept for r in levels if r.accept is not None), given.accepted)
        return Terms(
            ppi=given.ppi or (None if ppi is None else (ppi, ppi)),
            viewing=viewing,
            visible_from=visible,
            accepted=tuple(sorted(accept)),
            scanner_ppi=tuple(sorted(self.scanner_ppi)),
            material="" if material is None else material.name,
        )

    def stops(self, material: str, verdict: Verdict) -> bool:
        """Whether a verdict in a material stops the line."""
        own = next((m.fail_on for m in self.material if m.name == material), None)
        return verdict in ((self.fail_on or ()) if own is None else own)


def read_profile(path: str | os.PathLike[str]) -> Profile:
    """Read a profile from TOML, strictly.

    Raises
    ------
    BadRequest
        If it cannot be read, is no TOML, or a key is unknown or wrong; names file and key.
    """
    name = os.fspath(path)
    try:
        with open(path, "rb") as file:
            values = tomllib.load(file)
    except OSError as error:
        raise BadRequest(f"{name}: cannot be read as a profile: {error.strerror}") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise BadRequest(f"{name}: not TOML: {error}") from error
    try:
        profile = msgspec.convert(values, Profile, strict=True)
    except msgspec.ValidationError as error:
        raise BadRequest(f"{name}: {_with_key(str(error))}") from error
    names = [m.name for m in profile.material]
    for repeated in sorted({n for n in names if names.count(n) > 1}):
        raise BadRequest(f"{name}: material.name: {repeated!r} occurs twice: give each its own")
    return profile


def _with_key(message: str) -> str:
    """msgspec's message with the key first: ``material[0].viewing: invalid value 'moon': ...``."""
    said, found, place = message.partition(" - at `")
    key = place.replace("key` in `", "").rstrip("`").lstrip("$.") if found else ""
    said = said.replace(" | null", "").replace("Object contains unknown field", "unknown key")
    said = said.replace("Object missing required field", "missing key")
    words = _WORDS.get(key.rpartition(".")[2].partition("[")[0])
    if said.startswith("Invalid enum value") and words:
        said = f"{said.replace('Invalid enum value', 'unknown word')}: give {', '.join(words)}"
    return f"{key}: {said}" if key else said
