"""Accuracy on everything that is not a screen: lines in noise, banding, blocks, clean pictures, cost."""

from __future__ import annotations

import time

import cv2
import numpy as np
import skimage.data
from numpy.typing import NDArray
from prints import FOUR_INKS, as_scan, card_print, scanned
from subjects import SEEDS, dead_leaves

from moire.banding import find_bands
from moire.blocks import find_block_grid
from moire.examine import examine
from moire.peaks import Candidate
from moire.refinement import polish, refine
from moire.verdict import ARTIFACTS

_OWN = {
    "tuning": ("astronaut", "camera", "chelsea", "gravel"),
    "check": ("motorcycle", "coffee", "rocket", "cell"),
}


def pictures(which: str) -> list[NDArray[np.uint8]]:
    """Photographs of the set and drawn scenes, 8 bits, never coded in blocks after the last resize."""
    rng = np.random.default_rng(SEEDS[which] + 60000)
    out = []
    for name in _OWN[which]:
        data = skimage.data.stereo_motorcycle()[0] if name == "motorcycle" else getattr(skimage.data, name)()
        out.append(np.repeat(data[..., None], 3, axis=2) if data.ndim == 2 else data[..., :3])
    for _ in range(8):
        scene = dead_leaves(600, rng) + rng.normal(0, rng.uniform(0.002, 0.01), (600, 600, 1))
        out.append(np.clip(np.rint(255 * scene), 0, 255).astype(np.uint8))
    return out


def line_ratio(trials: int = 40) -> list[tuple[int, float]]:
    """RMS error of a line's frequency over its Cramer-Rao bound, at signal-to-noise ratios in dB.

    Bound: Rife and Boorstyn, IEEE Trans. IT 20 (1974) 591, for a real sinusoid on N x N samples.
    """
    n, amplitude = 512, 20.0
    y, x = np.mgrid[0:n, 0:n]
    out = []
    for snr in (-30, -20, -10, 0, 20, 40):
        sd = amplitude / np.sqrt(2 * 10 ** (snr / 10))
        errors = []
        for trial in range(trials):
            rng = np.random.default_rng(trial)
            f = np.array([rng.uniform(0.1, 0.4), rng.uniform(-0.4, 0.4)])
            wave = amplitude * np.cos(2 * np.pi * (f[0] * x + f[1] * y + rng.random()))
            image = (128 + wave + rng.normal(0, sd, (n, n))).astype(np.float32)
            k = np.rint(f * 128).astype(int)
            seen = refine(image, (Candidate(kx=int(k[0]), ky=int(k[1]), z=9, excess_nat=1),), size=128)
            (peak,) = polish(image, seen, size=64)
            errors.extend(peak.f - f)
        bound = np.sqrt(24 * sd**2 / (amplitude**2 * n * n * (n * n - 1))) / (2 * np.pi)
        out.append((snr, float(np.sqrt(np.mean(np.square(errors))) / bound)))
    return out


def print_signs(which: str) -> None:
    """The sections of the report that need no print."""
    ratios = ", ".join(f"{snr} dB {ratio:.2f}" for snr, ratio in line_ratio())
    print("\n## A line in white noise\n")
    print(f"512 x 512 px, RMS error of the frequency over the Cramer-Rao bound: {ratios}.")
    shown = pictures(which)
    rng = np.random.default_rng(SEEDS[which] + 61000)
    print("\n## Clean pictures\n")
    accused, crops = [], 0
    for i, picture in enumerate(shown):
        for _ in range(300 // len(shown)):
            scale = float(rng.uniform(0.6, 1.3))
            resized = cv2.resize(picture, None, fx=scale, fy=scale, interpolation=cv2.INTER_AREA)
            side = min(320, *resized.shape[:2])
            y, x = (int(rng.integers(0, length - side + 1)) for length in resized.shape[:2])
            found = examine(as_scan(np.ascontiguousarray(resized[y : y + side, x : x + side]), 300.0))
            crops += 1
            accused += [(i, f.kind) for f in found.findings if f.kind in ARTIFACTS and f.visibility >= 1][:1]
    print(f"{crops} crops, resized by 0.6 to 1.3, of {len(shown)} pictures: {len(accused)} accused "
          f"({len(accused) / crops:.1%}) {sorted({kind for _, kind in accused})}.")  # fmt: skip
    print("\n## Block grid\n\n| quality | in place | enlarged by two |\n|---|---|---|")
    for quality in (60, 80, 90):
        row = []
        for scale in (1, 2):
            hits = 0
            for picture in shown:
                code = cv2.imencode(".jpg", picture, [cv2.IMWRITE_JPEG_QUALITY, quality])[1]
                coded = cv2.imdecode(code, cv2.IMREAD_COLOR)
                coded = cv2.resize(coded, None, fx=scale, fy=scale, interpolation=cv2.INTER_CUBIC)
                grid = find_block_grid(coded.mean(axis=2).astype(np.float32))
                hits += grid is not None and grid.period_px == 8 * scale
            row.append(f"{hits} of {len(shown)}")
        print(f"| {quality} | {row[0]} | {row[1]} |")
    false = total = 0
    for picture in shown[len(_OWN[which]) :]:
        for scale in (1.0, 0.5, 0.77, 0.94, 1.06, 1.2, 1.5):
            resized = cv2.resize(picture, None, fx=scale, fy=scale, interpolation=cv2.INTER_LINEAR)
            false += find_block_grid(resized.mean(axis=2).astype(np.float32)) is not None
            total += 1
    print(f"\nNever coded, resized by seven factors: {false} of {total} called a grid.")
    print("\n## Banding on pictures\n\n| amplitude, code values | found |\n|---|---|")
    for amplitude in (0.5, 1.0, 2.0):
        hits = cases = 0
        for picture in shown:
            for axis in (0, 1):
                period = float(rng.uniform(2.5, 30))
                at = np.arange(picture.shape[1 - axis])
                wave = amplitude * np.cos(2 * np.pi * at / period + rng.uniform(0, 6.28))
                shaped = wave[None, :, None] if axis == 0 else wave[:, None, None]
                noisy = picture + shaped + rng.normal(0, 1, picture.shape)
                page = np.clip(np.rint(noisy), 0, 255).mean(axis=2).astype(np.float32)
                bands = find_bands(page)
                hits += any(b.axis == axis and abs(b.f_cpp - 1 / period) < 1.5 / len(at) for b in bands)
                cases += 1
        print(f"| {amplitude} | {hits} of {cases} ({hits / cases:.0%}) |")
    clean = sum(bool(find_bands(p.mean(axis=2).astype(np.float32))) for p in shown)
    print(f"\nPeriods of 2.5 to 30 px, noise of 1 code. Without banding: {clean} of {len(shown)} accused.")
    print_cost()


def print_cost() -> None:
    """What examining an A4 page costs, beside one transform of it; and the least coverage found."""
    from scipy import fft

    rng = np.random.default_rng(0)
    text = skimage.data.page()
    text = cv2.resize(text, (1100, 560))
    print("\n## An A4 text page at 300 ppi with a four-ink picture\n")
    print("| share of the page | inks named | examine over one rfft2 of its lightness |\n|---|---|---|")
    for share in (0.1, 0.05, 0.02, 0.01):
        page = np.full((3508, 2480, 3), 236.0, np.float32)
        for y in range(120, 2900, 640):
            for x in (100, 1280):
                page[y : y + 560, x : x + 1100] = text[..., None]
        side = np.sqrt(share * 3508 * 2480)
        picture = scanned(card_print(*FOUR_INKS, width_in=side * 1.155 / 300), 300.0)[0].pixels
        h, w = picture.shape[:2]
        page[700 : 700 + h, 900 : 900 + w] = picture
        pixels = np.clip(page + rng.normal(0, 1.5, page.shape), 0, 255).astype(np.uint8)
        scan, plane = as_scan(pixels, 300.0), pixels.mean(axis=2).astype(np.float32)
        whole = min(_spent(lambda s=scan: examine(s)) for _ in range(3))
        one = min(_spent(lambda p=plane: fft.rfft2(p, workers=1)) for _ in range(5))
        inks = {f.screen.ink for f in examine(scan).findings if f.screen}
        print(f"| {h * w / page[..., 0].size:.0%} | {len(inks - {'unknown'})} of 4 | {whole / one:.1f} |")


def _spent(work: object) -> float:
    start = time.process_time()
    work()  # type: ignore[operator]
    return time.process_time() - start
