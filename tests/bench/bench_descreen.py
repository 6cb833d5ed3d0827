"""Mending against blurs whose parameters were chosen with the truth in hand.

    python tests/bench/bench_descreen.py [--only WORD]

Prints are made by the product's press from pictures, rulings and angles that the training of the
mixing network never saw. Each row: PSNR of the scan, of the best Gaussian in sRGB and in linear
light, of the best bilateral and guided filter (all with parameters that maximise PSNR against the
truth), the best of box, median, non-local means, wavelet, total variation and reduce-and-enlarge, of
`mend --quick` and of `mend` with the screens that `examine` found; then SSIM and mean CIEDE2000 of the
best rival by PSNR and of `mend`, gradient energy and PSNR on the truth's strongest edges, dB at the
screens' fundamentals (least), and the cost of `mend --quick` and `mend` in FFT round trips, measures
included and the examination of the result not.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np
import skimage.data
from numpy.typing import NDArray
from scipy import fft
from skimage.color import deltaE_ciede2000, rgb2lab
from skimage.metrics import structural_similarity
from skimage.restoration import denoise_tv_chambolle

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from prints import scanned

from moire.examine import examine
from moire.features import guided_filter
from moire.mend import mend
from moire.model import Examination, Mending, Scan
from moire.proof import ScreenOrder, print_sheet
from moire.scanner import srgb_decode, srgb_encode
from moire.testcard import draw_card, draw_leaf

Picture = NDArray[np.float32]
SHOWN = ("Gaussian", "Gaussian, linear", "bilateral", "guided")
FOUR = ("cyan", "magenta", "yellow", "black")


@dataclass(frozen=True)
class Case:
    """One print and its scan."""

    name: str
    picture: str
    rulings: tuple[float, ...]
    angles: tuple[float, ...]
    inks: tuple[str, ...]
    ppi: float
    turn: float = 0.0
    spot: str = "round"
    gain: float = 0.12


def colour(name: str, picture: str, ruling: float, ppi: float, **more: object) -> Case:
    return Case(name, picture, (ruling,) * 4, (16, 74, 1, 46), FOUR, ppi, **more)  # type: ignore[arg-type]


def black(name: str, picture: str, ruling: float, ppi: float, angle: float = 45, **more: object) -> Case:
    return Case(name, picture, (ruling,), (angle,), ("black",), ppi, **more)  # type: ignore[arg-type]


CASES = (
    colour("astronaut 133@300", "astronaut", 133, 300),
    colour("coffee 150@300", "coffee", 150, 300),
    colour("chelsea 85@300", "chelsea", 85, 300),
    colour("coffee 150@600", "coffee", 150, 600, spot="ellipse"),
    colour("chelsea 120@400 turned", "chelsea", 120, 400, turn=3.0),
    colour("card 133@300", "card", 133, 300),
    black("camera 85@300", "camera", 85, 300),
    black("camera 100@400", "camera", 100, 400, 37, spot="diamond"),
    black("coins 120@600", "coins", 120, 600, 22),
    black("leaf 85@300", "leaf", 85, 300),
    black("leaf 120@300", "leaf", 120, 300, 37),
    black("leaf 120@400", "leaf", 120, 400, 30),
    black("leaf 133@600", "leaf", 133, 600, 52),
)


def subject(name: str) -> Picture:
    if name == "card":
        data = draw_card()[250:850, 300:900]
    elif name == "leaf":
        data = draw_leaf()[:700, 40:740]
    else:
        data = getattr(skimage.data, name)() / 255
        side = min(400, *data.shape[:2])
        data = data[:side, :side]
    return srgb_decode(np.asarray(data, np.float32)).astype(np.float32)


def psnr(a: Picture, b: Picture) -> float:
    edge = 8
    a, b = np.clip(a, 0, 1)[edge:-edge, edge:-edge], b[edge:-edge, edge:-edge]
    return float(-10 * np.log10(np.mean((a - b) ** 2)))


def rivals(image: Picture, truth: Picture) -> dict[str, Picture]:
    """Best result of each family over a grid of parameters, chosen with the truth."""
    linear = srgb_decode(image).astype(np.float32)
    codes = np.rint(image * 255).astype(np.uint8)
    sigmas = np.geomspace(0.35, 5, 18)
    families: dict[str, list[Callable[[], Picture]]] = {
        "Gaussian": [lambda s=s: cv2.GaussianBlur(image, (0, 0), s) for s in sigmas],
        "Gaussian, linear": [
            lambda s=s: srgb_encode(cv2.GaussianBlur(linear, (0, 0), s)).astype(np.float32) for s in sigmas
        ],
        "bilateral": [
            lambda s=s, r=r: cv2.bilateralFilter(image, 0, r, s)
            for s in (1, 1.6, 2.5, 4)
            for r in (0.1, 0.2, 0.4, 0.8)
        ],
        "guided": [
            lambda r=r, e=e: np.stack(
                [
                    guided_filter(image[..., c], image.mean(axis=2), radius=r, eps=np.float32(e))
                    for c in range(3)
                ],
                axis=2,
            )
            for r in (1, 2, 3, 5)
            for e in (1e-3, 3e-3, 1e-2, 3e-2)
        ],
        "box": [lambda k=k: cv2.blur(image, (k, k)) for k in (2, 3, 4, 5, 6, 8, 10)],
        "median": [lambda k=k: as_float(cv2.medianBlur(codes, k)) for k in (3, 5, 7, 9)],
        "non-local means": [
            lambda h=h: as_float(cv2.fastNlMeansDenoisingColored(codes, None, h, h, 5, 13))
            for h in (10, 20, 35)
        ],
        "wavelet": [lambda t=t: shrink_wavelets(image, t) for t in (0.02, 0.05, 0.1, 0.2, 0.4)],
        "total variation": [
            lambda w=w: denoise_tv_chambolle(image, weight=w, channel_axis=2, max_num_iter=60).astype(
                np.float32
            )
            for w in (0.1, 0.25, 0.5)
        ],
        "reduce and enlarge": [lambda r=r: reduce_and_enlarge(image, r) for r in (1.3, 1.6, 2, 2.5, 3, 4)],
    }
    out = {}
    for name, tries in families.items():
        results = [t() for t in tries]
        out[name] = max(results, key=lambda r: psnr(r, truth))
    return out


def as_float(codes: NDArray[np.uint8]) -> Picture:
    return (codes / 255).astype(np.float32)


def shrink_wavelets(image: Picture, threshold: float) -> Picture:
    """Undecimated wavelet (a trous, B3 spline) with soft thresholds that halve at each of four levels.

    Starck, Murtagh, Bijaoui, Image Processing and Data Analysis (1998), value from memory.
    """
    out, smooth = np.zeros_like(image), image
    for level in range(4):
        kernel = np.zeros(4 * 2**level + 1, np.float32)
        kernel[:: 2**level] = np.array([1, 4, 6, 4, 1]) / 16
        softer = cv2.sepFilter2D(smooth, -1, kernel, kernel, borderType=cv2.BORDER_REFLECT)
        detail = smooth - softer
        out += np.sign(detail) * np.maximum(np.abs(detail) - threshold / 2**level, 0)
        smooth = softer
    return np.asarray(out + smooth)


def reduce_and_enlarge(image: Picture, factor: float) -> Picture:
    rows, columns = image.shape[:2]
    small = cv2.resize(image, (round(columns / factor), round(rows / factor)), interpolation=cv2.INTER_AREA)
    return np.asarray(cv2.resize(small, (columns, rows), interpolation=cv2.INTER_CUBIC))


def edge_psnr(result: Picture, truth: Picture) -> float:
    """PSNR on the strongest 3 % of the truth's edges."""
    grey = truth.mean(axis=2)
    gx, gy = cv2.Sobel(grey, cv2.CV_32F, 1, 0), cv2.Sobel(grey, cv2.CV_32F, 0, 1)
    steep = gx**2 + gy**2
    at = steep >= np.quantile(steep, 0.97)
    return float(-10 * np.log10(np.mean((np.clip(result, 0, 1) - truth)[at] ** 2)))


def line_db(result: Picture, image: Picture, truth: Picture, found: Examination) -> float:
    """Least of the dB taken off the fundamentals of the screens found, against the truth."""
    window = np.outer(np.hanning(image.shape[0]), np.hanning(image.shape[1]))
    y, x = np.mgrid[: image.shape[0], : image.shape[1]]
    removed = []
    for finding in found.findings:
        for line in finding.lines:
            if finding.kind in ("halftone", "alias") and line.order in ((1, 0), (0, 1)):
                wave = window * np.exp(-2j * np.pi * (line.fx_cpp * x + line.fy_cpp * y))
                before, after = (abs(((p - truth).mean(axis=2) * wave).sum()) for p in (image, result))
                removed.append(20 * np.log10(before / max(after, 1e-9)))
    return min(removed, default=float("nan"))


def edge_energy(result: Picture, truth: Picture) -> float:
    """Gradient energy on the strongest 3 % of the truth's edges, over the truth's own."""
    energies = []
    for p in (np.clip(result, 0, 1).mean(axis=2), truth.mean(axis=2)):
        gx, gy = cv2.Sobel(p, cv2.CV_32F, 1, 0, scale=0.125), cv2.Sobel(p, cv2.CV_32F, 0, 1, scale=0.125)
        energies.append(gx**2 + gy**2)
    at = energies[1] >= np.quantile(energies[1], 0.97)
    return float(energies[0][at].sum() / energies[1][at].sum())


def quality(result: Picture, truth: Picture) -> str:
    result = np.clip(result, 0, 1)
    ssim = structural_similarity(result, truth, channel_axis=2, data_range=1.0)
    shift = deltaE_ciede2000(rgb2lab(result), rgb2lab(truth)).mean()
    return f"{ssim:.3f} / {shift:.2f}"


def run(case: Case) -> str:
    screens = tuple(
        ScreenOrder(ruling_lpi=r, angle_deg=a, ink=i, spot=case.spot)  # type: ignore[arg-type]
        for r, a, i in zip(case.rulings, case.angles, case.inks, strict=True)
    )
    sheet = print_sheet(subject(case.picture), screens, width_in=1.5, height_in=1.5, gain=case.gain, seed=11)
    scan, truth = scanned(sheet, case.ppi, turn_deg=case.turn)
    image = (scan.pixels / 255).astype(np.float32)
    best = rivals(image, truth)
    start = time.process_time()
    for _ in range(3):
        fft.irfft2(fft.rfft2(image, axes=(0, 1)), s=image.shape[:2], axes=(0, 1))
    trip = (time.process_time() - start) / 3
    found = examine(scan)
    quick, quick_cost = timed(scan, found, quick=True)
    full, cost = timed(scan, found, quick=False)
    quick_cost, cost = quick_cost / trip, cost / trip
    top = max(best, key=lambda k: psnr(best[k], truth))
    gain = psnr(full, truth) - psnr(best[top], truth)
    others = {k: v for k, v in best.items() if k not in SHOWN}
    other = max(others, key=lambda k: psnr(others[k], truth))
    return (
        f"| {case.name} | {psnr(image, truth):.1f} | "
        + " | ".join(f"{psnr(best[k], truth):.2f}" for k in SHOWN)
        + f" | {psnr(others[other], truth):.2f} {other} | {psnr(quick, truth):.2f} | "
        f"**{psnr(full, truth):.2f}** | {gain:+.2f} | "
        f"{quality(best[top], truth)} | {quality(full, truth)} | "
        f"{edge_energy(full, truth):.2f} / {edge_psnr(full, truth):.1f} | "
        f"{line_db(full, image, truth, found):.0f} | {quick_cost:.0f} / {cost:.0f} |"
    )


def timed(scan: Scan, found: Examination, *, quick: bool) -> tuple[Picture, float]:
    """A mending and its processor time, the examination of the result taken off."""
    room = sys.modules["moire.mend"]
    looking = []

    def look(mended: Scan, *, viewing: str) -> Examination:
        start = time.process_time()
        after = examine(mended, viewing=viewing)
        looking.append(time.process_time() - start)
        return after

    room.examine = look  # type: ignore[attr-defined]
    start = time.process_time()
    done = mend(scan, found, quick=quick)
    return _codes(done), time.process_time() - start - sum(looking)


def _codes(done: Mending) -> Picture:
    return (done.scan.pixels / 255).astype(np.float32)


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--only", default="", help="cases whose name holds this word")
    args = parser.parse_args()
    print(
        "| print | scan | Gaussian | Gaussian, linear | bilateral | guided | best other | quick | mend "
        "| gain | SSIM / CIEDE2000 best rival | SSIM / CIEDE2000 mend | edge energy / PSNR "
        "| line dB | trips quick / full |"
    )
    print("|" + "---|" * 15)
    for case in CASES:
        if args.only in case.name:
            print(run(case), flush=True)


if __name__ == "__main__":
    main()
