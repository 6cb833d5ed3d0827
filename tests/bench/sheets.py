"""Prints of benchmarks and their scans, kept between runs in a folder if asked."""

from __future__ import annotations

import pickle
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import cv2
import numpy as np
from numpy.typing import NDArray
from subjects import SEEDS, subject

from moire.folding import USUAL_RULINGS_LPI
from moire.press import Print
from moire.proof import ScreenOrder, print_sheet
from moire.scanner import Scanner, digitise, sample

INKS = ("cyan", "magenta", "yellow", "black")
SPOTS = ("round", "ellipse", "diamond", "square")
# Ink, ruling, angle in the scan, dot shape, mean coverage: as printed.
Layer = tuple[str, float, float, str, float]
Scans = dict[tuple[float, int | None], NDArray[np.uint8]]


def draw_print(kind: str, which: str, number: int) -> Print:
    """Print `number` of a set: ``one`` ink at any angle, ``four`` inks, or the ``singular`` set."""
    rng = np.random.default_rng(SEEDS[which] + number + (0 if kind == "one" else 5000))
    picture = subject(which, number, rng)
    spot = SPOTS[int(rng.integers(4))]
    if kind == "one":
        ink = "black" if rng.random() < 0.6 else str(rng.choice(INKS[:3]))
        orders = [(float(rng.uniform(65, 200)), float(rng.uniform(0, 90)), ink)]
    elif kind == "four":
        ruling, turn = float(rng.uniform(85, 180)), float(rng.uniform(-8, 8))
        angles = (15, 75, 0, 45) if number % 2 else (75, 15, 0, 45)
        orders = [
            (ruling * float(rng.uniform(0.985, 1.015)), a + turn + float(rng.normal(0, 0.2)), ink)
            for a, ink in zip(angles, INKS, strict=True)
        ]
        orders[2] = (orders[2][0] * float(rng.choice([1.0, 1.06, 1.12])), orders[2][1], "yellow")
    else:
        ruling = float(rng.uniform(85, 180))
        orders = [(ruling, a, ink) for a, ink in zip((15, 75, 0, 45), INKS, strict=True)]
    return _print(picture, orders, spot, rng, 1.5, number)


def scan_sheet(kind: str, which: str, number: int) -> tuple[list[Layer], Scans]:
    """A print at 300, 400 and 600 ppi, as PNG, JPEG 85 and JPEG 75, turned by up to 1.5 degrees."""
    sheet = draw_print(kind, which, number)
    rng = np.random.default_rng(SEEDS[which] + 9000 + number)
    turn = float(rng.uniform(-1.5, 1.5))
    optics = {"lens_px": float(rng.uniform(0.25, 0.5)), "noise": float(rng.uniform(0.003, 0.012))}
    return _layers(sheet, turn), _scans(sheet, (300, 400, 600), (None, 85, 75), turn_deg=turn, **optics)


def scan_fold(which: str, number: int) -> tuple[list[Layer], Scans]:
    """A print too fine for its scans at 150 to 300 ppi: usual screens and odd ones, one ink or four."""
    rng = np.random.default_rng(SEEDS[which] + 20000 + number)
    picture, spot = subject(which, number, rng), SPOTS[int(rng.integers(4))]
    usual, skew = rng.random() < 0.6, float(rng.normal(0, 1))
    if usual:
        ruling = float(rng.choice(USUAL_RULINGS_LPI)) * float(rng.normal(1, 0.006))
    else:
        ruling = float(rng.uniform(60, 200))
    if number % 2:
        base = skew if usual else float(rng.uniform(0, 30))
        angles = ((15, 75, 0, 45), (75, 15, 0, 45), (45, 75, 0, 15))[int(rng.integers(3))]
        orders = [
            (ruling * float(rng.uniform(0.985, 1.015)), a + base, ink)
            for a, ink in zip(angles, INKS, strict=True)
        ]
    else:
        angle = float(rng.choice([45, 45, 45, 0, 15, 75])) + skew if usual else float(rng.uniform(0, 90))
        orders = [(ruling, angle, "black" if rng.random() < 0.8 else str(rng.choice(INKS[:3])))]
    sheet = _print(picture, orders, spot, rng, 2.2, number)
    optics = {"lens_px": float(rng.uniform(0.25, 0.5)), "noise": float(rng.uniform(0.003, 0.012))}
    optics["aperture_px"] = float(rng.uniform(0.8, 1.1))
    return _layers(sheet, 0.0), _scans(sheet, (150, 200, 240, 300), (None,), **optics)


def scan_bent(which: str, number: int) -> tuple[list[Layer], Scans]:
    """A four-ink print at 300 and 400 ppi whose scale changes by 5 % over the frame."""
    sheet = draw_print("four", which, number)
    fine = sample(sheet, Scanner(ppi=(1200, 1200), lens_px=0.5))
    rows, columns = fine.shape[:2]
    y, x = np.mgrid[0:rows, 0:columns].astype(np.float32)
    u, v = x / columns - 0.5, y / rows - 0.5
    sign = 1 if number % 2 else -1
    bent_x = x + np.float32(0.025 * columns) * u * (sign * u + 0.5 * v)
    bent = cv2.remap(
        fine, bent_x, y + np.float32(0.0125 * rows) * v * v, cv2.INTER_CUBIC, borderMode=cv2.BORDER_REFLECT
    )
    out: Scans = {}
    for ppi in (300, 400):
        step = 1200 // ppi
        small = cv2.GaussianBlur(bent, (0, 0), 0.35 * step)
        small = cv2.resize(small, (columns // step, rows // step), interpolation=cv2.INTER_AREA)
        scanner = Scanner(ppi=(ppi, ppi), noise=0.006)
        out[ppi, None] = digitise(small, scanner, np.random.default_rng(1))
    return _layers(sheet, 0.0), out


def kept(
    folder: Path | None, name: str, make: Callable[[], tuple[list[Layer], Scans]]
) -> tuple[list[Layer], Scans]:
    """What `make` gives, read from a folder where an earlier run left it."""
    if folder is None:
        return make()
    path = folder / f"{name}.pkl"
    if not path.exists():
        folder.mkdir(parents=True, exist_ok=True)
        path.write_bytes(pickle.dumps(make()))
    return pickle.loads(path.read_bytes())  # type: ignore[no-any-return]


def _print(
    picture: NDArray[np.float32],
    orders: list[tuple[float, float, str]],
    spot: str,
    rng: np.random.Generator,
    side_in: float,
    number: int,
) -> Print:
    screens = tuple(ScreenOrder(ruling_lpi=r, angle_deg=a, ink=i, spot=spot) for r, a, i in orders)  # type: ignore[arg-type]
    spread, gain = float(rng.uniform(12, 35)), float(rng.uniform(0.05, 0.2))
    return print_sheet(
        picture, screens, width_in=side_in, height_in=side_in, spread_um=spread, gain=gain, seed=number
    )


def _layers(sheet: Print, turn: float) -> list[Layer]:
    return [
        (layer.ink, layer.ruling_lpi, layer.angle_deg + turn, layer.spot, float(layer.coverage.mean()))
        for layer in sheet.layers
    ]


def _scans(
    sheet: Print, rates: tuple[float, ...], qualities: tuple[int | None, ...], **optics: float
) -> Scans:
    out: Scans = {}
    for ppi in rates:
        scanner = Scanner(ppi=(ppi, ppi), **optics)  # type: ignore[arg-type]
        linear = sample(sheet, scanner)
        for quality in qualities:
            coded = replace(scanner, jpeg_quality=quality)
            out[ppi, quality] = digitise(linear, coded, np.random.default_rng(1))
    return out
