"""Examinations of small prints with known truth, and of what holds no screen."""

import math

import cv2
import numpy as np
import pytest
import skimage.data
from prints import FOUR_INKS, as_scan, card_print, scanned

from moire.examine import examine
from moire.loom import Cloth
from moire.model import Examination, Finding
from moire.proof import ScreenOrder, print_sheet
from moire.scanner import Scanner, digitise, sample, srgb_decode
from moire.testcard import draw_leaf
from moire.units import angle_distance


def screens(found: Examination) -> list[Finding]:
    return [f for f in found.findings if f.kind in ("halftone", "alias")]


@pytest.mark.parametrize(
    ("ruling", "angle", "ppi", "turn"),
    [(85, 45, 300, 0), (127, 22, 400, 1.3), (62, 8, 300, -0.6), (151, 71, 600, 0)],
)
def test_one_black_screen(ruling: float, angle: float, ppi: float, turn: float) -> None:
    sheet = card_print(ScreenOrder(ruling_lpi=ruling, angle_deg=angle, ink="black"))
    found = examine(scanned(sheet, ppi, turn_deg=turn)[0])
    (one,) = screens(found)
    assert one.kind == "halftone"
    assert one.settled
    assert one.screen is not None
    assert one.screen.ink == "black"
    assert one.screen.ruling_lpi == pytest.approx(ruling, rel=2e-4)
    assert angle_distance(one.screen.angle_deg, angle + turn, 90) < 0.01
    assert one.screen.ruling_lpcm == pytest.approx(one.screen.ruling_lpi / 2.54)
    assert found.verdict == "mendable"
    assert found.visibility > 1


def test_four_inks_are_named_by_their_colour() -> None:
    scan, _ = scanned(card_print(*FOUR_INKS), 600)
    found = screens(examine(scan))
    named = {f.screen.ink: f.screen for f in found if f.screen}
    assert sorted(named) == ["black", "cyan", "magenta", "yellow"]
    assert len(found) == 4
    for order in FOUR_INKS:
        assert named[order.ink].ruling_lpi == pytest.approx(order.ruling_lpi, rel=2e-4)
        assert angle_distance(named[order.ink].angle_deg, order.angle_deg, 90) < 0.02


def test_mirrored_angles_do_not_fool_the_naming() -> None:
    """Cyan and magenta at each other's usual angles keep their own names."""
    swapped = (
        ScreenOrder(ruling_lpi=120, angle_deg=75, ink="cyan"),
        ScreenOrder(ruling_lpi=120, angle_deg=15, ink="magenta"),
    )
    found = screens(examine(scanned(card_print(*swapped), 400)[0]))
    angles = {f.screen.ink: f.screen.angle_deg for f in found if f.screen}
    assert angles["cyan"] == pytest.approx(75, abs=0.05)
    assert angles["magenta"] == pytest.approx(15, abs=0.05)


def test_uneven_rates_give_one_ruling() -> None:
    sheet = card_print(ScreenOrder(ruling_lpi=100, angle_deg=30, ink="black"))
    (one,) = screens(examine(scanned(sheet, (300.0, 400.0))[0]))
    assert one.screen is not None
    assert one.screen.ruling_lpi == pytest.approx(100, rel=5e-4)
    assert one.screen.angle_deg == pytest.approx(30, abs=0.03)


def test_a_folded_screen_is_an_alias_with_candidates() -> None:
    sheet = card_print(ScreenOrder(ruling_lpi=133, angle_deg=15, ink="black"))
    found = examine(scanned(sheet, 200)[0])
    (one,) = screens(found)
    assert one.kind == "alias"
    assert not one.settled
    assert one.candidates[0].ruling_lpi == pytest.approx(133, rel=1e-3)
    assert sum(c.probability for c in one.candidates) <= 1 + 1e-9


def test_without_a_rate_results_are_per_pixel() -> None:
    sheet = card_print(ScreenOrder(ruling_lpi=100, angle_deg=30, ink="black"))
    scan, _ = scanned(sheet, 300)
    found = examine(as_scan(scan.pixels, None))
    (one,) = screens(found)
    assert one.screen is None
    assert one.period_mm is None
    assert one.period_px == pytest.approx(3.0, rel=1e-4)
    assert any("--ppi" in line for line in found.advice)


def test_a_screen_on_part_of_the_page_has_a_region() -> None:
    sheet = card_print(ScreenOrder(ruling_lpi=100, angle_deg=45, ink="black"))
    scan, _ = scanned(sheet, 300)
    page = np.full((1400, 1200, 3), 236, np.uint8)
    page += np.random.default_rng(0).integers(0, 4, page.shape, dtype=np.uint8)
    page[300 : 300 + scan.height_px, 200 : 200 + scan.width_px] = scan.pixels
    (one,) = screens(examine(as_scan(page, 300)))
    assert 0.03 < one.coverage < 0.25
    x, y, w, h = one.regions[0]
    assert x >= 200 - 128
    assert y >= 300 - 128
    assert x + w <= 200 + scan.width_px + 128
    assert y + h <= 300 + scan.height_px + 128


def test_a_small_picture_on_a_text_page_shows_all_its_inks() -> None:
    """A sixtieth of the page: too few tiles for the page's own spectrum, enough for the picture's."""
    picture, _ = scanned(card_print(*FOUR_INKS, width_in=1.2), 300)
    text = cv2.resize(skimage.data.page(), (1100, 560))
    page = np.full((2480, 2480, 3), 236.0, np.float32)
    for y in range(120, 1900, 640):
        for x in (100, 1280):
            page[y : y + 560, x : x + 1100] = text[..., None]
    page[333 : 333 + picture.height_px, 1217 : 1217 + picture.width_px] = picture.pixels
    noisy = page + np.random.default_rng(0).normal(0, 1.5, page.shape)
    found = screens(examine(as_scan(np.clip(noisy, 0, 255).astype(np.uint8), 300)))
    assert {(f.screen.ink, round(f.screen.ruling_lpi)) for f in found} == {
        ("cyan", 133), ("magenta", 133), ("yellow", 141), ("black", 133),
    }  # fmt: skip
    assert all(f.coverage < 0.05 for f in found)


@pytest.mark.parametrize("name", ["astronaut", "camera", "coffee", "brick", "grass", "moon", "coins", "page"])
def test_clean_pictures_are_not_accused(name: str) -> None:
    found = examine(as_scan(getattr(skimage.data, name)(), 300))
    assert found.verdict == "sound"
    assert not screens(found)


def test_close_lines_of_text_are_no_banding() -> None:
    """A leaf printed small, 0.76 mm from line to line: strong where type stands, faint in flat places."""
    leaf = srgb_decode(draw_leaf()[:700, 40:740]).astype(np.float32)
    order = ScreenOrder(ruling_lpi=120, angle_deg=37, ink="black")
    sheet = print_sheet(leaf, (order,), width_in=1.5, height_in=1.5, gain=0.12, seed=11)
    assert {f.kind for f in examine(scanned(sheet, 300)[0]).findings} == {"halftone", "content"}


def test_cloth_is_a_weave_with_its_thread_count() -> None:
    cloth = Cloth(width_in=1.5, height_in=1.5, ends_per_cm=18, picks_per_cm=15)
    scanner = Scanner(ppi=(400, 400))
    scan = as_scan(digitise(sample(cloth, scanner), scanner, np.random.default_rng(0)), 400)
    found = examine(scan)
    assert found.verdict == "sound"
    (weave,) = [f.weave for f in found.findings if f.weave]
    assert weave.ends_per_cm == pytest.approx(18, rel=0.02)
    assert weave.picks_per_cm == pytest.approx(15, rel=0.02)
    assert weave.pattern == "plain"


@pytest.mark.parametrize("shape", [(1, 1), (1, 400), (127, 5000)])
def test_tiny_scans_are_referred_not_crashed(shape: tuple[int, int]) -> None:
    found = examine(as_scan(np.full(shape, 200, np.uint8), 300))
    assert found.verdict == "refer"
    assert found.findings == ()


@pytest.mark.parametrize("value", [0, 128, 255])
def test_one_colour_is_sound(value: int) -> None:
    assert examine(as_scan(np.full((400, 300, 3), value, np.uint8), 300)).verdict == "sound"


def test_sigmas_are_stated_and_small() -> None:
    (one,) = screens(
        examine(scanned(card_print(ScreenOrder(ruling_lpi=110, angle_deg=40, ink="black")), 400)[0])
    )
    assert one.screen is not None
    assert 0 < one.screen.ruling_lpi_sigma < 0.05
    assert 0 < one.screen.angle_deg_sigma < 0.03
    assert all(math.isfinite(line.sigma_cpp) for line in one.lines)


def test_inks_are_named_through_jpeg_with_halved_chroma() -> None:
    """At 4:2:0 a screen above a quarter of the rate keeps its luma in place and folds its chroma."""
    scan, _ = scanned(card_print(*FOUR_INKS), 500, jpeg_quality=85)
    named = {f.screen.ink: f.screen for f in screens(examine(scan)) if f.screen}
    assert sorted(named) == ["black", "cyan", "magenta", "yellow"]
    for order in FOUR_INKS:
        assert named[order.ink].ruling_lpi == pytest.approx(order.ruling_lpi, rel=2e-4)
