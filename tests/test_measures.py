"""Measures say what was removed and what was kept."""

import cv2
import numpy as np
import pytest
import skimage.data
from skimage.color import deltaE_ciede2000, rgb2lab

from moire.measures import colour_shift, edge_energy, edge_widths, line_levels


def bars(blur: float) -> np.ndarray:
    page = np.full((300, 300), 90, np.float32)
    for x in range(30, 280, 60):
        page[40:260, x : x + 26] = 20
    return cv2.GaussianBlur(page, (0, 0), blur)


def test_line_level_is_its_amplitude() -> None:
    y, x = np.mgrid[0:384, 0:384]
    rng = np.random.default_rng(0)
    f = (0.21, 0.13)
    page = (60 + 3 * np.cos(2 * np.pi * (f[0] * x + f[1] * y)) + rng.normal(0, 0.5, x.shape)).astype(
        np.float32
    )
    amplitude, background, mean, _ = line_levels(page, np.array([f]), None, size=128)
    assert amplitude[0] == pytest.approx(3, rel=0.02)
    assert mean[0] == pytest.approx(60, rel=0.01)
    # A cosine's Hann tile holds noise of amplitude 2 sigma sqrt(sum w^2) / sum w = sigma 3 / N.
    assert background[0] == pytest.approx(0.5 * 3 / 128, rel=0.25)


def test_same_picture_keeps_everything() -> None:
    assert edge_energy(bars(1.0)[None], bars(1.0)[None]) == pytest.approx(1)
    before, after = edge_widths(bars(1.0), bars(1.0), period_px=3)
    assert before == after


def test_blur_shows_in_energy_and_in_width() -> None:
    """Source: the 10-90 % width of an edge blurred by a Gaussian is 2.563 sigma (normal quantiles)."""
    before, after = edge_widths(bars(1.0), bars(2.0), period_px=3)
    assert before == pytest.approx(2.563, abs=0.5)
    assert after == pytest.approx(5.126, abs=0.6)
    kept = edge_energy(bars(1.0)[None], bars(2.0)[None])
    assert kept is not None
    assert 0.2 < kept < 0.6


def test_a_flat_page_has_no_edges() -> None:
    flat = np.full((300, 300), 70, np.float32)
    assert edge_energy(flat[None], flat[None]) is None
    assert edge_widths(flat, flat, period_px=3) == (None, None)


def test_colour_shift_is_ciede2000() -> None:
    rgb = (skimage.data.coffee()[:64, :64] / 255).astype(np.float32)
    flat = np.broadcast_to(rgb.mean(axis=(0, 1)), rgb.shape).astype(np.float32)
    moved = np.clip(flat + np.float32([0.05, 0, -0.03]), 0, 1)
    expected = deltaE_ciede2000(rgb2lab(flat[:1, :1]), rgb2lab(moved[:1, :1]))[0, 0]
    mean, largest = colour_shift(255 * flat, 255 * moved, sigma_px=4)
    assert mean == pytest.approx(expected, abs=0.02)
    assert largest == pytest.approx(expected, abs=0.02)


def test_screening_alone_does_not_shift_colour() -> None:
    rng = np.random.default_rng(0)
    dots = (rng.random((256, 256, 1)) < 0.5).astype(np.float32)
    from moire.scanner import srgb_encode

    grey = np.full((256, 256, 1), float(srgb_encode(np.array(0.5))), np.float32)
    assert colour_shift(255 * dots, 255 * grey, sigma_px=12)[0] < 1.0
