"""The records of a plan: what may be chosen, what each choice shows, and which is best."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from moire.model import Verdict, Viewing

Source = Literal["sampling", "rosette", "reprint"]


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """Orders ``(m, n)`` of one pattern of the original in a line; for cloth, of its weave repeat."""

    pattern: int
    orders: tuple[int, int]


@dataclass(frozen=True, slots=True, kw_only=True)
class Beat:
    """A line that a scan would show, and where it comes from.

    Attributes
    ----------
    orders : tuple of Part
        Patterns of `Plan.patterns` whose orders sum to the line; two or more make a rosette.
    rate_order : (int, int)
        How often the sampling grid folds it, per axis: true = seen + order x ppi.
    capture_order : (int, int) or None
        How often the optical or the master's grid had folded it before, where there is one.
    reprint_orders : (int, int) or None
        Orders of the second screen, for a line of a reprint.
    frequency_cpi : float
        As seen, cycles per inch on the original.
    frequency_sigma_cpi : float
        Standard uncertainty, from the patterns and the scale of the scanner.
    period_mm, period_px : float or None
        None where the line is too slow to have a period.
    period_mm_range : (float, float) or None
        At one sigma either way.
    direction_deg : float
        Of the line's frequency vector on the page, (-90, 90].
    amplitude : float
        Peak swing in L* at the tone where it shows most.
    visibility : float
        Contrast over the eye's threshold, the worst within two sigma of the frequency.
    source : {"sampling", "rosette", "reprint"}
        ``sampling`` is what a rate changes, ``rosette`` is there in the print, ``reprint`` comes
        of printing the scan through another screen.
    words : str
        The cause.
    """

    orders: tuple[Part, ...]
    rate_order: tuple[int, int]
    capture_order: tuple[int, int] | None = None
    reprint_orders: tuple[int, int] | None = None
    frequency_cpi: float
    frequency_sigma_cpi: float
    period_mm: float | None
    period_px: float | None
    period_mm_range: tuple[float, float] | None
    direction_deg: float
    amplitude: float
    visibility: float
    source: Source
    words: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Choice:
    """One way to scan or to reduce, and what it would show.

    ``visibility`` is that of the strongest beat with a sampling grid (or of a reprint): what
    the choice decides. ``original_visibility`` is that of the pattern and the rosettes of the
    original itself as this choice renders them. ``verdict`` is what `examine` would say of the
    scan: a screen that is rendered faithfully and seen is ``mendable``, not ``sound``. ``doubt``
    is the strongest beat under any other reading of the original. ``keeps_detail`` says whether
    the rate holds what the original can show.
    """

    ppi: tuple[float, float]
    turn_deg: float
    master_ppi: tuple[float, float] | None
    kernel: str | None
    beats: tuple[Beat, ...]
    visibility: float
    original_visibility: float
    doubt: float
    keeps_detail: bool
    verdict: Verdict


@dataclass(frozen=True, slots=True, kw_only=True)
class PlannedPattern:
    """A lattice of the original that was planned for."""

    name: str
    kind: Literal["screen", "cloth"]
    frequencies_lpi: tuple[float, float]
    frequencies_lpcm: tuple[float, float]
    angle_deg: float
    sigma_lpi: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """Another original that one scan cannot rule out, and what would be chosen for it."""

    probability: float
    patterns: tuple[PlannedPattern, ...]
    recommended: int | None
    ppi: tuple[float, float] | None
    turn_deg: float
    visibility: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Rule:
    """A rule of the trade, weighed for this original."""

    rule: str
    agrees: bool
    words: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """Choices, best first, the one recommended, and why."""

    format: str = "moire.plan"
    version: int = 1
    software: str
    viewing: Viewing
    patterns: tuple[PlannedPattern, ...]
    choices: tuple[Choice, ...]
    recommended: int | None
    why: tuple[str, ...]
    rules: tuple[Rule, ...]
    free_from_ppi: float | None
    readings: tuple[Reading, ...] = ()
    settle: str | None = None
    caution: str
