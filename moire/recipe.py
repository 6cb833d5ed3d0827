"""Recipes: what a remedy takes out, as a record that can be saved and repeated."""

from __future__ import annotations

import math
from collections.abc import Collection
from dataclasses import replace

import msgspec
import numpy as np

import moire
from moire.beats import rosette_frequencies
from moire.errors import BadRequest, RecipeMismatch
from moire.model import Examination, Finding, Kind, Recipe, Removal, Scan

# Kinds that a filter takes out unasked. Content, an honest weave and paper's own lines stay.
MENDED_UNASKED: frozenset[Kind] = frozenset({"halftone", "alias", "rosette", "banding", "display-grid"})
_SCREENS: frozenset[Kind] = frozenset({"halftone", "alias"})
# How far a screen may lie from where a recipe has it: leaves are laid down a little turned, and
# paper swells.
_RULING_SHARE, _TURN_DEG = 0.02, 3.0


def prescribe(
    examination: Examination,
    *,
    only: Collection[Kind] = (),
    keep: Collection[Kind] = (),
    strength: float = 1.0,
    quick: bool = False,
    to_ppi: float | None = None,
) -> Recipe:
    """Recipe that removes what an examination found.

    Parameters
    ----------
    examination : Examination
    only : collection of str
        Kinds to remove, and no other; empty for all artifacts.
    keep : collection of str
        Kinds to leave.
    strength : float
        Share of the correction applied, 0..1.
    quick : bool
        Lattice null only: beats of screens are left unless they are asked for with `only`.
    to_ppi : float or None
        Sampling rate of the derivative.

    Raises
    ------
    BadRequest
        If the strength is out of range or the rate has no meaning.
    """
    if not 0 <= strength <= 1:
        raise BadRequest(f"strength is {strength:g}: give a share between 0 and 1")
    if to_ppi is not None and examination.ppi is None:
        raise BadRequest("the scan's own ppi is unknown: give it with --ppi before asking for another")
    if to_ppi is not None and not 10 <= to_ppi <= min(examination.ppi or (0.0,)):
        raise BadRequest(f"--to-ppi {to_ppi:g} must lie between 10 and the scan's own rate")
    wanted = frozenset(only) or (MENDED_UNASKED - {"rosette"} if quick else MENDED_UNASKED)
    chosen = wanted - frozenset(keep)
    removals = [
        replace(r, beside_cpp=_beside(f, examination)) if "weave" not in chosen else r
        for f in examination.findings
        if f.kind in chosen - {"rosette"}
        for r in _removals(f)
    ]
    screens = [
        (np.array(r.vectors_cpp[0]), np.array(r.vectors_cpp[1])) for r in removals if r.method == "descreen"
    ]
    if "rosette" in chosen and len(screens) > 1:
        # Every low beat of the screens, found or not: what is not there is not subtracted.
        beats = tuple((float(f[0]), float(f[1])) for f in rosette_frequencies(screens))
        removals += [Removal(kind="rosette", method="notch", vectors_cpp=beats)] if beats else []
    elif "rosette" in chosen:
        removals += [r for f in examination.findings if f.kind == "rosette" for r in _removals(f)]
    return Recipe(
        software=f"moire {moire.__version__}",
        ppi=examination.ppi,
        strength=strength,
        quick=quick,
        to_ppi=to_ppi,
        removals=tuple(removals),
    )


def _beside(finding: Finding, examination: Examination) -> tuple[tuple[float, float], ...]:
    """Lines of the weave that a beat is of."""
    parents = [examination.findings[i] for i in finding.parents]
    return tuple((line.fx_cpp, line.fy_cpp) for p in parents if p.kind == "weave" for line in p.lines)


def _removals(finding: Finding) -> list[Removal]:
    by_order = {line.order: (line.fx_cpp, line.fy_cpp) for line in finding.lines}
    if finding.drift:
        # One lattice for the whole page would miss a drifting screen.
        return []
    if finding.kind in _SCREENS and {(1, 0), (0, 1)} <= by_order.keys():
        ink = finding.screen.ink if finding.screen else "unknown"
        vectors = (by_order[(1, 0)], by_order[(0, 1)])
        return [Removal(kind=finding.kind, method="descreen", vectors_cpp=vectors, ink=ink)]
    if not finding.lines:
        return []
    lines = tuple((line.fx_cpp, line.fy_cpp) for line in finding.lines)
    return [Removal(kind=finding.kind, method="notch", vectors_cpp=lines)]


def refit(recipe: Recipe, examination: Examination) -> Recipe:
    """The same remedy for another leaf of the same print, its screens as they lie on that leaf.

    A screen of the leaf is taken for one of the recipe's if it is not of another ink and its ruling is
    within 2 % and its angle within 3 degrees. A screen with no such match stays where the recipe has
    it: what is not there is not filtered.

    Parameters
    ----------
    recipe : Recipe
    examination : Examination
        Of the leaf.
    """
    seen = [r for f in examination.findings for r in _removals(f) if r.method == "descreen"]
    removals = [
        replace(r, vectors_cpp=_nearest(r, seen)) if r.method == "descreen" else r for r in recipe.removals
    ]
    screens = [
        (np.array(r.vectors_cpp[0]), np.array(r.vectors_cpp[1])) for r in removals if r.method == "descreen"
    ]
    if len(screens) > 1:
        beats = tuple((float(f[0]), float(f[1])) for f in rosette_frequencies(screens))
        removals = [replace(r, vectors_cpp=beats) if r.kind == "rosette" else r for r in removals]
    return replace(recipe, removals=tuple(r for r in removals if r.vectors_cpp))


def _nearest(removal: Removal, seen: list[Removal]) -> tuple[tuple[float, float], ...]:
    """Vectors of the screen seen nearest to a removal's own, or those."""
    k = complex(*removal.vectors_cpp[0])
    best, least = removal.vectors_cpp, math.inf
    for other in seen:
        if other.ink != removal.ink and "unknown" not in (other.ink, removal.ink):
            continue
        for vector in other.vectors_cpp:
            for sign in (1, -1):
                ratio = sign * complex(*vector) / k
                turn = abs(math.degrees(math.atan2(ratio.imag, ratio.real)))
                alike = abs(abs(ratio) - 1) < _RULING_SHARE and turn < _TURN_DEG
                if alike and abs(ratio - 1) < least:
                    best, least = other.vectors_cpp, abs(ratio - 1)
    return best


def to_json(recipe: Recipe) -> bytes:
    """Recipe as indented JSON."""
    return msgspec.json.format(msgspec.json.encode(recipe), indent=1)


def from_json(text: bytes, *, name: str = "recipe") -> Recipe:
    """Recipe from JSON, strictly decoded.

    Raises
    ------
    RecipeMismatch
        If it is not a recipe of this version, or a field is wrong; the message names it.
    """
    try:
        recipe = msgspec.json.decode(text, type=Recipe, strict=True)
    except msgspec.DecodeError as error:
        raise RecipeMismatch(f"{name}: not a recipe: {error}") from error
    if (recipe.format, recipe.version) != ("moire.recipe", 1):
        raise RecipeMismatch(
            f"{name}: format {recipe.format} version {recipe.version}, wanted moire.recipe version 1"
        )
    for removal in recipe.removals:
        wrong = removal.method == "descreen" and len(removal.vectors_cpp) != 2
        numbers = [v for vector in (*removal.vectors_cpp, *removal.beside_cpp) for v in vector]
        if wrong or not removal.vectors_cpp or not all(math.isfinite(v) and abs(v) <= 1 for v in numbers):
            raise RecipeMismatch(
                f"{name}: a removal has vectors that are not frequencies in cycles per pixel"
            )
    if not 0 <= recipe.strength <= 1:
        raise RecipeMismatch(f"{name}: strength {recipe.strength:g} is not between 0 and 1")
    return recipe


def check_fits(recipe: Recipe, scan: Scan) -> None:
    """Refuse a recipe made for another sampling rate.

    Raises
    ------
    RecipeMismatch
        If both rates are known and differ by more than 0.5 %.
    """
    if recipe.ppi is None or scan.ppi is None:
        return
    if any(abs(a / b - 1) > 0.005 for a, b in zip(recipe.ppi, scan.ppi, strict=True)):
        raise RecipeMismatch(
            f"the recipe was made at {recipe.ppi[0]:g} x {recipe.ppi[1]:g} ppi, {scan.name} has "
            f"{scan.ppi[0]:g} x {scan.ppi[1]:g}: examine this scan anew"
        )
