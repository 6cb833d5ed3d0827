"""Lines that are of no screen: block codecs, scanner banding, printed content on the axes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from moire.blocks import BlockGrid
from moire.lattice import grid_distance
from moire.model import Kind
from moire.peaks import Peak
from moire.screens import on_axis

_TEXT_CPI = 14.0
# Laid lines of papers, 7 to 14 per cm (codicology handbooks, value from memory).
_LAID_CPI = (7 * 2.54, 14 * 2.54)
_IN_STEP = 0.97
_FAINT = 8.0
_USUAL_LPI = (40.0, 320.0)


def sort_line(
    peak: Peak, others: tuple[Peak, ...], *, ppi: tuple[float, float] | None, blocks: BlockGrid | None
) -> tuple[Kind, str]:
    """Cause of a line that belongs to no screen, and why, in words.

    Parameters
    ----------
    peak : Peak
    others : tuple of Peak
        All unexplained lines of the scan, for combs.
    ppi : (float, float) or None
    blocks : BlockGrid or None
        A block grid already found.
    """
    f = peak.f
    if blocks is not None and _on_multiples(f, 1 / blocks.period_px, peak.bin_cpp):
        return "block-grid", f"lies on a multiple of 1/{blocks.period_px} cycles per pixel"
    along = 0 if abs(f[0]) > abs(f[1]) else 1
    frequency = float(np.hypot(*f))
    cpi = frequency * ppi[along] if ppi else None
    spread_over = float((peak.weight > 0.3).mean())
    laid = cpi is not None and _LAID_CPI[0] <= cpi <= _LAID_CPI[1] and peak.coherence < _IN_STEP
    harmonic = any(
        on_axis(o.f) and _is_multiple(float(f[along]), float(o.f[along]), peak.bin_cpp) for o in others
    )
    laid = laid and not harmonic and spread_over > 0.5 and peak.amplitude < _FAINT
    if laid and cpi is not None and on_axis(f, within_deg=4):
        return "laid-lines", f"a faint line of {cpi / 2.54:.1f} per cm that wanders: a paper mould's wires"
    if on_axis(f):
        comb = sum(
            1 for o in others if on_axis(o.f) and _is_multiple(float(o.f[along]), float(f[along]), o.bin_cpp)
        )
        if comb >= 2 or (cpi is not None and cpi < _TEXT_CPI) or peak.amplitude > _FAINT:
            return "content", "on an axis with its own harmonics or at the pitch of text lines or rules"
        if peak.coherence > _IN_STEP and spread_over > 0.6 and not peak.doubled:
            period = f" ({25.4 / cpi:.3f} mm)" if cpi else ""
            way = "columns" if along == 0 else "scan lines"
            return "banding", f"a line every {1 / frequency:.2f} {way}{period}, in step over the whole page"
        return "content", "on an axis but not in step over the page"
    if peak.coherence > 0.95 and peak.z > 8 and not peak.doubled:
        return "unexplained", "a coherent line that no screen, beat or grid explains"
    return "content", "textured subject matter: the phase wanders over the page"


def find_line_screen(
    peaks: tuple[Peak, ...], *, ppi: tuple[float, float] | None
) -> tuple[tuple[Peak, int], ...]:
    """A screen of lines among lines that no lattice explains: its fundamental and harmonics.

    The strongest line off the axes, in step over the page, of a usual ruling, if it and its
    multiples hold most of the energy; each with its order. Empty if there is none.
    """
    oblique = [p for p in peaks if not on_axis(p.f, within_deg=2) and p.coherence > _IN_STEP]
    if ppi is None or not oblique:
        return ()
    first = max(oblique, key=lambda p: p.amplitude)
    ruling = float(np.hypot(first.f[0] * ppi[0], first.f[1] * ppi[1]))
    if first.doubled or not _USUAL_LPI[0] <= ruling <= _USUAL_LPI[1] or first.amplitude < _FAINT / 4:
        return ()
    members = [(first, 1)]
    for peak in peaks:
        order = next((m for m in range(2, 7) if _is_at(peak, m * first.f)), None)
        if peak is not first and order is not None:
            members.append((peak, order))
    # Text and rules on the axes may lie beside it on the page.
    energy = sum(p.amplitude**2 for p in peaks if not on_axis(p.f))
    mine = sum(p.amplitude**2 for p, _ in members if not on_axis(p.f))
    harmonics = len(members) > 1 or first.amplitude > _FAINT
    return tuple(members) if harmonics and mine > 0.8 * energy else ()


def _is_at(peak: Peak, place: NDArray[np.float64]) -> bool:
    slack = 1.0 if peak.doubled else 0.2
    return bool(grid_distance(peak.f, place) < slack * peak.bin_cpp)


def _on_multiples(f: NDArray[np.float64], unit: float, bin_cpp: float) -> bool:
    nearest = np.rint(f / unit) * unit
    return bool(grid_distance(f, nearest) < 0.12 * bin_cpp)


def _is_multiple(f: float, base: float, bin_cpp: float) -> bool:
    if base == 0:
        return False
    ratio = abs(f / base)
    return ratio > 1.5 and abs(ratio - round(ratio)) * abs(base) < 0.25 * bin_cpp
