"""Screens of a bent leaf, followed from tile to tile."""

import cv2
import numpy as np
import pytest
from prints import FOUR_INKS, as_scan, card_print

import moire
from moire.drift import DriftingLine, find_drifting_lines
from moire.scanner import Scanner, digitise, sample
from moire.spectrum import tile_spectrum
from moire.units import page_vector


def bent(drift: float) -> np.ndarray:
    """A lattice whose scale along x runs from 1 - drift/2 to 1 + drift/2."""
    y, x = np.mgrid[0:600, 0:700].astype(float)
    u = x / 700 - 0.5
    x = x + drift / 2 * 700 * u * u
    k1, k2 = (np.array(page_vector(0.24, a)) for a in (20, 110))
    page = 128 + 20 * sum(np.cos(2 * np.pi * (k[0] * x + k[1] * y)) for k in (k1, k2))
    return (page + np.random.default_rng(0).normal(0, 3, page.shape)).astype(np.float32)


def followed(page: np.ndarray) -> tuple[DriftingLine, ...]:
    grid = (page.shape[0] // 64 - 1, page.shape[1] // 64 - 1)
    return find_drifting_lines(tile_spectrum(page, size=128, pitch=64), grid)


@pytest.mark.parametrize("drift", [0.0, 0.02, 0.06])
def test_lines_are_followed_however_far_they_drift(drift: float) -> None:
    lines = followed(bent(drift))[:2]
    assert len(lines) == 2
    for line in lines:
        true = min(
            (np.array(page_vector(0.24, a)) for a in (20, 110)),
            key=lambda k: min(np.linalg.norm(line.f - k), np.linalg.norm(line.f + k)),
        )
        # The scale changes along x alone: a line drifts by its share of x.
        expected = drift * (true[0] / 0.24) ** 2
        assert line.drift == pytest.approx(expected, abs=0.2 * drift + 0.003)
        assert (
            min(np.linalg.norm(line.f - true), np.linalg.norm(line.f + true)) < 0.3 / 128 + 0.1 * drift * 0.24
        )
        assert line.weight.mean() > 0.9


def test_noise_has_no_lines_to_follow() -> None:
    noise = np.random.default_rng(1).normal(128, 10, (600, 700)).astype(np.float32)
    assert followed(noise) == ()


def test_a_bent_print_is_named_and_must_be_laid_flat() -> None:
    fine = sample(card_print(*FOUR_INKS, width_in=2.0), Scanner(ppi=(1200, 1200), lens_px=0.5))
    rows, columns = fine.shape[:2]
    y, x = np.mgrid[0:rows, 0:columns].astype(np.float32)
    u = x / columns - 0.5
    warped = cv2.remap(
        fine, x + np.float32(0.025 * columns) * u * u, y, cv2.INTER_CUBIC, borderMode=cv2.BORDER_REFLECT
    )
    small = cv2.resize(
        cv2.GaussianBlur(warped, (0, 0), 1.0), (columns // 3, rows // 3), interpolation=cv2.INTER_AREA
    )
    pixels = digitise(small, Scanner(ppi=(400, 400)), np.random.default_rng(0))
    found = moire.examine(as_scan(pixels, 400))
    inks = {f.screen.ink for f in found.findings if f.screen}
    assert {"cyan", "magenta", "black"} <= inks
    assert max(f.drift for f in found.findings) == pytest.approx(0.05, abs=0.02)
    assert found.verdict == "rescan"
    assert "flat" in found.advice[0]
