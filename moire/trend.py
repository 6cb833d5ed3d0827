"""Banding that grows from day to day: a scanner that wears or gathers dust."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Literal

from moire.outcome import Outcome
from moire.units import MM_PER_INCH

_SAME_FREQUENCY = 0.01
SCANS_AT_LEAST = 8
DAYS_AT_LEAST = 3
# Chance at which scans in no order at all would be called a trend.
_BY_CHANCE = 0.01
_GROWN = 1.2


@dataclass(frozen=True, slots=True, kw_only=True)
class Trend:
    """One banding period whose amplitude grows.

    ``frequency`` is in cycles per inch, or per pixel where ppi is unknown; ``along`` is the axis
    on which the bands follow each other; amplitudes are L* at the first and last day, on the
    fitted line; ``chance`` is how likely a series without trend would look so.
    """

    along: Literal["x", "y"]
    frequency: float
    per_inch: bool
    first_amplitude: float
    last_amplitude: float
    days: float
    scans: int
    chance: float

    @property
    def period_mm(self) -> float | None:
        return MM_PER_INCH / self.frequency if self.per_inch else None


@dataclass(frozen=True, slots=True, kw_only=True)
class _Seen:
    along: Literal["x", "y"]
    per_inch: bool
    frequency: float
    day: float
    amplitude: float


def find_trends(scans: Iterable[tuple[Outcome, float]]) -> tuple[Trend, ...]:
    """Banding periods whose amplitude grows over the days, the fastest first.

    Parameters
    ----------
    scans : iterable of (Outcome, float)
        Outcomes with banding and the day on which each scan was made.

    Notes
    -----
    Kendall's rank correlation says whether there is a trend (Kendall 1938), the median of
    slopes how steep it is (Theil 1950, Sen 1968): neither is moved by a few odd scans. Scans
    in which the banding was too weak to be found are not counted, so a slope is rather too
    small than too large.
    """
    found = [_trend(group) for group in _alike(list(_bands(scans)))]
    kept = [t for t in found if t is not None]
    return tuple(sorted(kept, key=lambda t: t.first_amplitude - t.last_amplitude))


def trend_note(trend: Trend) -> str:
    """A trend in one sentence."""
    period = f"{trend.period_mm:.3f} mm" if trend.period_mm else f"{1 / trend.frequency:.2f} px"
    return (
        f"Banding with a period of {period} along {trend.along} grew from {trend.first_amplitude:.2f} to "
        f"{trend.last_amplitude:.2f} L* over {trend.days:.0f} days ({trend.scans} scans): "
        "clean and calibrate the scanner."
    )


def _bands(scans: Iterable[tuple[Outcome, float]]) -> Iterator[_Seen]:
    for outcome, day in scans:
        for finding in outcome.findings:
            if finding.kind != "banding":
                continue
            line = max(finding.lines, key=lambda each: each.amplitude, default=None)
            if line is None:
                continue
            across = abs(line.fx_cpp) >= abs(line.fy_cpp)
            ppi = (1.0, 1.0) if outcome.ppi is None else outcome.ppi
            yield _Seen(
                along="x" if across else "y",
                per_inch=outcome.ppi is not None,
                frequency=abs(line.fx_cpp) * ppi[0] if across else abs(line.fy_cpp) * ppi[1],
                day=day,
                amplitude=line.amplitude,
            )


def _alike(seen: list[_Seen]) -> Iterator[list[_Seen]]:
    """Runs of one axis and unit in which each frequency is within 1 % of the one below it."""
    group: list[_Seen] = []
    for band in sorted(seen, key=lambda b: (b.along, b.per_inch, b.frequency)):
        last = group[-1] if group else band
        same = (band.along, band.per_inch) == (last.along, last.per_inch)
        if not same or band.frequency > last.frequency * (1 + _SAME_FREQUENCY):
            yield group
            group = []
        group.append(band)
    if group:
        yield group


def _trend(group: list[_Seen]) -> Trend | None:
    import numpy as np

    days = np.array([b.day for b in group])
    amplitudes = np.array([b.amplitude for b in group])
    if len(group) < SCANS_AT_LEAST or len(np.unique(np.floor(days))) < DAYS_AT_LEAST:
        return None
    from scipy.stats import kendalltau, theilslopes

    tau, chance = kendalltau(days, amplitudes)
    slope, level, _, _ = theilslopes(amplitudes, days)
    first, last = (float(level + slope * day) for day in (days.min(), days.max()))
    if not (tau > 0 and chance < _BY_CHANCE and last > _GROWN * max(first, 1e-9)):
        return None
    return Trend(
        along=group[0].along,
        frequency=float(np.median([b.frequency for b in group])),
        per_inch=group[0].per_inch,
        first_amplitude=max(first, 0.0),
        last_amplitude=last,
        days=float(days.max() - days.min()),
        scans=len(group),
        chance=float(chance),
    )
