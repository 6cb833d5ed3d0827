"""Cloth has the threads and the binding that its weave says."""

from dataclasses import replace

import numpy as np
import pytest

from moire.loom import PATTERNS, Cloth


def swatch(pattern: str) -> Cloth:
    return Cloth(
        width_in=2, height_in=2, ends_per_cm=20, picks_per_cm=20, pattern=pattern, unevenness=0, dpi=2032
    )  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("pattern", "n", "order", "level"),
    # Source: transform of the binding matrix (textbook): plain 1/1 has 0.5 at (1/2, 1/2), twill 2/2 has
    # 0.353553 at (1/4, 1/4) on one diagonal, satin of 5 has 0.2 at (1, 2)/5.
    [("plain", 2, (1, 1), 0.5), ("twill", 4, (1, 1), 0.353553), ("satin", 5, (2, 1), 0.2)],
)
def test_binding_matrix_spectrum(pattern: str, n: int, order: tuple[int, int], level: float) -> None:
    matrix = PATTERNS[pattern].astype(float)
    assert matrix.shape == (n, n)
    spectrum = np.abs(np.fft.fft2(matrix, norm="forward"))
    assert max(spectrum[order[1], order[0]], spectrum[-order[1], order[0]]) == pytest.approx(level, abs=1e-6)


def test_thread_lines_lie_at_the_sett() -> None:
    """20 threads/cm at 2032 px/inch is 40 px a thread."""
    cloth = swatch("plain").reflectance(0, 0, 800, 800)[..., 0]
    spectrum = np.abs(np.fft.fft2(cloth - cloth.mean()))
    assert spectrum[0, 20] > 50 * np.median(spectrum)
    assert spectrum[20, 0] > 50 * np.median(spectrum)
    assert spectrum[10, 10] > spectrum[0, 20] / 4


@pytest.mark.parametrize("pattern", ["plain", "twill", "satin"])
def test_unwoven_swatch_has_the_same_mean(pattern: str) -> None:
    cloth = swatch(pattern)
    woven = cloth.reflectance(0, 0, 1600, 1600).mean(axis=(0, 1))
    flat = replace(cloth, woven=False).reflectance(0, 0, 8, 8).mean(axis=(0, 1))
    assert woven == pytest.approx(flat, rel=0.02)
