"""What is told of a cloth: its finding, its lines among those of the scan, and its beats."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from moire.bindings import swapped
from moire.model import Candidate, Finding, Scan, WarpRuns, Weave
from moire.peaks import Candidate as Bin
from moire.peaks import Peak
from moire.refinement import refine
from moire.units import fold_angle, page_angle
from moire.weavealias import WeaveAlias, explain_alias, thread_aliases
from moire.weaves import SURE, Threads, measure_weave

_MEMBER_BINS, _PATCH = 0.8, 0.005
_DRIFT = 0.05
_NEXT = "a second scan at a higher rate settles it (--second)"
_COARSER, _BEAT_BINS, _HIGHEST_BEAT = 0.75, 0.4, 3.0


def cloth_finding(threads: Threads, scan: Scan, warp: WarpRuns = "vertical") -> Finding:
    """What is told of a cloth; its lines and visibility are filled in by the caller.

    Parameters
    ----------
    threads : Threads
    scan : Scan
    warp : {"vertical", "horizontal"}
        Which threads are taken for the ends.
    """
    rate = scan.ppi
    coverage, regions = _extent(threads, scan)
    weave = None if rate is None else measure_weave(threads, rate, warp_runs=warp)
    as_seen = warp == "vertical" or threads.fit.binding.pattern == "knit"
    ends, picks = (threads.warp, threads.weft) if as_seen else (threads.weft, threads.warp)
    sizes = [float(1 / np.hypot(*f)) for f in (ends, picks)]
    evidence = [*_binding_words(threads, warp), *_reach_words(threads)]
    if weave is None:
        evidence.append(f"sampling rate unknown: {sizes[0]:.2f} pixels an end, {sizes[1]:.2f} a pick")
    else:
        evidence.extend(_count_words(weave, max(threads.count.jitter)))
    return Finding(
        kind="weave",
        confidence=round(1 - math.exp(-(threads.fit.gain - SURE[0][0] / 2) / 8), 3),
        visibility=0.0,
        coverage=coverage,
        regions=regions,
        lines=(),
        period_px=sizes[0],
        period_mm=None if rate is None else float(25.4 / np.hypot(*(ends * np.array(rate)))),
        weave=weave,
        candidates=() if rate is None else _candidates(threads, rate, as_seen=as_seen),
        settled=threads.settled,
        evidence=tuple(evidence),
    )


def _reach_words(threads: Threads) -> tuple[str, ...]:
    """Whether threads lie beyond the grid's reach, and what would settle it."""
    if threads.proven:
        return ("a second scan bears out this reading of the threads",)
    if threads.beyond_reach:
        fold = "threads are finer than half the sampling rate and fold; their binding shows which they are"
        return (f"{fold}; {_NEXT}",)
    if not threads.settled:
        return (f"threads finer than the sampling grid reaches would look like these; {_NEXT}",)
    return ()


def _candidates(threads: Threads, ppi: tuple[float, float], *, as_seen: bool) -> tuple[Candidate, ...]:
    """Readings that one scan leaves open, the ends' lines as rulings; none where it leaves none."""
    out = []
    for rival in threads.rivals[:5]:
        warp, weft = (rival.fit.warp, rival.fit.weft) if as_seen else (rival.fit.weft, rival.fit.warp)
        ends, picks = (f * np.array(ppi) for f in (warp, weft))
        order = np.rint(warp).astype(int)
        out.append(
            Candidate(
                ruling_lpi=float(np.hypot(*ends)),
                angle_deg=fold_angle(page_angle(*ends), 180),
                order=(int(order[0]), int(order[1])),
                probability=rival.probability,
                ends_per_cm=float(np.hypot(*ends)) / 2.54,
                picks_per_cm=float(np.hypot(*picks)) / 2.54,
                structure=rival.fit.binding.structure if as_seen else swapped(rival.fit.binding).structure,
            )
        )
    return tuple(out)


def _binding_words(threads: Threads, warp: WarpRuns) -> tuple[str, str]:
    """What shows the binding, and what was assumed of the warp."""
    binding = threads.fit.binding
    worth = f"(worth {threads.fit.gain:.0f} nat)"
    if binding.pattern == "knit":
        return (
            f"{len(threads.fit.lines)} lines of loops with two slanting legs each {worth}: a knit",
            "wales are taken to run down the page; per cm they stand as ends, courses as picks",
        )
    way = "down" if warp == "vertical" else "across"
    name = binding.structure if warp == "vertical" else swapped(binding).structure
    return (
        f"{len(threads.fit.lines)} lines at fractions of two thread frequencies, "
        f"as in a {name} weave {worth}",
        f"which threads are the warp cannot be seen: ends are taken to run {way} the page (--warp {warp})",
    )


def _count_words(weave: Weave, jitter: float) -> list[str]:
    """What the standards' way of counting adds, and what a picture cannot say."""
    ends, picks = weave.ends_range_per_cm or (0.0, 0.0), weave.picks_range_per_cm or (0.0, 0.0)
    places = "; ".join(f"{e:.1f} x {p:.1f}" for e, p in weave.places_per_cm)
    drift = max(high / max(low, 1e-9) - 1 for low, high in (ends, picks))
    drifts = drift > _DRIFT and jitter < drift
    caution = ["the sett changes over the picture, as in a photograph taken at a slant or "
               "through a lens that bends lines: read the range, not the mean"] if drifts else []  # fmt: skip
    return [
        *caution,
        f"at five places {places} ends x picks per cm (as ISO 7211-2 and ASTM D3775 count, which ask for "
        "longer pieces than most scans hold)",
        f"over the cloth {ends[0]:.1f} to {ends[1]:.1f} ends/cm "
        f"and {picks[0]:.1f} to {picks[1]:.1f} picks/cm",
        "in a dispute the reference method is dissection; a plied yarn counts as one thread",
    ]


def thread_lines(
    threads: Threads, image: NDArray[np.float32], peaks: tuple[Peak, ...], *, size: int
) -> tuple[list[tuple[Peak, tuple[int, int] | None]], list[Peak]]:
    """The cloth's lines, and the peaks among `peaks` that they stand for.

    They are the two thread lines, those the weave was read from, and others of its orders.

    Parameters
    ----------
    threads : Threads
    image : ndarray, shape (rows, columns)
        Code values on a 0..255 scale, mean of channels.
    peaks : tuple of Peak
        Lines found in the scan by other means.
    size : int
        Tile side that their weights refer to.
    """
    frame = np.stack([threads.warp, threads.weft], axis=1)
    levels = {(1.0, 0.0): (0.0, 0.0), (0.0, 1.0): (0.0, 0.0)}
    for line, order in threads.fit.lines:
        levels[order] = (line.z, line.excess_nat)
    out: list[tuple[Peak, tuple[int, int] | None]] = []
    for order, (z, excess) in levels.items():
        f = frame @ np.array(order)
        if np.abs(f).max() >= 0.5:
            continue
        kx, ky = np.rint(f * size).astype(int)
        candidate = Bin(kx=int(kx), ky=int(ky), z=z, excess_nat=excess)
        (peak,) = refine(image, (candidate,), size=size)
        sigma = np.hypot(*(np.array(order) * np.array(threads.count.sigma) / threads.reduction))
        whole = all(float(c).is_integer() for c in order)
        named = (int(order[0]), int(order[1])) if whole else None
        out.append((replace(peak, f=f, sigma=np.full(2, sigma)), named))
    repeat = np.array(threads.fit.binding.repeat)
    known = [p for p, _ in out]
    taken = []
    for peak in peaks:
        near = np.rint(np.linalg.solve(frame, peak.f) * repeat) / repeat
        if np.hypot(*(frame @ near - peak.f)) < _MEMBER_BINS / size:
            taken.append(peak)
            same = [i for i, p in enumerate(known) if np.hypot(*(p.f - peak.f)) < _MEMBER_BINS / size]
            if not same:
                known.append(peak)
                out.append((peak, None))
    return out, taken


def thread_beat(threads: Threads, f: NDArray[np.float64], *, size: int) -> WeaveAlias | None:
    """The order of the threads that has folded to a line coarser than they are, or None."""
    frame = np.stack([threads.warp, threads.weft], axis=1)
    finest = float(np.hypot(*frame).min())
    beat = folded_order(threads, f, size=size)
    if beat is None or np.hypot(*f) < _COARSER * finest:
        return beat
    # Threads that fold themselves are seen coarser than they are, though not than each other.
    own = abs(beat.order[0]) + abs(beat.order[1]) == 1 and 0 in beat.order
    return beat if own and np.hypot(*f) < np.hypot(*(frame @ np.array(beat.order))) else None


def folded_order(threads: Threads, f: NDArray[np.float64], *, size: int) -> WeaveAlias | None:
    """The order of the threads that has folded to a line, coarser than they are or not, or None."""
    aliases = thread_aliases(threads.warp, threads.weft, orders=threads.fit.binding.orders(_HIGHEST_BEAT))
    return explain_alias(f, aliases, tolerance=_BEAT_BINS / size)


def _extent(threads: Threads, scan: Scan) -> tuple[float, tuple[tuple[int, int, int, int], ...]]:
    """Share of the scan that is cloth, and boxes around it, largest first."""
    import cv2

    present = threads.count.present.astype(np.uint8)
    rows, columns = present.shape
    _, _, stats, _ = cv2.connectedComponentsWithStats(present, connectivity=8)
    boxes = []
    scale = (scan.width_px / columns, scan.height_px / rows)
    for x, y, w, h, area in sorted(stats[1:].tolist(), key=lambda s: -s[4])[:12]:
        if area >= _PATCH * present.size:
            left, top = int(x * scale[0]), int(y * scale[1])
            boxes.append((left, top, round((x + w) * scale[0]) - left, round((y + h) * scale[1]) - top))
    return float(present.mean()), tuple(boxes)
