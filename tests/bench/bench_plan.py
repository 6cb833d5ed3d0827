"""Predictions of `plan` against scans that were really rendered: remakes a table of docs/planning.md.

    python tests/bench/bench_plan.py prints|half|cloth|uneven|reductions|followed|reduced
        [--cases N] [--viewing monitor|print]

``prints``: flat tints screened by Ghostscript and scanned by the tests' own sampling model.
``half``: the same with cells of half pixels. ``cloth``, ``uneven``: swatches of the product's
loom through its scanner. ``reductions``: prints reduced by OpenCV's and Pillow's own resizers.
``followed``, ``reduced``: what is recommended, scanned or reduced, and examined.
Cases are drawn from the seeds below.
"""

from __future__ import annotations

import argparse
import math
import sys
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Literal

import cv2
import numpy as np
from numpy.typing import NDArray
from PIL import Image

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from postscript import DEVICE_DPI, Plate, plate, scan_plates
from prints import as_scan
from scanlines import Fit, compare, gap_cpp

from moire.examine import examine
from moire.judging import judge_lines
from moire.kernels import KERNELS, Kernel
from moire.loom import Cloth
from moire.mend import mend
from moire.model import Line, Scan, Screen, Weave
from moire.originals import printed_original, woven_original
from moire.plan import Scanning, plan
from moire.plans import Choice
from moire.prediction import Capture, Lines, predict
from moire.reasons import rate_in_words
from moire.sampling import Optics
from moire.scanner import Scanner, digitise, sample
from moire.units import lpi_to_lpcm, page_vector
from moire.verdict import ARTIFACTS
from moire.vision import viewing_condition

SEED = 20
Condition = Literal["monitor", "print"]
SIDE_IN = 1.5
GAIN_UM, LENS_PX = 25.0, 0.3
# Cells of whole device pixels: an interpreter prints no sub-harmonics of these.
WHOLE_CELLS = (
    (18, 6), (16, 0), (24, 0), (12, 12), (20, 20), (16, 8), (22, 6), (14, 4), (24, 10), (30, 8), (13, 13),
    (17, 0), (15, 15), (20, 5), (10, 10), (28, 12),
)  # fmt: skip
# Half cells: it does print sub-harmonics, which no ruling and angle foretells.
HALF_CELLS = ((133, 15), (133, 45), (150, 15), (120, 20), (110, 30), (90, 37))
RATES = (150, 160, 200, 240, 300, 400, 480, 600)
RESIZERS = {
    "opencv-nearest": cv2.INTER_NEAREST, "opencv-area": cv2.INTER_AREA, "opencv-linear": cv2.INTER_LINEAR,
    "opencv-cubic": cv2.INTER_CUBIC, "opencv-lanczos4": cv2.INTER_LANCZOS4,
}  # fmt: skip


@dataclass(frozen=True)
class Case:
    """A print and how it is scanned."""

    printed: Plate
    spot: str
    ppi: float
    turn: float
    seed: int

    @property
    def tone(self) -> float:
        return float(self.printed.ink.mean())

    @property
    def name(self) -> str:
        p = self.printed
        return (
            f"{p.ruling_lpi:.2f} lpi at {p.angle_deg:.2f}, {self.spot} {self.tone:.0%}, "
            f"{self.ppi:g} ppi, turn {self.turn:g}"
        )

    def screen(self, *, sheet_turned: bool = False) -> Screen:
        turn = self.turn if sheet_turned else 0.0
        return Screen(
            ruling_lpi=self.printed.ruling_lpi, ruling_lpi_sigma=0.0,
            ruling_lpcm=lpi_to_lpcm(self.printed.ruling_lpi), angle_deg=self.printed.angle_deg + turn,
            angle_deg_sigma=0.0, ink="black", shape="line" if self.spot == "line" else "dot",
        )  # fmt: skip

    def scan(self, ppi: float, turn: float | None = None) -> NDArray[np.uint8]:
        turn = self.turn if turn is None else turn
        pixels = scan_plates(
            {"black": self.printed}, ppi, turn_deg=turn, noise=0.003, seed=self.seed, gain_um=GAIN_UM,
            lens_px=LENS_PX,
        )  # fmt: skip
        # A turned frame shows the platen in its corners.
        lean = abs(math.cos(math.radians(turn))) + abs(math.sin(math.radians(turn)))
        cut = int(len(pixels) * (1 - 1 / lean) / 2) + 2
        return np.ascontiguousarray(pixels[cut:-cut, cut:-cut])

    def predicted(self, capture: Capture) -> Lines:
        original = printed_original(
            [self.screen()],
            shape=self.spot,
            spread_um=GAIN_UM,
            tones=(round(self.tone, 6),),  # type: ignore[arg-type]
        )
        lines = predict(original.patterns, capture)
        judged = judge_lines(lines, original, capture, viewing_condition("monitor"), scale_sigma=0.0)
        return judged.lines


def draw_case(number: int, *, half_cells: bool = False) -> Case:
    """Case `number`: ruling and angle in turn, the rest drawn."""
    rng = np.random.default_rng((SEED, number, half_cells))
    if half_cells:
        ruling, angle = HALF_CELLS[number % len(HALF_CELLS)]
    else:
        m, n = WHOLE_CELLS[number % len(WHOLE_CELLS)]
        ruling, angle = DEVICE_DPI / math.hypot(m, n), math.degrees(math.atan2(n, m))
    spot = str(rng.choice(["round", "round", "ellipse", "diamond", "line"]))
    if spot == "line" and angle % 45 == 0:
        # Along the device grid a line grows by whole rows of pixels: between them it is a row of dots.
        spot = "diamond"
    tone = float(rng.choice([0.15, 0.3, 0.5, 0.7, 0.85]))
    printed = plate(np.full((2, 2), tone, np.float32), ruling, angle, spot=spot, side_in=SIDE_IN)
    return Case(
        printed=printed, spot=spot, ppi=float(rng.choice(RATES)), seed=number,
        turn=float(rng.choice([0, 0, 1.3, -4, 7])),
    )  # fmt: skip


def direct(case: Case) -> Fit:
    capture = Capture(
        rates=np.array([[case.ppi] * 2]), turn_deg=case.turn, optics=Optics(lens_px=LENS_PX)
    )  # fmt: skip
    return compare(case.scan(case.ppi), case.predicted(capture), case.ppi)


def resize(pixels: NDArray[np.uint8], size: int, kernel: Kernel) -> NDArray[np.uint8]:
    """What the library named in the kernel itself makes of a picture."""
    if kernel in RESIZERS:
        return np.asarray(cv2.resize(pixels, (size, size), interpolation=RESIZERS[kernel]), np.uint8)
    method = Image.Resampling[kernel.removeprefix("pillow-").upper()]
    return np.asarray(Image.fromarray(pixels).resize((size, size), method), np.uint8)


def reduced(case: Case, kernel: Kernel, to_ppi: float) -> Fit:
    master = case.scan(case.ppi)
    size = round(len(master) * to_ppi / case.ppi)
    rate = case.ppi * size / len(master)
    capture = Capture(
        rates=np.array([[rate] * 2]), turn_deg=case.turn, optics=Optics(lens_px=LENS_PX),
        grid=(case.ppi, case.ppi), kernel=kernel, derivative=True,
    )  # fmt: skip
    return compare(resize(master, size, kernel), case.predicted(capture), rate)


def cloth(number: int, *, uneven: float = 0.0) -> tuple[str, Fit]:
    rng = np.random.default_rng((SEED, 7000 + number))
    weave = ("plain", "twill", "satin")[number % 3]
    ends, picks = float(rng.uniform(10, 26)), float(rng.uniform(10, 26))
    ppi = float(rng.choice([90, 96, 100, 120, 150, 200, 240, 300]))
    turn = float(rng.choice([0, 0, 2, -3]))
    name = f"{weave} {ends:.1f} x {picks:.1f} /cm, {ppi:g} ppi, turn {turn:g}"
    weaving = {"ends_per_cm": ends, "picks_per_cm": picks, "pattern": weave, "unevenness": uneven}

    def scan(dpi: float) -> NDArray[np.uint8]:
        # The swatch is larger than the frame, so that it fills it when turned.
        side = (1.15 if turn else 1.02) * (270 / ppi if ppi < 200 else 1.4)
        swatch = Cloth(width_in=side, height_in=side, dpi=dpi, seed=number, **weaving)  # type: ignore[arg-type]
        scanner = Scanner(ppi=(ppi, ppi), turn_deg=turn, noise=0.003)
        pixels = digitise(sample(swatch, scanner), scanner, np.random.default_rng(number))
        cut = max(2, int(0.06 * len(pixels))) if turn else 2
        return np.ascontiguousarray(pixels[cut:-cut, cut:-cut])

    original = woven_original(
        Weave(
            ends_per_cm=ends, picks_per_cm=picks, sigma_per_cm=0.0, ends_per_inch=2.54 * ends,
            picks_per_inch=2.54 * picks, pattern=weave, skew_deg=0.0,
        )  # type: ignore[arg-type]
    )  # fmt: skip
    capture = Capture(rates=np.array([[ppi, ppi]]), turn_deg=turn)
    lines = predict(original.patterns, capture)
    judged = judge_lines(lines, original, capture, viewing_condition("monitor"), scale_sigma=0.0)
    fit = compare(scan(1200), judged.lines, ppi)
    if fit.missed:
        # The loom draws on a fine grid of its own; a line that moves with it is not the cloth's.
        again = compare(scan(1370), judged.lines, ppi).missed
        fit = replace(
            fit, missed=tuple(s for s in fit.missed if any(gap_cpp(s.f_cpp, t.f_cpp) < 1e-3 for t in again))
        )  # fmt: skip
    return name, fit


@dataclass(frozen=True)
class Followed:
    """One recommendation, done: what was foretold and what an examination says, and the worst choice."""

    name: str
    free: bool
    foretold: str
    verdict: str
    beats_seen: int
    mended: str
    worst_shows: bool | None

    @property
    def line(self) -> str:
        shows = {None: "-", True: "yes", False: "no"}[self.worst_shows]
        free = "free" if self.free else "not free"
        cells = (self.name, free, self.foretold, self.verdict, self.beats_seen, self.mended, shows)
        return f"| {' | '.join(map(str, cells))} |"


def follow(case: Case, *, viewing: Condition, kernel: Kernel | None = None) -> Followed:
    """Scan (or reduce a 600 ppi master) as recommended, mend if need be; and as the worst choice says."""
    if kernel is None:
        rates, turns, master = (150, 200, 300, 400, 600, 1200), (0.0, 5.0), None
    else:
        rates, turns, master = (100, 110, 120, 133, 150, 170, 200, 240, 300), (case.turn,), (600.0, 600.0)
    made = plan(
        [case.screen()], rates=[(float(r), float(r)) for r in rates], turns=turns, shape=case.spot,  # type: ignore[arg-type]
        scanning=Scanning(optics=Optics(lens_px=LENS_PX), master=master, kernel=kernel or "opencv-area"),
        viewing=viewing,
    )  # fmt: skip
    best, worst = made.choices[0], made.choices[-1]

    def done(choice: Choice) -> Scan:
        if kernel is None:
            pixels = case.scan(choice.ppi[0], choice.turn_deg)
            pixels = np.ascontiguousarray(pixels[:1100, :1100])
        else:
            pixels = case.scan(600.0, choice.turn_deg)
            pixels = resize(pixels, round(len(pixels) * choice.ppi[0] / 600), kernel)
        return as_scan(pixels, choice.ppi[0])

    scan = done(best)
    found = examine(scan, viewing=viewing)
    own = printed_places(case, best)
    beats = [
        f for f in found.findings if f.kind in ARTIFACTS and f.visibility >= 1 and not is_own(f.lines, own)
    ]
    after = mend(scan, found).after.verdict if found.verdict == "mendable" else found.verdict
    shows = None
    foreseen = [b for b in worst.beats if b.source == "sampling" and b.visibility >= 1]
    if foreseen:
        listed = examine(done(worst), viewing=viewing)
        place = foreseen[0].frequency_cpi / worst.ppi[0]
        shows = any(
            abs(math.hypot(li.fx_cpp, li.fy_cpp) - place) < 0.004 and f.visibility >= 1
            for f in listed.findings
            for li in f.lines
        )
    return Followed(
        name=f"{case.name.rsplit(', ', 2)[0]}, {kernel or 'direct'}: {rate_in_words(best)}",
        free=best.visibility < 1, foretold=best.verdict, verdict=found.verdict, beats_seen=len(beats),
        mended=after, worst_shows=shows,
    )  # fmt: skip


def printed_places(case: Case, choice: Choice) -> list[NDArray[np.float64]]:
    """Where the screen and its orders lie unfolded in the scan, cycles per pixel."""
    basis = [
        np.array(page_vector(case.printed.ruling_lpi, case.printed.angle_deg + choice.turn_deg + t))
        for t in (0, 90)
    ]
    orders = [m * basis[0] + n * basis[1] for m in range(-12, 13) for n in range(-12, 13) if (m, n) != (0, 0)]
    return [f / choice.ppi[0] for f in orders if np.abs(f / choice.ppi[0]).max() < 0.5]


def is_own(lines: tuple[Line, ...], own: list[NDArray[np.float64]]) -> bool:
    """Whether the strongest line of a finding is the screen as printed."""
    if not lines:
        return False
    lead = max(lines, key=lambda li: li.amplitude)
    at = np.array([lead.fx_cpp, lead.fy_cpp])
    return any(float(np.hypot(*(at - f))) < 0.004 for f in own)


def row(name: str, fit: Fit) -> str:
    off = [abs(p - m) / max(m, 1e-6) for p, m in fit.swings if abs(p - m) > 0.3]
    return (
        f"| {name} | {len(fit.swings)} | {max(fit.gaps_cpi, default=0):.3f} | {max(off, default=0):.0%} | "
        f"{len(fit.missed)} | {len(fit.invented)} |"
    )


def table(rows: list[tuple[str, Fit]]) -> None:
    print("| case | lines | worst gap, cycles/inch | worst swing off beyond 0.3 L* | missed | invented |")
    print("|---|---|---|---|---|---|")
    for name, fit in rows:
        print(row(name, fit))
    fits = [fit for _, fit in rows]
    lines = sum(len(f.swings) for f in fits)
    gaps = [g for f in fits for g in f.gaps_cpi]
    fair = sum(abs(p - m) <= max(0.2 * m, 0.3) for f in fits for p, m in f.swings)
    print(
        f"\n{len(rows)} cases, {lines} predicted lines above visibility 1. Of {len(gaps)} of at least 0.1 L* "
        f"{sum(g < 0.1 for g in gaps)} lie within 0.1 cycles/inch; "
        f"{fair} within 20 % or 0.3 L*; {sum(len(f.missed) for f in fits)} lines missed in "
        f"{sum(bool(f.missed) for f in fits)} cases, {sum(len(f.invented) for f in fits)} invented."
    )


def tell(what: str, cases: int, viewing: Condition) -> None:
    """Recommendations followed, a row each and the counts."""
    kernels: tuple[Kernel, ...] = ("pillow-lanczos", "pillow-bicubic", "pillow-hamming", "opencv-area")
    print("| original: recommended | beats | foretold | examined | others seen | mended | worst shows |")
    print("|---|---|---|---|---|---|---|")
    done = []
    for n in range(cases):
        kernel = kernels[n % 4] if what == "reduced" else None
        done.append(follow(draw_case(n), viewing=viewing, kernel=kernel))
        print(done[-1].line, flush=True)
    free = [d for d in done if d.free]
    shown = [d.worst_shows for d in done if d.worst_shows is not None]
    print(
        f"\n{len(done)} plans, {len(free)} with a choice free of beats. Of these: verdict as foretold "
        f"{sum(d.foretold == d.verdict for d in free)}, no other artifact seen "
        f"{sum(d.beats_seen == 0 for d in free)}, sound at once {sum(d.verdict == 'sound' for d in free)}, "
        f"sound once mended {sum(d.mended == 'sound' for d in free)}. The worst choice shows its beat in "
        f"{sum(shown)} of {len(shown)}."
    )


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument(
        "what", choices=["prints", "half", "cloth", "uneven", "reductions", "followed", "reduced"]
    )
    parser.add_argument("--cases", type=int, default=48)
    parser.add_argument("--viewing", choices=["monitor", "print"], default="monitor")
    args = parser.parse_args()
    if args.what in ("followed", "reduced"):
        tell(args.what, args.cases, args.viewing)
        return
    rows: list[tuple[str, Fit]] = []
    for n in range(args.cases):
        if args.what in ("cloth", "uneven"):
            rows.append(cloth(n, uneven=0.15 if args.what == "uneven" else 0.0))
        elif args.what == "reductions":
            case = replace(draw_case(n), ppi=(300.0, 400.0, 600.0)[n % 3])
            kernel = KERNELS[n % len(KERNELS)]
            to = float(np.random.default_rng((SEED, n)).choice([0.5, 1 / 3, 0.75, 0.4, 0.61])) * case.ppi
            rows.append((f"{case.name}, {kernel} to {to:.0f}", reduced(case, kernel, to)))
        else:
            case = draw_case(n, half_cells=args.what == "half")
            rows.append((case.name, direct(case)))
        print(row(*rows[-1]), file=sys.stderr, flush=True)
    table(rows)


if __name__ == "__main__":
    main()
