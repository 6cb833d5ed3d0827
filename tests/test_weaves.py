"""Cloth is recognised, named and counted; what is no cloth is not."""

from functools import cache
from typing import Any

import cv2
import numpy as np
import pytest
import skimage.data

from moire.bindings import parse_binding
from moire.loom import Cloth, stripes
from moire.scanner import Scanner, digitise, sample
from moire.vision import lightness
from moire.weaves import find_threads, measure_weave

SETTS = {"plain": (16, 13), "basket2/2": (22, 18), "twill3/1S": (24, 17), "twill2/2Z": (20, 20),
         "twill2/1Z": (26, 20), "satin5/2": (30, 24), "satin8/3": (28, 22)}  # fmt: skip


@cache
def seen(pattern: str, ppi: float = 400, turn: float = 0.7, **cloth: Any) -> tuple[Cloth, Any]:
    ends, picks = SETTS[pattern]
    swatch = Cloth(
        pattern=pattern,
        **{
            "width_in": 1.0, "height_in": 1.0, "ends_per_cm": ends, "picks_per_cm": picks, "jitter": 0.03,
            "thickness": 0.08, "hair": 0.4, **cloth,
        },
    )  # fmt: skip
    scanner = Scanner(ppi=(ppi, ppi), turn_deg=turn)
    pixels = digitise(sample(swatch, scanner), scanner, np.random.default_rng(1))
    threads = find_threads(lightness(pixels.astype(np.float32)))
    return swatch, None if threads is None else measure_weave(threads, (ppi, ppi))


@pytest.mark.parametrize("pattern", sorted(SETTS))
def test_weave_is_named_and_counted(pattern: str) -> None:
    cloth, weave = seen(pattern)
    ends, picks = cloth.true_setts()
    assert weave.structure == parse_binding(pattern).structure
    assert weave.pattern == parse_binding(pattern).pattern
    assert weave.ends_per_cm == pytest.approx(ends, rel=0.005)
    assert weave.picks_per_cm == pytest.approx(picks, rel=0.005)
    assert weave.ends_per_inch == pytest.approx(2.54 * weave.ends_per_cm)


def test_binding_lines_at_half_the_sett_do_not_halve_the_count() -> None:
    """A coarse plain weave shows its (1/2, 1/2) lines far above its thread lines."""
    cloth, weave = seen("plain", warp=(0.05, 0.05, 0.1), weft=(0.8, 0.8, 0.7))
    assert weave.ends_per_cm == pytest.approx(cloth.true_setts()[0], rel=0.005)


def test_uneven_threads_are_counted_all_the_same() -> None:
    cloth, weave = seen("plain", jitter=0.1)
    ends, picks = cloth.true_setts()
    assert weave.ends_per_cm == pytest.approx(ends, rel=0.015)
    assert weave.picks_per_cm == pytest.approx(picks, rel=0.015)


@pytest.mark.parametrize("skew", [-3.0, 4.0])
def test_skew_is_told_apart_from_the_turn_of_the_sheet(skew: float) -> None:
    _, weave = seen("plain", turn=-2.0, skew_deg=skew, unevenness=0.0)
    assert weave.skew_deg == pytest.approx(skew, abs=0.15)


def test_bow() -> None:
    _, weave = seen("plain", bow=0.02, unevenness=0.0)
    assert weave.bow == pytest.approx(0.02, abs=0.004)


def test_stripes_and_checks_do_not_change_the_count() -> None:
    bands = stripes(12, (0.6, 0.1, 0.1), (0.7, 0.7, 0.65))
    cloth, weave = seen("twill2/2Z", warp_stripes=bands, weft_stripes=bands)
    assert weave.structure == "2/2 twill Z"
    assert weave.ends_per_cm == pytest.approx(cloth.true_setts()[0], rel=0.005)


def test_stripes_on_fine_cloth_do_not_make_lines_slip() -> None:
    """Where a dark stripe leaves a line faint its phase slips; lines that gain alike everywhere count."""
    bands = stripes(31, (0.6, 0.25, 0.2), (0.24, 0.1, 0.08))
    cloth, weave = seen("satin5/2", turn=-3.5, warp_stripes=bands, width_in=1.6)
    assert weave.ends_per_cm == pytest.approx(cloth.true_setts()[0], rel=0.005)


def test_coarse_cloth_of_equal_setts_is_no_screen() -> None:
    """Its threads stand out more than its binding, as no screen's sums do."""
    yarns = {"warp": (0.3, 0.25, 0.2), "weft": (0.35, 0.3, 0.25), "ends_per_cm": 8.2, "picks_per_cm": 8.2}
    cloth, weave = seen("plain", ppi=600, width_in=1.3, height_in=1.3, **yarns)
    assert weave.structure == "plain"
    assert weave.ends_per_cm == pytest.approx(cloth.true_setts()[0], rel=0.01)


def test_unequal_rates_are_taken_into_account() -> None:
    cloth = Cloth(width_in=1.2, height_in=1.2, ends_per_cm=16, picks_per_cm=13)
    scanner = Scanner(ppi=(400, 300))
    pixels = digitise(sample(cloth, scanner), scanner, np.random.default_rng(1))
    threads = find_threads(lightness(pixels.astype(np.float32)))
    assert threads is not None
    weave = measure_weave(threads, (400, 300))
    assert weave.ends_per_cm == pytest.approx(16, rel=0.005)
    assert weave.picks_per_cm == pytest.approx(13, rel=0.005)


@pytest.mark.parametrize("name", ["camera", "brick", "gravel", "page", "coins", "text", "cell", "grass"])
def test_what_is_no_cloth_is_not_called_so(name: str) -> None:
    picture = getattr(skimage.data, name)().astype(np.float32)
    assert find_threads(np.ascontiguousarray(picture)) is None


def test_noise_and_blank_sheets_are_no_cloth() -> None:
    noise = np.random.default_rng(0).normal(128, 20, (400, 400)).astype(np.float32)
    assert find_threads(noise) is None
    assert find_threads(np.full((400, 400), 200, np.float32)) is None
    assert find_threads(noise[:100, :100]) is None


def test_a_ruled_table_is_no_cloth() -> None:
    table = np.full((600, 600), 240, np.float32)
    table[::9] = 60
    table[:, ::14] = 60
    assert find_threads(table) is None


def test_a_knit_is_told_by_its_loops() -> None:
    cloth = Cloth(width_in=1.3, height_in=1.3, ends_per_cm=12, picks_per_cm=16, pattern="knit", jitter=0.03)
    scanner = Scanner(ppi=(500, 500), turn_deg=0.5)
    pixels = digitise(sample(cloth, scanner), scanner, np.random.default_rng(1))
    threads = find_threads(lightness(pixels.astype(np.float32)))
    assert threads is not None
    weave = measure_weave(threads, (500, 500))
    assert (weave.pattern, weave.structure) == ("knit", "single jersey")
    assert weave.ends_per_cm == pytest.approx(12, rel=0.005)
    assert weave.picks_per_cm == pytest.approx(16, rel=0.005)


def test_counts_at_five_places_and_their_range() -> None:
    cloth, weave = seen("plain")
    assert len(weave.places_per_cm) == 5
    ends = [e for e, _ in weave.places_per_cm]
    assert np.mean(ends) == pytest.approx(cloth.true_setts()[0], rel=0.01)
    low, high = weave.ends_range_per_cm
    assert low < weave.ends_per_cm < high


def test_a_map_shows_where_the_sett_changes() -> None:
    """Pictures of the same cloth at two scales side by side: the map tells one side from the other."""
    cloth = Cloth(width_in=1.0, height_in=1.6, ends_per_cm=16, picks_per_cm=16, jitter=0.02)
    scanner = Scanner(ppi=(400, 400))
    pixels = lightness(digitise(sample(cloth, scanner), scanner, np.random.default_rng(1)).astype(np.float32))
    dense = lightness(
        digitise(sample(cloth, Scanner(ppi=(380, 400))), scanner, np.random.default_rng(1)).astype(np.float32)
    )
    threads = find_threads(np.hstack([pixels, dense]))
    assert threads is not None
    rows = measure_weave(threads, (400, 400)).ends_map_per_cm
    left, right = (np.mean([row[i] for row in rows]) for i in (1, -2))
    assert left == pytest.approx(16, rel=0.015)
    assert right == pytest.approx(16 / 0.95, rel=0.015)


def test_the_user_says_which_threads_are_the_warp() -> None:
    cloth = Cloth(width_in=1.0, height_in=1.0, ends_per_cm=24, picks_per_cm=17, pattern="twill3/1S")
    scanner = Scanner(ppi=(400, 400))
    pixels = digitise(sample(cloth, scanner), scanner, np.random.default_rng(1))
    threads = find_threads(lightness(pixels.astype(np.float32)))
    assert threads is not None
    weave = measure_weave(threads, (400, 400), warp_runs="horizontal")
    assert weave.structure == "1/3 twill S"
    assert weave.picks_per_cm == pytest.approx(24, rel=0.005)


@pytest.mark.parametrize("slant", [0.05, 0.1])
def test_cloth_photographed_at_a_slant_is_followed(slant: float) -> None:
    """The far edge is smaller by twice the slant, so its threads lie closer: the range says so."""
    cloth = Cloth(width_in=1.5, height_in=1.5, ends_per_cm=16, picks_per_cm=14, jitter=0.02)
    scanner = Scanner(ppi=(400, 400))
    pixels = digitise(sample(cloth, scanner), scanner, np.random.default_rng(1))
    side = pixels.shape[0]
    a = slant * side
    corners = np.array([[0, 0], [side, 0], [side, side], [0, side]], np.float32)
    seen_at = np.array([[a, a], [side - a, a], [side, side], [0, side]], np.float32)
    tilted = cv2.warpPerspective(pixels, cv2.getPerspectiveTransform(corners, seen_at), (side, side))
    cut = round(a) + 2
    threads = find_threads(lightness(tilted[cut:, cut:-cut].astype(np.float32)))
    assert threads is not None
    low, high = measure_weave(threads, (400, 400)).ends_range_per_cm or (0, 0)
    assert low == pytest.approx(16, rel=0.03)
    # The range leaves out the outermost twentieth of the picture.
    assert high == pytest.approx(16 / (1 - 2 * slant), rel=0.045)


@pytest.mark.parametrize(("pattern", "turn"), [("plain", 30.0), ("twill2/2Z", -27.0), ("satin5/2", 38.0)])
def test_cloth_that_lies_askew_is_read_all_the_same(pattern: str, turn: float) -> None:
    ends, picks = SETTS[pattern]
    cloth = Cloth(
        width_in=1.6, height_in=1.6, ends_per_cm=ends, picks_per_cm=picks, pattern=pattern, jitter=0.03
    )
    scanner = Scanner(ppi=(400, 400), turn_deg=turn)
    pixels = digitise(sample(cloth, scanner), scanner, np.random.default_rng(1))
    inside = lightness(pixels.astype(np.float32))[130:-130, 130:-130]
    threads = find_threads(np.ascontiguousarray(inside))
    assert threads is not None
    weave = measure_weave(threads, (400, 400))
    assert weave.structure == parse_binding(pattern).structure
    assert weave.ends_per_cm == pytest.approx(ends, rel=0.01)
    assert weave.picks_per_cm == pytest.approx(picks, rel=0.01)


@pytest.mark.parametrize(("barrel", "tolerance"), [(0.06, 0.035), (0.12, 0.095)])
def test_cloth_through_a_barrel_lens_has_the_range_that_the_lens_makes(
    barrel: float, tolerance: float
) -> None:
    """A point r from the middle is seen where r (1 + k r^2) / (1 + k) was: threads crowd at the edges."""
    cloth = Cloth(width_in=1.6, height_in=1.6, ends_per_cm=16, picks_per_cm=14, jitter=0.02, dpi=1200)
    scanner = Scanner(ppi=(400, 400))
    pixels = digitise(sample(cloth, scanner), scanner, np.random.default_rng(1))
    half = pixels.shape[0] / 2
    y, x = (np.mgrid[: 2 * half, : 2 * half] - half) / half
    grown = (1 + barrel * (x**2 + y**2)) / (1 + barrel)
    seen_at = [((v * grown + 1) * half).astype(np.float32) for v in (x, y)]
    photograph = cv2.remap(pixels, *seen_at, cv2.INTER_CUBIC)
    inside = np.s_[32:-32, 32:-32]
    threads = find_threads(np.ascontiguousarray(lightness(photograph.astype(np.float32))[inside]))
    assert threads is not None
    local = 16 * (1 + barrel * (3 * x**2 + y**2)) / (1 + barrel)
    low, high = np.quantile(local[inside], [0.05, 0.95])
    found = measure_weave(threads, (400, 400)).ends_range_per_cm
    assert found == pytest.approx((low, high), rel=tolerance)
