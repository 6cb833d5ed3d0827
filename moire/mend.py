"""The one path from a scan and its examination to a derivative and its proof."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Collection
from dataclasses import replace
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray

from moire.descreen import Preparation, apply, margin_px, prepare
from moire.examine import examine
from moire.lattice import grid_distance
from moire.measures import colour_shift, edge_energy, edge_widths, line_levels
from moire.model import Examination, Finding, Kind, LineRemoved, Measures, Mending, Recipe, Scan
from moire.notch import remove_lines
from moire.nulls import ScreenLattice, null_transfer
from moire.recipe import MENDED_UNASKED, check_fits, prescribe, refit
from moire.resample import reduce_picture
from moire.samples import code_planes, tile_size
from moire.tiles import map_tiles
from moire.verdict import judge
from moire.vision import lightness, visibility

Pixels = NDArray[Any]
_TILE_PX = 1024
_BEAT_REACH_PX = 25.0
_NOTCH_MARGIN_PX = 160
_BEAT_MARGIN_PX = 80
_LEAST_REACH_PX, _THREAD_REACH = 5.0, 1.2
_PLACES = 4
_SAME_CPP = 0.002
# Threads shade what is under them; banding and beats add to it.
_SHADING: tuple[Kind, ...] = ("weave",)
_PLACE_PX = 96
_WINDOW_PX = 384
_WINDOWS = 3


def mend(
    scan: Scan,
    examination: Examination | None = None,
    *,
    only: Collection[Kind] = (),
    keep: Collection[Kind] = (),
    strength: float = 1.0,
    quick: bool = False,
    to_ppi: float | None = None,
    recipe: Recipe | None = None,
    progress: Callable[[float], None] = lambda _: None,
) -> Mending:
    """Remove what is artifact from a copy of a scan, and measure what that did.

    Parameters
    ----------
    scan : Scan
        The master; never changed.
    examination : Examination or None
        Its examination; made here if None.
    only, keep, strength, quick, to_ppi
        See `moire.recipe.prescribe`.
    recipe : Recipe or None
        A saved remedy to repeat instead, its screens re-measured on this scan; the choices above are
        then the recipe's own.
    progress : callable
        Told the share done, 0..1.

    Returns
    -------
    Mending
        The derivative, examinations before and after, recipe and measures.

    Raises
    ------
    BadRequest, RecipeMismatch
    """
    before = examine(scan) if examination is None else examination
    if recipe is None:
        recipe = prescribe(before, only=only, keep=keep, strength=strength, quick=quick, to_ppi=to_ppi)
    else:
        check_fits(recipe, scan)
        recipe = refit(recipe, before)
    master = _encoded(scan)
    mended = _remove(master, recipe, progress)
    full_size = _as_scan(mended, scan, master)
    after = _recognised(examine(full_size, viewing=before.viewing.condition), before)
    measures, places = _measure(scan, full_size, before, recipe)
    derivative = full_size
    if recipe.to_ppi is not None and scan.ppi is not None:
        derivative = _reduced(mended, scan, recipe.to_ppi)
    return Mending(
        scan=derivative, before=before, after=after, recipe=recipe, measures=measures, worst_places=places
    )


def _recognised(after: Examination, before: Examination) -> Examination:
    """Remains of a screen keep the name that the master gave it: alone they are too faint to name."""
    known = [f for f in before.findings if f.kind in ("halftone", "alias")]
    findings = []
    for found in after.findings:
        match = next((k for k in known if _same_lattice(found, k)), None)
        if match is not None:
            found = replace(
                found,
                kind=match.kind,
                screen=match.screen,
                candidates=match.candidates,
                settled=match.settled,
                evidence=(*found.evidence[:1], "what is left of a screen of the master"),
            )
        findings.append(found)
    verdict, strongest, advice = judge(tuple(findings))
    if after.verdict == "refer" and not findings:
        return after
    return replace(after, findings=tuple(findings), verdict=verdict, visibility=strongest, advice=advice)


def _same_lattice(a: Finding, b: Finding) -> bool:
    if a.kind not in ("halftone", "alias"):
        return False
    first = [(line.fx_cpp, line.fy_cpp) for line in a.lines if line.order == (1, 0)]
    second = [(line.fx_cpp, line.fy_cpp) for line in b.lines if line.order in ((1, 0), (0, 1))]
    return any(grid_distance(np.array(p), np.array(q)) < _SAME_CPP for p in first for q in second)


def _encoded(scan: Scan) -> Pixels:
    """Pixels 0..1, light rising, shape (rows, columns, channels)."""
    values = scan.pixels.astype(np.float32) / np.float32(scan.full_scale)
    values = values[..., None] if values.ndim == 2 else values
    return 1 - values if scan.mode == "cmyk" else values


def _remove(master: Pixels, recipe: Recipe, progress: Callable[[float], None]) -> Pixels:
    lattices = _lattices(recipe)
    notches = [r for r in recipe.removals if r.method == "notch"]
    lines = [v for r in notches if r.kind not in ("rosette", *_SHADING) for v in r.vectors_cpp]
    shading = [v for r in notches if r.kind in _SHADING for v in r.vectors_cpp]
    beside = [v for r in notches for v in r.beside_cpp]
    beats = [v for r in notches if r.kind == "rosette" for v in r.vectors_cpp]
    mended = np.empty_like(master)
    # Plates of a CMYK file are one ink each; three channels are one colour picture.
    groups = [slice(0, 3)] if master.shape[2] == 3 else [slice(c, c + 1) for c in range(master.shape[2])]
    for group in groups:
        part = np.ascontiguousarray(master[..., group])
        ready = prepare(part, lattices)

        def work(tile: Pixels, ready: Preparation = ready) -> Pixels:
            level = remove_lines(tile, lines, beside=beside)
            level = remove_lines(level, shading, reach_px=_thread_reach(shading), of_tone=True)
            clear = apply(level, ready, quick=recipe.quick)
            if not beats:
                return clear
            # Without screens to mend, the beats themselves are all there is; else they end with them.
            inside = _where_changed(clear, level) if lattices else np.float32(1)
            still = remove_lines(clear, beats, reach_px=_BEAT_REACH_PX)
            return clear + inside * (still - clear)

        margin = max(
            margin_px(lattices), _NOTCH_MARGIN_PX if lines or shading else 0, _BEAT_MARGIN_PX if beats else 0
        )
        mended[..., group] = map_tiles(part, work, size=_TILE_PX, margin=margin, progress=progress)
    mended = np.clip(mended, 0, 1)
    return master + np.float32(recipe.strength) * (mended - master)


def _thread_reach(lines: list[tuple[float, float]]) -> float:
    """Over how far threads keep step: uneven as yarns are, hardly further than to the next thread."""
    if not lines:
        return 1.0
    return max(_LEAST_REACH_PX, _THREAD_REACH / float(np.median([np.hypot(*f) for f in lines])))


def _where_changed(after: Pixels, before: Pixels) -> Pixels:
    """Soft mask, 0..1, of where the descreening did something."""
    import cv2

    changed = (after != before).any(axis=2).astype(np.float32)
    return np.asarray(cv2.blur(cv2.blur(changed, (9, 9)), (9, 9)) * changed)[..., None]


def _as_scan(mended: Pixels, scan: Scan, master: Pixels) -> Scan:
    values = 1 - mended if scan.mode == "cmyk" else mended
    pixels = np.clip(np.rint(values * scan.full_scale), 0, scan.full_scale).astype(scan.pixels.dtype)
    pixels = pixels.reshape(scan.pixels.shape)
    # A pixel that moved by less than half a code value is the master's own.
    still = (np.abs(mended - master) * scan.full_scale < 0.5).reshape(scan.pixels.shape)
    pixels = np.where(still, scan.pixels, pixels)
    pixels.setflags(write=False)
    depth = 8 if scan.bit_depth == 1 else scan.bit_depth
    digest = hashlib.sha256(pixels.tobytes()).hexdigest()
    return replace(scan, pixels=pixels, bit_depth=depth, sha256=digest, jpeg=False)


def _reduced(mended: Pixels, scan: Scan, to_ppi: float) -> Scan:
    assert scan.ppi is not None
    width = max(1, round(scan.width_px * to_ppi / scan.ppi[0]))
    height = max(1, round(scan.height_px * to_ppi / scan.ppi[1]))
    small = reduce_picture(np.clip(mended, 0, 1), width, height)
    shape = (height, width) if scan.pixels.ndim == 2 else (height, width, scan.pixels.shape[2])
    blank = replace(scan, pixels=np.zeros(shape, scan.pixels.dtype))
    out = _as_scan(small, blank, np.full_like(small, 2.0))
    alpha = None
    if scan.alpha is not None:
        plane = reduce_picture(
            scan.alpha[..., None].astype(np.float32) / np.float32(scan.full_scale), width, height
        )
        alpha = np.rint(plane[..., 0] * scan.full_scale).astype(scan.alpha.dtype)
    rate = (to_ppi, to_ppi)
    return replace(out, ppi=rate, ppi_in_file=rate, alpha=alpha)


def _measure(
    scan: Scan, mended: Scan, before: Examination, recipe: Recipe
) -> tuple[Measures, tuple[tuple[int, int], ...]]:
    removed = [f for f in before.findings if f.lines and f.kind in {r.kind for r in recipe.removals}]
    one, two = code_planes(scan), code_planes(mended)
    l_one, l_two = lightness(one), lightness(two)
    lines: list[LineRemoved] = []
    seen = [0.0, 0.0]
    size = tile_size(scan)
    if removed and size:
        all_lines = [(f.kind, line) for f in removed for line in f.lines]
        at = np.array([(line.fx_cpp, line.fy_cpp) for _, line in all_lines])
        inside = np.stack([_tiles_in(scan, f, size) for f in removed for _ in f.lines])
        a0, floor, mean, weights = line_levels(l_one, at, None, inside=inside, size=size)
        a1, _, _, _ = line_levels(l_two, at, weights, size=size)
        for (kind, line), x, y, b, m in zip(all_lines, a0, a1, floor, mean, strict=True):
            before_db, after_db = (20 * np.log10(max(v, 1e-4) / max(b, 1e-4)) for v in (x, y))
            lines.append(
                LineRemoved(
                    fx_cpp=line.fx_cpp,
                    fy_cpp=line.fy_cpp,
                    kind=kind,
                    before_db=float(before_db),
                    after_db=float(after_db),
                    removed_db=float(before_db - after_db),
                )
            )
            f = (line.fx_cpp, line.fy_cpp)
            for i, swing in enumerate((x, y)):
                seen[i] = max(
                    seen[i], visibility(f, float(swing), float(m), viewing=before.viewing, ppi=scan.ppi)
                )
    period = max((f.period_px for f in removed), default=2.0)
    ratio = edge_energy(*(_without_screens(p, recipe) for p in (l_one, l_two)))
    width_before, width_after = edge_widths(l_one, l_two, period_px=period)
    mean_shift, max_shift = colour_shift(one, two, sigma_px=max(2.0, 2 * period))
    changed = np.abs(scan.pixels.astype(np.int32) - mended.pixels.astype(np.int32))
    changed = changed.max(axis=2) if changed.ndim == 3 else changed
    outside = ~_inside(scan, removed)
    limit = np.isin(mended.pixels, (0, scan.full_scale)) & ~np.isin(scan.pixels, (0, scan.full_scale))
    measures = Measures(
        lines=tuple(lines),
        visibility_before=seen[0],
        visibility_after=seen[1],
        edge_energy_ratio=ratio,
        edge_width_before_px=width_before,
        edge_width_after_px=width_after,
        colour_shift_mean=mean_shift,
        colour_shift_max=max_shift,
        untouched_share=float((changed[outside] < max(1, scan.full_scale // 255)).mean())
        if outside.any()
        else 1.0,
        untouched_area=float(outside.mean()),
        clipped_share=float(limit.mean()),
    )
    return measures, _worst_places(np.abs(l_one - l_two))


def _without_screens(plane: Pixels, recipe: Recipe) -> Pixels:
    """Windows of a plane through the null of every screen removed: what both states keep is picture."""
    from scipy import fft

    windows = _windows(plane)
    lattices = _lattices(recipe)
    if not lattices:
        return windows
    shape = (windows.shape[1], windows.shape[2])
    null = null_transfer(shape, lattices, [1.0] * len(lattices))
    return np.asarray(fft.irfft2(fft.rfft2(windows) * null, s=shape), np.float32)


def _windows(plane: Pixels) -> Pixels:
    """A plane as a stack: itself if small, else evenly spread windows of it."""
    rows, columns = plane.shape
    if rows * columns <= _WINDOWS**2 * _WINDOW_PX**2 or min(rows, columns) < _WINDOW_PX:
        return plane[None]
    starts = (np.rint(np.linspace(0, n - _WINDOW_PX, _WINDOWS)).astype(int) for n in (rows, columns))
    return np.stack([plane[y : y + _WINDOW_PX, x : x + _WINDOW_PX] for y, x in product(*starts)])


def _lattices(recipe: Recipe) -> tuple[ScreenLattice, ...]:
    return tuple(
        ScreenLattice(k1=np.array(r.vectors_cpp[0]), k2=np.array(r.vectors_cpp[1]))
        for r in recipe.removals
        if r.method == "descreen"
    )


def _tiles_in(scan: Scan, finding: Finding, size: int) -> NDArray[np.bool_]:
    """Half-overlapped tiles whose centres lie in a finding's regions."""
    mask = _inside(scan, [finding])
    hop = size // 2
    at_y, at_x = (np.arange(1, n // hop) * hop for n in (scan.height_px, scan.width_px))
    tiles = mask[at_y[:, None], at_x[None, :]]
    return tiles if tiles.any() else np.ones_like(tiles)


def _inside(scan: Scan, findings: list[Finding]) -> NDArray[np.bool_]:
    mask = np.zeros((scan.height_px, scan.width_px), bool)
    for finding in findings:
        if finding.kind not in MENDED_UNASKED:
            continue
        for x, y, w, h in finding.regions:
            mask[y : y + h, x : x + w] = True
    return mask


def _worst_places(change: Pixels) -> tuple[tuple[int, int], ...]:
    """Centres of the blocks that changed most, apart from each other."""
    import cv2

    rows, columns = change.shape
    if not change.any():
        return ()
    energy = cv2.blur(change, (_PLACE_PX, _PLACE_PX))
    half = _PLACE_PX // 2
    out: list[tuple[int, int]] = []
    for _ in range(_PLACES):
        y, x = np.unravel_index(int(energy.argmax()), energy.shape)
        if energy[y, x] <= 0:
            break
        cx = int(np.clip(x, min(half, columns // 2), max(columns - half, columns // 2)))
        cy = int(np.clip(y, min(half, rows // 2), max(rows - half, rows // 2)))
        out.append((cx, cy))
        energy[max(0, y - 2 * half) : y + 2 * half, max(0, x - 2 * half) : x + 2 * half] = 0
    return tuple(out)
