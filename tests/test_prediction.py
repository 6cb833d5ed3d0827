"""Predicted lines: where published beats lie, and what really rendered scans show."""

import sys
from pathlib import Path

import cv2
import numpy as np
import pytest
from gratings import TWO_GRATINGS
from postscript import needs_ghostscript
from prints import as_scan
from scanlines import compare, gap_cpp, level

sys.path.insert(0, str(Path(__file__).parent / "bench"))
from bench_plan import cloth, direct, draw_case, reduced

from moire.model import Screen
from moire.originals import printed_original
from moire.prediction import Capture, Lines, predict
from moire.press import InkLayer, Print
from moire.samples import rgb_codes
from moire.scanner import Scanner, digitise, sample
from moire.units import lpi_to_lpcm, page_angle
from moire.vision import lightness

FINE = Capture(rates=np.array([[4800.0, 4800.0]]))


def screen(lpi: float, angle: float, ink: str = "black", sigma: float = 0.0) -> Screen:
    return Screen(
        ruling_lpi=lpi, ruling_lpi_sigma=sigma, ruling_lpcm=lpi_to_lpcm(lpi), angle_deg=angle,
        angle_deg_sigma=0.0, ink=ink, shape="dot",
    )  # type: ignore[arg-type]  # fmt: skip


def lines(*screens: Screen, capture: Capture = FINE) -> Lines:
    return predict(printed_original(screens).patterns, capture)


def place(found: Lines, *parts: tuple[int, int, int]) -> np.ndarray:
    """True frequency of one line, y up, for either sign of its orders."""
    opposite = tuple((p, -m, -n) for p, m, n in parts)
    for sign, wanted in ((1, parts), (-1, opposite)):
        if wanted in found.parts:
            return sign * found.true_cpi[found.parts.index(wanted)] * (1, -1)
    raise AssertionError(f"{parts} is not among the lines")


@pytest.mark.parametrize(("f1", "f2", "angle", "beat", "period_mm", "direction"), TWO_GRATINGS)
def test_two_screens(
    f1: float, f2: float, angle: float, beat: float, period_mm: float, direction: float
) -> None:
    found = place(lines(screen(f1, 0), screen(f2, angle)), (0, 1, 0), (1, -1, 0))
    assert np.hypot(*found) == pytest.approx(beat, abs=1e-6)
    assert 25.4 / np.hypot(*found) == pytest.approx(period_mm, abs=2e-6)
    assert page_angle(found[0], -found[1]) == pytest.approx(direction, abs=1e-5)


@pytest.mark.parametrize(
    ("angle", "ratio"),
    # Source: 2 sin(a/2) for square screens of one ruling, 45 degrees the most (Amidror 2.3, worked).
    [(1, 0.017453), (5, 0.087239), (7.5, 0.130806), (15, 0.261052), (22.5, 0.390181), (30, 0.517638),
     (45, 0.765367)],
)  # fmt: skip
def test_equal_rulings(angle: float, ratio: float) -> None:
    found = lines(screen(100, 0), screen(100, angle))
    first = [
        np.hypot(*found.true_cpi[i])
        for i, parts in enumerate(found.parts)
        if len(parts) == 2 and all(abs(m) + abs(n) == 1 for _, m, n in parts)
    ]
    assert min(first) / 100 == pytest.approx(ratio, abs=1e-6)


@pytest.mark.parametrize(
    ("pair", "beat", "direction"),
    # Source: the same rule on a process set of 150 lpi, cyan 15, magenta 75, yellow 0, black 45 degrees.
    [
        (("cyan", "magenta"), 77.645714, 90.0),
        (("cyan", "black"), 77.645714, 120.0),
        (("magenta", "black"), 77.645714, 150.0),
        (("cyan", "yellow"), 39.157858, 97.5),
        (("magenta", "yellow"), 39.157858, 172.5),
        (("yellow", "black"), 114.805030, 112.5),
    ],
)
def test_process_set(pair: tuple[str, str], beat: float, direction: float) -> None:
    angles = {"cyan": 15, "magenta": 75, "yellow": 0, "black": 45}
    found = lines(*(screen(150, angles[ink], ink) for ink in pair))
    first = [
        found.true_cpi[i]
        for i, parts in enumerate(found.parts)
        if len(parts) == 2 and all(abs(m) + abs(n) == 1 for _, m, n in parts)
    ]
    slowest = min(first, key=lambda f: float(np.hypot(*f)))
    assert np.hypot(*slowest) == pytest.approx(beat, abs=1e-6)
    near = [f for f in first if np.hypot(*f) == pytest.approx(beat, abs=1e-6)]
    assert any(abs((page_angle(*f) - direction + 45) % 90 - 45) < 1e-6 for f in near)


@pytest.mark.parametrize(
    ("turned", "stretched", "residual", "period_mm"),
    # Source: f sqrt((1+e)^2 + 1 - 2 (1+e) cos d), the residual of a 0/30/60 set of which one screen is
    # turned by d and stretched by e (vector sum; singular state: Amidror 2.9), 150 lpi.
    [
        (0.05, 0.0, 0.130900, 194.041713),
        (0.1, 0.0, 0.261799, 97.020866),
        (0.5, 0.0, 1.308993, 19.404232),
        (1.0, 0.0, 2.617961, 9.702208),
        (0.0, 0.5, 0.750000, 33.866667),
        (0.0, 1.0, 1.500000, 16.933333),
        (0.1, 1.0, 1.522900, 16.678706),
    ],
)
def test_three_screens_near_their_singular_state(
    turned: float, stretched: float, residual: float, period_mm: float
) -> None:
    black = screen(150 * (1 + stretched / 100), 45 + turned)
    found = lines(screen(150, 15, "cyan"), screen(150, 75, "magenta"), black)
    three = [np.hypot(*found.true_cpi[i]) for i, parts in enumerate(found.parts) if len(parts) == 3]
    assert min(three) == pytest.approx(residual, abs=2e-6)
    assert 25.4 / min(three) == pytest.approx(period_mm, rel=1e-4)


@pytest.mark.parametrize(
    ("lpi", "angle", "ppi", "order", "seen"),
    # Source: k - (n Rx, m Ry) (Petersen and Middleton 1962), first or second vector, worked; y up.
    [
        (150, 0, (160, 160), (1, 0), (-10.0, 0.0)),
        (175, 15, (300, 300), (1, 0), (-130.962980, 45.293333)),
        (200, 15, (300, 300), (1, 0), (-106.814835, 51.763809)),
        (150, 45, (300, 300), (1, 1), (0.0, -87.867966)),
        (150, 45, (300, 300), (2, 0), (-87.867966, -87.867966)),
        (120, 30, (300, 150), (0, 1), (-60.0, -46.076952)),
        (150, 15, (300, 200), (0, 1), (-38.822857, -55.111126)),
    ],
)
def test_folded_orders(
    lpi: float, angle: float, ppi: tuple[float, float], order: tuple[int, int], seen: tuple[float, float]
) -> None:
    found = lines(screen(lpi, angle), capture=Capture(rates=np.array([ppi], float)))
    i = found.parts.index(((0, *order),))
    assert found.seen_cpi[0, i] * (1, -1) == pytest.approx(seen, abs=1e-6)


def test_many_rates_are_between_few() -> None:
    """A range is predicted at knots and joined: within a twentieth of what each rate has alone."""
    rates = np.stack([np.arange(200.0, 1000.0)] * 2, axis=1)
    many = lines(screen(133, 15), capture=Capture(rates=rates))
    for i in (33, 200, 487):
        one = lines(screen(133, 15), capture=Capture(rates=rates[i : i + 1]))
        strong = [j for j, a in enumerate(one.amplitude[0]) if a > 0.3]
        for j in strong:
            at = many.parts.index(one.parts[j])
            assert many.amplitude[i, at] == pytest.approx(one.amplitude[0, j], rel=0.05, abs=0.03)


@needs_ghostscript
@pytest.mark.parametrize("number", [1, 2])
def test_prints_of_an_interpreter(number: int) -> None:
    """Within 0.1 cycles/inch, within 20 % or 0.3 L*; tests/bench/bench_plan.py has the whole table."""
    fit = direct(draw_case(number))
    assert fit.swings
    assert fit.frequencies_hold
    assert fit.swings_hold
    assert not fit.invented


def tint(*screens: Screen, tone: float, spot: str = "round") -> Print:
    """A flat print of the product's own press."""
    flat = np.full((4, 4), tone, np.float32)
    layers = tuple(
        InkLayer(ink=s.ink, coverage=flat, ruling_lpi=s.ruling_lpi, angle_deg=s.angle_deg, spot=spot)  # type: ignore[arg-type]
        for s in screens
    )
    return Print(width_in=1.2, height_in=1.2, layers=layers, gain=0.0)


def tinted(*screens: Screen, tone: float, capture: Capture) -> Lines:
    return predict(printed_original(screens, tones=(tone,)).patterns, capture)


@pytest.mark.parametrize("spot", ["square", "disc"])
def test_a_scanner_that_interpolates(spot: str) -> None:
    """Sampled at 300 ppi and made 450 in linear light: folded lines, and images of the kernel."""
    one = screen(133, 20)
    drawn = "round" if spot == "disc" else spot
    sensor = sample(tint(one, tone=0.25, spot=drawn), Scanner(ppi=(300, 300)))
    made = cv2.resize(sensor, (540, 540), interpolation=cv2.INTER_LINEAR)
    pixels = digitise(made, Scanner(ppi=(450, 450), noise=0.002), np.random.default_rng(1))
    capture = Capture(rates=np.array([[450.0, 450.0]]), grid=(300, 300), kernel="opencv-linear")
    found = predict(printed_original([one], tones=(0.25,), shape=spot).patterns, capture)  # type: ignore[arg-type]
    fit = compare(np.ascontiguousarray(pixels[4:-4, 4:-4]), found, 450)
    assert len(fit.swings) > 4
    assert found.image[found.amplitude[0].argsort()[-8:]].any()
    assert fit.frequencies_hold
    assert fit.swings_hold


@pytest.mark.parametrize("ppi", [200, 300, 450])
def test_rosettes_of_two_inks_and_their_folds(ppi: int) -> None:
    inks = (screen(133, 15, "cyan"), screen(120, 48, "magenta"))
    scanner = Scanner(ppi=(ppi, ppi), noise=0.002)
    pixels = digitise(sample(tint(*inks, tone=0.4), scanner), scanner, np.random.default_rng(2))
    found = tinted(*inks, tone=0.4, capture=Capture(rates=np.array([[ppi, ppi]], float)))
    plane = lightness(rgb_codes(as_scan(pixels, None)))
    pairs = [i for i, parts in enumerate(found.parts) if len(parts) == 2 and found.amplitude[0, i] > 0.4]
    assert len(pairs) >= 2
    for i in pairs:
        near = [gap_cpp(found.seen_cpi[0, i] / ppi, f / ppi) for f in found.seen_cpi[0]]
        if sorted(near)[1] > 0.02:
            measured, _ = level(plane, found.seen_cpi[0, i] / ppi)
            assert found.amplitude[0, i] == pytest.approx(measured, rel=0.2, abs=0.3)


@pytest.mark.parametrize("number", [0, 2])
def test_cloth(number: int) -> None:
    _, fit = cloth(number)
    assert fit.swings
    assert fit.frequencies_hold
    assert fit.swings_hold


@needs_ghostscript
def test_a_reduction_by_a_library_itself() -> None:
    fit = reduced(draw_case(4), "pillow-bicubic", 220.0)
    assert fit.swings
    assert fit.frequencies_hold
    assert fit.swings_hold
