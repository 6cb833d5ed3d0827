"""Lines that vary slowly go into a few numbers a block and come back."""

import numpy as np
import pytest

from moire.waves import Waves, smooth

LINES = np.array([[0.13, 0.07], [-0.21, 0.3], [0.0, 0.45]])


def grating(shape: tuple[int, int], amplitudes: list[complex]) -> np.ndarray:
    y, x = np.mgrid[: shape[0], : shape[1]]
    waves = [
        2 * np.real(a * np.exp(2j * np.pi * (f[0] * x + f[1] * y)))
        for a, f in zip(amplitudes, LINES, strict=True)
    ]
    return np.sum(waves, axis=0).astype(np.float32)


@pytest.mark.parametrize("shape", [(240, 240), (203, 178)])
def test_steady_lines_are_read_and_put_back(shape: tuple[int, int]) -> None:
    given = [0.2 + 0.1j, -0.15j, 0.3]
    plane = grating(shape, given)
    waves = Waves(frequencies=LINES, shape=shape, step=6)
    found = smooth(waves.analyse(plane), 5)
    assert found[14:18, 14:18] == pytest.approx(
        np.broadcast_to(np.array(given, np.complex64), (4, 4, 3)), abs=2e-3
    )
    steady = np.broadcast_to(np.array(given, np.complex64), (*waves.grid, 3))
    assert waves.synthesise(steady) == pytest.approx(plane, abs=1e-4)


def test_an_amplitude_on_a_slope_is_put_back_without_steps() -> None:
    waves = Waves(frequencies=LINES[:1], shape=(60, 120), step=6)
    centres = 6 * np.arange(20) + 2.5
    ramp = np.broadcast_to((0.1 + 0.002 * centres).astype(np.complex64)[None, :, None], (10, 20, 1))
    y, x = np.mgrid[:60, :120]
    wanted = 2 * (0.1 + 0.002 * x) * np.cos(2 * np.pi * (0.13 * x + 0.07 * y))
    assert waves.synthesise(ramp)[:, 6:-6] == pytest.approx(wanted[:, 6:-6], abs=1e-4)


def test_block_means_count_what_is_beyond_the_border_as_nothing() -> None:
    waves = Waves(frequencies=LINES, shape=(5, 4), step=4)
    assert waves.means(np.ones((5, 4), np.float32))[:, 0] == pytest.approx([1, 0.25])
