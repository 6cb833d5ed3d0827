"""Bindings: how warp and weft interlace, and the repeat lattices this makes.

A binding matrix has one row a pick, down the cloth, and one column an end; True is warp on top.
Its transform says where a weave has lines, as fractions of the thread frequencies: the lines of a
step weave of n threads and step s lie where ``h - s k`` is a multiple of n (k down the page).
"""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from moire.model import WeavePattern

Direction = Literal["Z", "S"]
_ZERO = 1e-9
_NAMES = {"plain": "plain", "basket": "basket2/2", "twill": "twill2/2Z", "satin": "satin5/2"}
_BASKET = re.compile(r"^basket(?P<ends>\d+)/(?P<picks>\d+)$")
_TWILL = re.compile(r"^twill(?P<up>\d+)/(?P<down>\d+)(?P<way>[ZS])$")
_SATIN = re.compile(r"^satin(?P<n>\d+)/(?P<step>\d+)$")
_LONGEST = 16
# Structures in words, as `Binding.structure` has them.
_WORDS = re.compile(r"^(?P<numbers>\d+/\d+) (?P<family>basket|twill) ?(?P<way>[ZS]?)$")
_SATIN_WORDS = re.compile(r"^(?P<n>\d+)-end satin step (?P<step>\d+)$")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Binding:
    """A weave's interlacing.

    Attributes
    ----------
    pattern : str
        Family: plain, basket, twill or satin.
    structure : str
        The weave in words, such as ``2/2 twill Z``.
    direction : {"Z", "S"} or None
        How a twill's wale runs on the page: Z rises to the right, S to the left.
    matrix : ndarray of bool, shape (picks, ends)
        One repeat, first row at the top of the page; True where the warp lies on top.
    numbers : (int, int)
        Of a basket its ends and picks, of a twill picks over and under, of a satin ends and step.
    """

    pattern: WeavePattern
    structure: str
    direction: Direction | None
    matrix: NDArray[np.bool_]
    numbers: tuple[int, int] = (1, 1)

    @property
    def repeat(self) -> tuple[int, int]:
        """Ends and picks of one repeat."""
        return (self.matrix.shape[1], self.matrix.shape[0])

    def orders(self, highest: float) -> tuple[tuple[float, float], ...]:
        """Orders of warp and weft where the weave has lines, one of each opposite pair, lowest first.

        `highest` is the largest sum of both orders' sizes.
        """
        ends, picks = self.repeat
        levels = binding_levels(self.matrix)
        h_reach, k_reach = math.floor(highest * ends), math.floor(highest * picks)
        found = [
            (h / ends, k / picks)
            for h in range(-h_reach, h_reach + 1)
            for k in range(k_reach + 1)
            if (k > 0 or h > 0)
            and abs(h) / ends + k / picks <= highest
            and (levels[k % picks, h % ends] > _ZERO or (h % ends, k % picks) == (0, 0))
        ]
        return tuple(sorted(found, key=lambda o: (abs(o[0]) + o[1], -o[0])))


def plain() -> Binding:
    """Plain weave, 1/1."""
    return Binding(pattern="plain", structure="plain", direction=None, matrix=np.eye(2, dtype=bool))


def basket(ends: int = 2, picks: int = 2) -> Binding:
    """Plain weave of `ends` side by side over `picks` side by side (hopsack; 2 x 1 is oxford)."""
    if min(ends, picks) < 1 or max(ends, picks) < 2 or 2 * max(ends, picks) > _LONGEST:
        raise ValueError(f"basket {ends}/{picks}: give 1 to 8 threads each way, at least two one way")
    matrix = np.kron(np.eye(2, dtype=bool), np.ones((picks, ends), bool))
    return Binding(
        pattern="basket",
        structure=f"{ends}/{picks} basket",
        direction=None,
        matrix=matrix,
        numbers=(ends, picks),
    )


def twill(up: int, down: int, direction: Direction) -> Binding:
    """Twill: each end over `up` picks and under `down`, moved by one pick from end to end."""
    if min(up, down) < 1 or not 3 <= up + down <= _LONGEST:
        raise ValueError(f"twill {up}/{down}: give at least one each and 3 to {_LONGEST} together")
    # Seen upwards the float moves one end to the right (Z) or to the left (S) at each pick.
    matrix = _step_weave(up, up + down, 1 if direction == "Z" else -1)
    return Binding(
        pattern="twill",
        structure=f"{up}/{down} twill {direction}",
        direction=direction,
        matrix=matrix,
        numbers=(up, down),
    )


def satin(n: int, step: int) -> Binding:
    """Weft-faced satin of `n` ends whose binding point rises by `step` picks from end to end."""
    if not 5 <= n <= _LONGEST or not 2 <= step <= n - 2 or math.gcd(n, step) != 1:
        raise ValueError(f"satin {n}/{step}: give 5 to {_LONGEST} ends and a step of 2 or more prime to them")
    return Binding(
        pattern="satin",
        structure=f"{n}-end satin step {step}",
        direction=None,
        matrix=_step_weave(1, n, step),
        numbers=(n, step),
    )


def swapped(binding: Binding) -> Binding:
    """The same cloth with the threads that run across the page as its warp."""
    a, b = binding.numbers
    if binding.pattern == "basket":
        return basket(b, a)
    if binding.pattern == "twill" and binding.direction is not None:
        return twill(b, a, binding.direction)
    return satin(a, pow(b, -1, a)) if binding.pattern == "satin" else binding


def parse_binding(text: str) -> Binding:
    """Binding from its short name (plain, basket2/2, twill3/1S, satin8/3) or its structure in words.

    The bare words basket, twill and satin are 2/2, 2/2 Z and 5 ends with step 2.
    """
    name = _NAMES.get(text, text)
    if match := _WORDS.match(name):
        name = f"{match['family']}{match['numbers']}{match['way']}"
    if match := _SATIN_WORDS.match(name):
        name = f"satin{match['n']}/{match['step']}"
    if name == "plain":
        return plain()
    if match := _BASKET.match(name):
        return basket(int(match["ends"]), int(match["picks"]))
    if match := _TWILL.match(name):
        return twill(int(match["up"]), int(match["down"]), "Z" if match["way"] == "Z" else "S")
    if match := _SATIN.match(name):
        return satin(int(match["n"]), int(match["step"]))
    raise ValueError(
        f"{text!r} is no weave known here: write plain, basket2/2, twill2/2Z or satin5/2, with other numbers "
        "and S as needed"
    )


def _step_weave(up: int, n: int, step: int) -> NDArray[np.bool_]:
    row, column = np.mgrid[:n, :n]
    return (row + step * column) % n < up


def binding_levels(matrix: NDArray[np.bool_]) -> NDArray[np.float64]:
    """Amplitude of each order (k, h) of a binding matrix, as a share of full contrast."""
    return np.asarray(np.abs(np.fft.fft2(matrix.astype(float), norm="forward")))


def repeat_lattice(matrix: NDArray[np.bool_]) -> tuple[tuple[float, float], tuple[float, float]]:
    """The two shortest lines that generate all of a binding's lines.

    Returns
    -------
    (fx, fy), (fx, fy)
        In cycles per thread, x across the ends and y down the picks; the second is the shortest
        one that is not a multiple of the first. Thread lines (1, 0) and (0, 1) count as lines.
    """
    picks, ends = matrix.shape
    levels = binding_levels(matrix)
    found = [
        (h / ends, k / picks)
        for h in range(-ends, ends + 1)
        for k in range(picks + 1)
        if (k > 0 or h > 0)
        and (levels[k % picks, h % ends] > _ZERO)
        and ((h % ends, k % picks) != (0, 0) or abs(h) + k in (ends, picks))
    ]
    found.sort(key=lambda f: (round(math.hypot(*f), 9), -f[0]))
    first = found[0]
    second = next(f for f in found[1:] if abs(first[0] * f[1] - first[1] * f[0]) > _ZERO)
    return first, second


def wale_angle(ends: float, picks: float, *, step: int = 1) -> float:
    """Angle of a twill line to the weft in degrees: tan = step x ends / picks.

    Parameters
    ----------
    ends, picks : float
        Threads per unit of length.
    step : int
        Picks by which the line rises from one end to the next.
    """
    return math.degrees(math.atan2(step * ends, picks))
