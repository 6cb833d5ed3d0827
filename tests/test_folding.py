"""Folding, against worked aliases and the rules of sampling."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from moire.folding import agree, fold, unfold
from moire.units import page_vector


@pytest.mark.parametrize(
    ("ruling", "angle", "ppi", "order", "alias"),
    # Source: k_a = k - (n Rx, m Ry), n = round(kx / Rx) (sampling theorem on a lattice, Petersen and
    # Middleton, Inf. Control 5 (1962) 279); figures computed from it, y up.
    [
        (150, 0, (200, 200), (1, 0), (-50.0, 0.0)),
        (150, 0, (160, 160), (1, 0), (-10.0, 0.0)),
        (175, 0, (300, 300), (1, 0), (-125.0, 0.0)),
        (300, 0, (400, 400), (1, 0), (-100.0, 0.0)),
        (150, 45, (300, 300), (0, 0), (106.066017, 106.066017)),
        (150, 45, (200, 200), (1, 1), (-93.933983, -93.933983)),
        (85, 45, (100, 100), (1, 1), (-39.895924, -39.895924)),
        (65, 45, (72, 72), (1, 1), (-26.038059, -26.038059)),
        (175, 15, (300, 300), (1, 0), (-130.962980, 45.293333)),
        (133, 15, (200, 200), (1, 0), (-71.531865, 34.422933)),
        (200, 15, (300, 300), (1, 0), (-106.814835, 51.763809)),
        (175, 75, (400, 400), (0, 0), (45.293333, 169.037020)),
        (120, 30, (300, 150), (0, 0), (103.923048, 60.0)),
    ],
)
def test_worked_aliases(
    ruling: float, angle: float, ppi: tuple[float, float], order: tuple[int, int], alias: tuple[float, float]
) -> None:
    fx, fy = page_vector(ruling, angle)
    seen, found = fold(np.array([fx, -fy]), ppi)
    assert found == order
    assert seen == pytest.approx(alias, abs=1e-6)


@given(st.floats(-800, 800), st.floats(-800, 800), st.floats(72, 600), st.floats(72, 600))
def test_alias_is_inside_the_grid_and_differs_by_whole_rates(
    fx: float, fy: float, rx: float, ry: float
) -> None:
    alias, order = fold(np.array([fx, fy]), (rx, ry))
    assert -rx / 2 - 1e-6 <= alias[0] <= rx / 2 + 1e-6
    assert -ry / 2 - 1e-6 <= alias[1] <= ry / 2 + 1e-6
    assert alias + np.array(order) * (rx, ry) == pytest.approx([fx, fy], abs=1e-6)


@given(st.floats(10, 400), st.floats(0, 90), st.floats(100, 600))
def test_a_quarter_turn_commutes_with_folding_on_an_even_grid(
    ruling: float, angle: float, ppi: float
) -> None:
    """So orthogonal, equal vectors do not prove that nothing folded."""
    k1, k2 = np.array(page_vector(ruling, angle)), np.array(page_vector(ruling, angle + 90))
    a1, _ = fold(k1, (ppi, ppi))
    a2, _ = fold(k2, (ppi, ppi))
    turned = np.array([a1[1], -a1[0]])
    gap = np.abs(turned - a2)
    assert np.minimum(gap, np.abs(gap - ppi)) == pytest.approx([0, 0], abs=1e-6)


@pytest.mark.parametrize("ruling", [85.0, 133.0, 150.0])
def test_candidates_of_an_unfolded_screen_name_it_first(ruling: float) -> None:
    k = np.array(page_vector(ruling / 600, 45.0))
    options = unfold(k, (600, 600), contrast=0.8)
    assert options[0].order == (0, 0)
    assert options[0].ruling_lpi == pytest.approx(ruling)
    assert sum(o.probability for o in options) == pytest.approx(1)


def test_candidates_of_a_folded_screen_hold_the_true_one() -> None:
    true = np.array(page_vector(150, 0))
    alias, order = fold(true, (200, 200))
    options = unfold(alias / 200, (200, 200), contrast=0.05)
    match = [o for o in options if o.order == order]
    assert match[0].ruling_lpi == pytest.approx(150)
    assert match[0] is options[0]


def test_remaining_contrast_tells_direct_from_folded() -> None:
    """A folded screen was blurred at its true frequency, so it cannot be strong."""
    k = np.array(page_vector(67 / 200, 0))
    strong = unfold(k, (200, 200), contrast=0.7)
    weak = unfold(k, (200, 200), contrast=0.08)
    assert strong[0].ruling_lpi == pytest.approx(67)
    assert weak[0].ruling_lpi == pytest.approx(133)


def test_inks_of_one_print_agree_on_a_ruling() -> None:
    """Three inks 30 degrees apart at 175 lpi and 200 ppi: only the true orders share a ruling."""
    seen = [fold(np.array(page_vector(175, a)), (200, 200))[0] / 200 for a in (15, 45, 75)]
    apart = [unfold(k, (200, 200)) for k in seen]
    together = agree(apart)
    assert [options[0].ruling_lpi for options in together] == pytest.approx([175] * 3, rel=1e-6)
    for before, after in zip(apart, together, strict=True):
        assert sum(o.probability for o in after) == pytest.approx(1)
        assert len(after) == len(before)


def test_one_screen_has_nobody_to_agree_with() -> None:
    alone = [unfold(np.array(page_vector(0.3, 20)), (300, 300))]
    assert agree(alone) == tuple(alone)
