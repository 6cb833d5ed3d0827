"""What a mending removed and what it kept, measured on the scan alone."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from moire.patches import Codes, cut_patches, patch_phasors, strong_tiles
from moire.peaks import Peak
from moire.spectrum import tile_phasors
from moire.vision import lightness, linear_light

_EDGES = 300
_LEVEL_TILES, _LINE_TILES = 16, 128
_COARSEST_PX = 16.0


def line_levels(
    plane: NDArray[np.float32],
    frequencies: NDArray[np.float64],
    weights: NDArray[np.float32] | None,
    *,
    inside: NDArray[np.bool_] | None = None,
    size: int,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64], NDArray[np.float32]]:
    """Amplitude of lines where they are strong, and of their surroundings in frequency.

    Parameters
    ----------
    plane : ndarray, shape (rows, columns)
        Lightness L*.
    frequencies : ndarray, shape (n, 2)
        Cycles per pixel.
    weights : ndarray, shape (n, tile rows, tile columns), or None
        Where each line counts; from the plane itself if None.
    inside : ndarray of bool, shape (n, tile rows, tile columns), or None
        Tiles among which a line's strong ones are sought.
    size : int
        Tile side.

    Returns
    -------
    amplitude, background, mean_lightness : ndarray, shape (n,)
        L* units; background is the rms of eight neighbours 4 bins away.
    weights : ndarray
        The weights used.
    """
    if weights is None:
        v = np.abs(tile_phasors(plane, frequencies, size=size)[0])
        sought = v if inside is None else np.where(inside, v, np.nan)
        strong = np.nanquantile(sought, 0.95, axis=(1, 2), keepdims=True)
        weights = np.clip((v / np.maximum(strong, 1e-9) - 0.15) / 0.35, 0, 1).astype(np.float32)
        weights = weights if inside is None else weights * inside
    ring = 4 / size * np.array([(np.cos(a), np.sin(a)) for a in np.pi * np.arange(8) / 4])
    aside = np.concatenate([np.zeros((1, 2)), ring])
    levels = np.zeros((3, len(frequencies)))
    for i, (f, weight) in enumerate(zip(frequencies, weights, strict=True)):
        tiles = _spread_tiles(weight)
        phasors, tone = patch_phasors(cut_patches(plane[..., None], tiles, size=size), f + aside)
        swing, share = np.abs(phasors[..., 0]), weight[tuple(tiles.T)]
        around = (swing[1:] ** 2).mean(axis=0)
        total = max(float(share.sum()), 1e-9)
        levels[:, i] = [float((x * share).sum()) / total for x in (swing[0], around, tone[:, 0])]
    return levels[0], np.sqrt(levels[1]), levels[2], weights


def _spread_tiles(weight: NDArray[np.float32]) -> NDArray[np.int64]:
    """Rows and columns of tiles that carry a line at all, evenly spread, at least one."""
    some = np.argwhere(weight > 0)
    if not len(some):
        return np.zeros((1, 2), int)
    return some[np.linspace(0, len(some) - 1, min(_LINE_TILES, len(some))).astype(int)]


def levels_where_strong(
    codes: Codes, peaks: Sequence[Peak], *, size: int
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """L* swing of each line, and the mean L* under it, in tiles that carry it well.

    A line in step over the page is added up in step, so that picture detail at its frequency
    does not count.

    Parameters
    ----------
    codes : ndarray, shape (rows, columns, channels)
        Code values on a 0..255 scale.
    peaks : sequence of Peak
    size : int
        Tile side of the peaks' weights.
    """
    swing, tone = np.zeros(len(peaks)), np.zeros(len(peaks))
    for i, peak in enumerate(peaks):
        tiles = strong_tiles(peak.weight, _LEVEL_TILES)
        light = lightness(cut_patches(codes, tiles, size=size))
        v, means = patch_phasors(light[..., None], peak.f[None])
        turn = np.exp(-2j * np.pi * (size // 2) * (tiles[:, 1] * peak.f[0] + tiles[:, 0] * peak.f[1]))
        in_step = abs((v[0, :, 0] * turn).mean())
        apart = np.abs(v[0, :, 0]).mean()
        swing[i] = in_step / peak.coherence if peak.coherence > 0.97 and not peak.doubled else apart
        tone[i] = means.mean()
    return swing, tone


def edge_energy(before: NDArray[np.float32], after: NDArray[np.float32]) -> float | None:
    """Gradient energy kept on the strongest edges, after over before.

    Parameters
    ----------
    before, after : ndarray, shape (windows, rows, columns)
        Lightness L* without the pattern's own bands, so that only picture is compared.

    Returns
    -------
    float or None
        None where the picture has no strong edge.
    """
    one, two = (np.stack([_gradient_energy(p) for p in windows]) for windows in (before, after))
    strong = one >= max(float(np.quantile(one, 0.98)), 1.0)
    return float(two[strong].sum() / one[strong].sum()) if strong.sum() >= 50 else None


def _gradient_energy(plane: NDArray[np.float32]) -> NDArray[np.float32]:
    import cv2

    gx, gy = cv2.Sobel(plane, cv2.CV_32F, 1, 0, scale=0.125), cv2.Sobel(plane, cv2.CV_32F, 0, 1, scale=0.125)
    return np.asarray(gx * gx + gy * gy)


def edge_widths(
    before: NDArray[np.float32], after: NDArray[np.float32], *, period_px: float
) -> tuple[float | None, float | None]:
    """Median 10-90 % width of the strongest edges before and after, in pixels.

    Both pictures are averaged along each edge over more than one period of the pattern,
    which leaves the edge and takes most of the pattern away.

    Parameters
    ----------
    before, after : ndarray, shape (rows, columns)
        Lightness L*.
    period_px : float
        Period of the coarsest removed pattern.

    Returns
    -------
    before_px, after_px : float or None
        None where the picture has no strong edge.
    """
    profiles = _edge_profiles(before, after, period_px)
    if profiles is None:
        return None, None
    widths = [float(np.median([_rise_width(row) for row in p])) for p in profiles]
    return widths[0], widths[1]


def _edge_profiles(
    before: NDArray[np.float32], after: NDArray[np.float32], period: float
) -> tuple[NDArray[np.float32], NDArray[np.float32]] | None:
    import cv2

    period = min(period, _COARSEST_PX)
    smooth = cv2.GaussianBlur(after, (0, 0), max(1.0, period / 2))
    gx, gy = (
        cv2.Sobel(smooth, cv2.CV_32F, 1, 0, scale=0.125),
        cv2.Sobel(smooth, cv2.CV_32F, 0, 1, scale=0.125),
    )
    steep = np.hypot(gx, gy)
    across, along = int(np.ceil(2 * period)) + 4, int(np.ceil(3 * period)) + 2
    border = across + along
    rows, columns = steep.shape
    if min(rows, columns) <= 2 * border + 3:
        return None
    peak = (steep >= cv2.dilate(steep, np.ones((5, 5)))) & (steep > 1.0)
    peak[:border] = peak[-border:] = False
    peak[:, :border] = peak[:, -border:] = False
    ys, xs = np.nonzero(peak)
    if len(ys) < 8:
        return None
    strongest = np.argsort(-steep[ys, xs])[:_EDGES]
    ys, xs = ys[strongest], xs[strongest]
    nx, ny = gx[ys, xs] / steep[ys, xs], gy[ys, xs] / steep[ys, xs]
    u = np.arange(-4 * across, 4 * across + 1) / 4
    v = np.arange(-2 * along, 2 * along + 1) / 2
    at_x = xs[:, None, None] + nx[:, None, None] * u[None, None, :] - ny[:, None, None] * v[None, :, None]
    at_y = ys[:, None, None] + ny[:, None, None] * u[None, None, :] + nx[:, None, None] * v[None, :, None]
    taper = np.cos(np.pi * v / (2 * along + 2)).astype(np.float32) ** 2
    taper /= taper.sum()

    def profile(plane: NDArray[np.float32]) -> NDArray[np.float32]:
        # One edge at a time: the remap of all at once would be too large a picture for it.
        patch = np.stack(
            [
                cv2.remap(plane, x, y, cv2.INTER_LINEAR)
                for x, y in zip(at_x.astype(np.float32), at_y.astype(np.float32), strict=True)
            ]
        )
        return np.asarray((patch * taper[None, :, None]).sum(axis=1))

    return profile(before), profile(after)


def _rise_width(row: NDArray[np.float32]) -> float:
    """10-90 % width of a rising profile sampled at quarter pixels."""
    centre = len(row) // 2
    rise = np.maximum.accumulate(row)
    low, high = float(rise[: centre // 2].mean()), float(rise[-(centre // 2) :].mean())
    if high - low < 1e-3:
        return 0.0
    unit = (rise - low) / (high - low)
    start, end = int(np.searchsorted(unit, 0.1)), int(np.searchsorted(unit, 0.9))
    return max(end - start, 1) / 4


def colour_shift(before: Codes, after: Codes, *, sigma_px: float) -> tuple[float, float]:
    """Mean and largest CIEDE2000 difference of low-passed pictures.

    Averages are taken in linear light, where ink and paper mix truly.

    Parameters
    ----------
    before, after : ndarray, shape (rows, columns, 1 or 3)
        sRGB code values on a 0..255 scale.
    sigma_px : float
        Of the Gaussian that both are seen through.
    """
    import cv2
    from skimage.color import deltaE_ciede2000, xyz2lab

    to_xyz = np.array(
        [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]], np.float32
    )
    # Cells of half a sigma, then the Gaussian on them, seen at every other one.
    rows, columns = before.shape[:2]
    cell = max(1, min(int(sigma_px / 2), rows, columns))

    def lab(codes: Codes) -> NDArray[np.float64]:
        size = (columns // cell, rows // cell)
        coarse = cv2.resize(linear_light(codes), size, interpolation=cv2.INTER_AREA)
        light = np.asarray(cv2.GaussianBlur(coarse, (0, 0), sigma_px / cell)[::2, ::2], np.float32)
        rgb = light if light.ndim == 3 else np.repeat(light[..., None], 3, axis=2)
        return np.asarray(xyz2lab(rgb @ to_xyz.T))

    shift = deltaE_ciede2000(lab(before), lab(after))
    return float(shift.mean()), float(shift.max())
