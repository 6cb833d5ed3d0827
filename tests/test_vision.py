"""Visibility, against the published model's own check value and geometry."""

import numpy as np
import pytest
from skimage.color import rgb2lab

from moire.vision import contrast_sensitivity, cycles_per_degree, lightness, viewing_condition, visibility


def test_barten_check_value() -> None:
    """S(4) = 360.8691122, the docstring value of a colour-science library for Barten 1999.

    Its conditions: 60 degree field, sigma and retinal illuminance of a 2.1 mm pupil at 20 cd/m2.
    """
    pupil = 2.1
    sigma = np.hypot(0.5, 0.08 * pupil)
    retinal = np.pi * pupil**2 / 4 * 20 * (1 - (pupil / 9.7) ** 2 + (pupil / 12.4) ** 4)
    assert contrast_sensitivity(4, field_deg=60, sigma_arcmin=sigma, retinal_td=retinal) == pytest.approx(
        360.8691122, rel=1e-9
    )


@pytest.mark.parametrize(
    ("u", "s"),
    # Source: Barten 1999 at 100 cd/m2 and a 10 degree field, computed from the published formula.
    [
        (0.5, 227.6073),
        (1, 412.0778),
        (3, 658.5585),
        (5, 590.0034),
        (10, 340.3043),
        (20, 106.4682),
        (40, 6.8352),
    ],
)
def test_barten_at_the_condition_we_use(u: float, s: float) -> None:
    assert contrast_sensitivity(u) == pytest.approx(s, rel=1e-4)


@pytest.mark.parametrize(
    ("lpi", "mm", "cpd"),
    # Source: c/deg = f 2 d tan(0.5 deg), exact geometry.
    [(150, 350, 36.0756), (65, 350, 15.6328), (85, 300, 17.5225), (133, 600, 54.8350)],
)
def test_cycles_per_degree(lpi: float, mm: float, cpd: float) -> None:
    assert cycles_per_degree(lpi / 25.4, mm) == pytest.approx(cpd, abs=5e-5)


def test_lightness_agrees_with_a_reference_library() -> None:
    rng = np.random.default_rng(1)
    rgb = rng.integers(0, 256, (20, 30, 3)).astype(np.float32)
    assert np.abs(lightness(rgb) - rgb2lab(rgb / 255)[..., 0]).max() < 0.06


def test_visibility_grows_with_swing_and_falls_beyond_the_eyes_reach() -> None:
    monitor, hand = viewing_condition("monitor"), viewing_condition("print")
    weak = visibility((0.2, 0), 0.5, 60, viewing=monitor, ppi=(600, 600))
    assert visibility((0.2, 0), 1.0, 60, viewing=monitor, ppi=(600, 600)) == pytest.approx(2 * weak)
    assert visibility((0.45, 0), 0.5, 60, viewing=hand, ppi=(600, 600)) < 1 < weak
