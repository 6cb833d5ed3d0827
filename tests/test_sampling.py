"""Apertures, lenses and folds, against worked values."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from moire.folding import fold
from moire.sampling import Optics, capture_mtf, fold_all, turned
from moire.units import page_angle, page_vector

BOX = Optics(aperture_px=1.0, lens_px=0.0)


@pytest.mark.parametrize(
    ("lpi", "ppi", "mtf"),
    # Source: |sinc(f/R)| of a box of full fill (textbook), to 6 digits.
    [
        (65, 300, 0.924549), (85, 300, 0.873082), (85, 200, 0.728270), (133, 300, 0.706645),
        (150, 600, 0.900316), (150, 400, 0.784213), (150, 300, 0.636620), (150, 200, 0.300105),
        (150, 150, 0.0), (175, 600, 0.865825), (175, 400, 0.713585), (175, 300, 0.527081),
    ],
)  # fmt: skip
def test_aperture(lpi: float, ppi: float, mtf: float) -> None:
    assert capture_mtf(np.array([lpi / ppi, 0.0]), BOX) == pytest.approx(mtf, abs=1e-6)


@pytest.mark.parametrize(
    ("lpi", "angle", "ppi", "mtf"),
    # Source: sinc(kx/R) sinc(ky/R), to 6 digits.
    [
        (150, 45, 300, 0.650766), (150, 15, 300, 0.640153), (175, 45, 300, 0.551622),
        (133, 45, 200, 0.454236), (150, 45, 200, 0.356992), (150, 45, 150, 0.128298),
    ],
)  # fmt: skip
def test_aperture_at_an_angle(lpi: float, angle: float, ppi: float, mtf: float) -> None:
    assert capture_mtf(np.array(page_vector(lpi, angle)) / ppi, BOX) == pytest.approx(mtf, abs=1e-6)


def test_lens() -> None:
    """exp(-2 pi^2 sigma^2 f^2), the transform of a Gaussian."""
    lens = Optics(aperture_px=0.0, lens_px=0.5)
    assert capture_mtf(np.array([0.3, 0.4]), lens) == pytest.approx(np.exp(-(np.pi**2) / 8), rel=1e-12)


@given(
    st.lists(st.tuples(st.floats(-900, 900), st.floats(-900, 900)), min_size=1, max_size=5),
    st.floats(72, 1200),
    st.floats(72, 1200),
)
def test_many_folds_are_each_a_fold(f: list[tuple[float, float]], rx: float, ry: float) -> None:
    alias, order = fold_all(np.array(f), np.array([rx, ry]))
    for one, a, n in zip(f, alias, order, strict=True):
        expected, times = fold(np.array(one), (rx, ry))
        assert a == pytest.approx(expected)
        assert tuple(n) == times


@pytest.mark.parametrize(
    ("lpi", "angle", "ppi", "turn", "before", "after"),
    # Source: folding subtracts the same whole rate before and after a turn, so the alias moves as the
    # true vector does, 2 |k| sin(turn/2); worked to 6 digits, y up.
    [
        (150, 0, 160, 1.0, (-10.0, 0.0), (-10.022846, 2.617861)),
        (175, 15, 200, 0.5, (-30.962980, 45.293333), (-31.364671, 46.766716)),
        (133, 45, 100, 2.0, (-5.954798, -5.954798), (-9.294218, -2.729958)),
        (10, 0, 160, 1.0, (10.0, 0.0), (9.998477, 0.174524)),
    ],
)
def test_a_turn_moves_an_alias_as_far_as_its_source(
    lpi: float, angle: float, ppi: float, turn: float, before: tuple[float, float], after: tuple[float, float]
) -> None:
    true = np.array(page_vector(lpi, angle))
    rate = np.array([ppi, ppi])
    flip = np.array([1, -1])
    assert fold_all(true, rate)[0] * flip == pytest.approx(before, abs=1e-6)
    assert fold_all(turned(true, turn), rate)[0] * flip == pytest.approx(after, abs=1e-6)


def test_a_turn_is_counter_clockwise_as_seen() -> None:
    assert page_angle(*turned(np.array(page_vector(133, 15)), 7)) == pytest.approx(22)
