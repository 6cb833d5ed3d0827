"""Units and angles, against exact conversions and the vector rule of beats."""

import math

import pytest
from gratings import TWO_GRATINGS
from hypothesis import given
from hypothesis import strategies as st

from moire.units import angle_distance, fold_angle, lpcm_to_lpi, lpi_to_lpcm, page_angle, page_vector, to_cpi

angles = st.floats(-720, 720, allow_nan=False)


@pytest.mark.parametrize(
    ("lpi", "lpcm"),
    # Source: 1 inch = 2.54 cm exactly (International yard and pound agreement, 1959).
    [
        (55, 21.653543),
        (85, 33.464567),
        (100, 39.370079),
        (133, 52.362205),
        (150, 59.055118),
        (175, 68.897638),
    ],
)
def test_rulings_convert_exactly(lpi: float, lpcm: float) -> None:
    assert lpi_to_lpcm(lpi) == pytest.approx(lpcm, abs=5e-7)
    assert lpcm_to_lpi(lpi_to_lpcm(lpi)) == pytest.approx(lpi, rel=1e-14)


@pytest.mark.parametrize(("f1", "f2", "angle", "beat", "period_mm", "direction"), TWO_GRATINGS)
def test_difference_of_page_vectors_is_the_two_grating_beat(
    f1: float, f2: float, angle: float, beat: float, period_mm: float, direction: float
) -> None:
    a, b = page_vector(f1, 0), page_vector(f2, angle)
    d = (a[0] - b[0], a[1] - b[1])
    assert math.hypot(*d) == pytest.approx(beat, abs=1e-6)
    assert 25.4 / math.hypot(*d) == pytest.approx(period_mm, abs=1e-6)
    assert page_angle(*d) == pytest.approx(direction, abs=1e-6)


@given(angles, st.sampled_from([60.0, 90.0, 180.0]))
def test_folded_angle_is_in_range_and_equivalent(angle: float, period: float) -> None:
    folded = fold_angle(angle, period)
    assert 0 <= folded < period
    assert angle_distance(folded, angle, period) == pytest.approx(0, abs=1e-9)


@given(st.floats(1, 400), st.floats(-180, 180))
def test_page_vector_and_angle_are_inverse(ruling: float, angle: float) -> None:
    fx, fy = page_vector(ruling, angle)
    assert math.hypot(fx, fy) == pytest.approx(ruling)
    assert angle_distance(page_angle(fx, fy), angle, 360) == pytest.approx(0, abs=1e-6)


def test_y_counts_up_on_the_page_and_down_in_the_array() -> None:
    fx, fy = page_vector(100, 30)
    assert fx > 0
    assert fy < 0


def test_cycles_per_pixel_scale_by_each_axis() -> None:
    assert to_cpi(0.25, 0.5, (400, 200)) == (100, 100)
