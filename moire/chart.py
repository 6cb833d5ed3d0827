"""Chart of a plan: visibility of the strongest beat against ppi, with the beats named."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from moire.dots import Shape
from moire.model import Examination, Screen, Weave
from moire.plan import Scanning, Sweep, sweep
from moire.plans import Choice, Plan

Box = tuple[float, float, float, float]
Scale = Callable[[float], float]

# The drawing's frame and plot in its own units.
WIDTH, HEIGHT = 960, 520
_LEFT, _RIGHT, _TOP, _BOTTOM = 74, 24, 150, 62
_POINTS, _MANY = 900, 24
_FLOOR, _LEAST_TOP = 0.1, 10.0
_NAMES, _LETTER, _LINE = 9, 6.0, 15.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Name:
    """A beat named on the curve: its peak, where its text stands (its left end), and the text."""

    x: float
    y: float
    text_x: float
    text_y: float
    text: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Tick:
    """A mark on an axis."""

    at: float
    text: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Dot:
    """A choice on the curve, filled where no beat is seen."""

    x: float
    y: float
    text_y: float
    free: bool
    best: bool
    text: str


def draw_chart(
    made: Plan,
    source: Sequence[Screen] | Weave | Examination,
    *,
    rates: Sequence[tuple[float, float]],
    scanning: Scanning,
    shape: Shape = "round",
) -> str:
    """SVG of visibility against ppi at the recommended turn.

    Parameters
    ----------
    made : Plan
    source, rates, scanning, shape
        As the plan was made from.
    """
    from jinja2 import Environment, PackageLoader

    environment = Environment(
        loader=PackageLoader("moire", "templates"), autoescape=True, trim_blocks=True, lstrip_blocks=True
    )
    best = made.choices[made.recommended or 0]
    low, high = _reach(rates, scanning)
    seen = sweep(
        source, ppi=np.linspace(low, high, _POINTS), turn_deg=best.turn_deg, scanning=scanning,
        viewing=made.viewing.condition, shape=shape,
    )  # fmt: skip
    top = max(_LEAST_TOP, 1.6 * float(seen.visibility.max()))

    def x(ppi: float) -> float:
        return _LEFT + (ppi - low) / (high - low) * (WIDTH - _LEFT - _RIGHT)

    def y(visibility: float) -> float:
        share = math.log(max(visibility, _FLOOR) / _FLOOR) / math.log(top / _FLOOR)
        return HEIGHT - _BOTTOM - share * (HEIGHT - _TOP - _BOTTOM)

    points = [(x(float(p)), y(float(v))) for p, v in zip(seen.ppi, seen.visibility, strict=True)]
    shown = [c for c in made.choices if c.turn_deg == best.turn_deg and c.ppi[0] == c.ppi[1]]
    dots = [_dot(c, x, y, best=c is best) for c in shown if len(shown) <= _MANY or c is best]
    return environment.get_template("chart.svg").render(
        width=WIDTH,
        height=HEIGHT,
        left=_LEFT,
        right=WIDTH - _RIGHT,
        top=_TOP,
        bottom=HEIGHT - _BOTTOM,
        threshold=y(1.0),
        path="M" + "L".join(f"{px:.1f} {py:.1f}" for px, py in points),
        names=_names(seen, points),
        dots=dots,
        across=[Tick(at=x(v), text=f"{v:g}") for v in _steps(low, high)],
        up=[Tick(at=y(v), text=f"{v:g}") for v in (0.1, 1.0, 10.0, 100.0, 1000.0) if v <= top],
        title=_title(made, scanning),
        subtitle=_subtitle(made, best),
        master=scanning.master is not None,
    )


def _reach(rates: Sequence[tuple[float, float]], scanning: Scanning) -> tuple[float, float]:
    low, high = min(r[0] for r in rates), max(r[0] for r in rates)
    if len(rates) <= _MANY:
        low, high = max(10.0, 0.7 * low), 1.15 * high
    if scanning.master is not None:
        high = min(high, *scanning.master)
    return low, max(high, low + 1)


def _steps(low: float, high: float) -> NDArray[np.float64]:
    """Round rates about a tenth of the range apart."""
    rough = (high - low) / 9
    step = next(s for s in (1, 2, 5, 10, 20, 25, 50, 100, 200, 500, 1000, 2000, 5000) if s >= rough)
    return np.arange(math.ceil(low / step) * step, high + 1e-6, step)


def _dot(choice: Choice, x: Scale, y: Scale, *, best: bool) -> Dot:
    at = y(choice.visibility)
    below = at < HEIGHT - _BOTTOM - 24
    return Dot(
        x=x(choice.ppi[0]), y=at, text_y=at + 19 if below else at - 11, free=choice.visibility < 1, best=best,
        text=f"{choice.ppi[0]:g} ppi",
    )  # fmt: skip


def _names(seen: Sweep, points: Sequence[tuple[float, float]]) -> list[Name]:
    """The highest peak of each stretch that one beat rules, those that fit, highest first."""
    runs: list[tuple[int, int]] = []
    start = 0
    for i in range(1, len(seen.words) + 1):
        if i == len(seen.words) or seen.words[i] != seen.words[start]:
            runs.append((start, i))
            start = i
    peaks = [a + int(seen.visibility[a:b].argmax()) for a, b in runs]
    peaks = sorted((p for p in peaks if seen.visibility[p] >= 1), key=lambda p: -seen.visibility[p])
    taken: list[Box] = []
    out: list[Name] = []
    said: set[str] = set()
    for p in peaks:
        text = seen.words[p]
        if len(out) == _NAMES:
            break
        # Orders that differ by sign or place are one beat seen from several sides.
        kind = "".join(sorted(text.replace("-", "")))
        if kind in said:
            continue
        wide = _LETTER * len(text)
        spot = _spot(points[p][0], wide, taken)
        if spot is None:
            continue
        said.add(kind)
        taken.append((spot[0], spot[1], wide, _LINE))
        out.append(Name(x=points[p][0], y=points[p][1], text_x=spot[0], text_y=spot[1], text=text))
    return out


def _spot(x: float, wide: float, taken: Sequence[Box]) -> tuple[float, float] | None:
    """A free place above the plot for a text of some width near `x`."""
    for row in range(5):
        y = _TOP - 14 - row * _LINE
        for shift in (0.5, 0.25, 0.75, 0.0, 1.0):
            left = min(max(x - shift * wide, 6.0), WIDTH - 6.0 - wide)
            if all(left > b[0] + b[2] + 8 or left + wide + 8 < b[0] or y != b[1] for b in taken):
                return left, y
    return None


def _title(made: Plan, scanning: Scanning) -> str:
    names = ", ".join(
        f"{p.frequencies_lpi[0]:.4g} lpi at {p.angle_deg:.3g}\N{DEGREE SIGN}"
        if p.kind == "screen"
        else f"{p.name} {p.frequencies_lpcm[0]:.3g} x {p.frequencies_lpcm[1]:.3g} /cm"
        for p in made.patterns
    )
    if scanning.master is not None:
        return f"Reductions of a {scanning.master[0]:g} ppi master by {scanning.kernel}: {names}"
    return f"Beats of {names} with the sampling grid"


def _subtitle(made: Plan, best: Choice) -> str:
    where = "at 1:1 on a monitor" if made.viewing.condition == "monitor" else "as a print in the hand"
    turn = f", sheet turned by {best.turn_deg:g}\N{DEGREE SIGN}" if best.turn_deg else ""
    return f"Strongest beat over the eye's threshold {where}{turn}"
