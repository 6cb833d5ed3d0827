"""Cloth has the threads and the binding that its weave says."""

from dataclasses import replace

import numpy as np
import pytest

from moire.loom import Cloth, stripes
from moire.yarns import lay_yarns


def swatch(pattern: str) -> Cloth:
    return Cloth(
        width_in=2, height_in=2, ends_per_cm=20, picks_per_cm=20, pattern=pattern, unevenness=0, dpi=2032
    )  # type: ignore[arg-type]


def test_thread_lines_lie_at_the_sett() -> None:
    """20 threads/cm at 2032 px/inch is 40 px a thread."""
    cloth = swatch("plain").reflectance(0, 0, 800, 800)[..., 0]
    spectrum = np.abs(np.fft.fft2(cloth - cloth.mean()))
    assert spectrum[0, 20] > 50 * np.median(spectrum)
    assert spectrum[20, 0] > 50 * np.median(spectrum)
    assert spectrum[10, 10] > spectrum[0, 20] / 4


ALL = ["plain", "basket2/2", "twill3/1Z", "twill2/2S", "satin5/2", "knit"]


@pytest.mark.parametrize("pattern", ALL)
def test_unwoven_swatch_has_the_same_mean(pattern: str) -> None:
    cloth = swatch(pattern)
    woven = cloth.reflectance(0, 0, 1600, 1600).mean(axis=(0, 1))
    flat = replace(cloth, woven=False).reflectance(0, 0, 8, 8).mean(axis=(0, 1))
    assert woven == pytest.approx(flat, rel=0.02)


@pytest.mark.parametrize("pattern", ["plain", "twill2/2S", "knit"])
def test_a_window_is_a_part_of_the_whole(pattern: str) -> None:
    cloth = replace(
        swatch(pattern), jitter=0.08, thickness=0.15, hair=0.7, skew_deg=3, bow=0.02, unevenness=0.2,
        warp_stripes=stripes(5, (0.6, 0.1, 0.1), (0.8, 0.8, 0.7)),
        figure=np.full((20, 30, 3), 0.5, np.float32),
    )  # fmt: skip
    whole = cloth.reflectance(100, 200, 300, 300)
    assert np.allclose(whole[50:150, 80:200], cloth.reflectance(180, 250, 120, 100), atol=2e-3)


@pytest.mark.parametrize("jitter", [0.0, 0.1])
def test_uneven_threads_keep_the_sett_over_the_sheet(jitter: float) -> None:
    ends, picks = replace(swatch("plain"), jitter=jitter, unevenness=0.3).true_setts()
    assert ends == pytest.approx(20, rel=1e-3)
    assert picks == pytest.approx(20, rel=2e-3)


def test_jitter_is_what_gaps_vary_by() -> None:
    yarns = lay_yarns(20, 50, jitter=0.1, thickness=0, rng=np.random.default_rng(1))
    gaps = np.diff(yarns.edges_cm)
    assert gaps.std() / gaps.mean() == pytest.approx(0.1, rel=0.1)


def test_the_weft_of_a_skewed_cloth_rises_to_the_right() -> None:
    """Three degrees: 50 picks' lines fall back by tan 3 deg of the width, counted at right angles."""
    cloth = replace(swatch("plain"), skew_deg=3)
    spectrum = np.abs(np.fft.fft2(cloth.reflectance(0, 0, 3200, 3200)[..., 0]))
    spectrum[:, 0] = 0
    row, column = np.unravel_index(int(np.argmax(spectrum[60:100, 1:10])), (40, 9))
    assert np.degrees(np.arctan2(column + 1, row + 60)) == pytest.approx(3, abs=0.4)


def test_stripes_have_their_threads() -> None:
    cloth = replace(swatch("plain"), warp_stripes=stripes(10, (1, 0, 0), (0, 0, 1)), weft=(0, 0, 0))
    columns = cloth.reflectance(0, 0, 1600, 400).mean(axis=0)
    assert (columns[:400, 2] == 0).all()
    assert (columns[400:800, 0] == 0).all()


def test_a_printed_figure_shows_on_the_cloth() -> None:
    figure = np.ones((2, 2, 3), np.float32)
    figure[0] = 0.1
    cloth = replace(swatch("plain"), figure=figure, woven=False)
    top, bottom = cloth.reflectance(0, 0, 4, 4), cloth.reflectance(0, 4060, 4, 4)
    assert top.mean() == pytest.approx(0.1 * bottom.mean(), rel=0.01)


def test_a_knit_has_wales_and_courses() -> None:
    knit = swatch("knit").reflectance(0, 0, 800, 800)[..., 0]
    spectrum = np.abs(np.fft.fft2(knit - knit.mean()))
    assert min(spectrum[0, 20], spectrum[20, 0], spectrum[20, 20]) > 50 * np.median(spectrum)
