"""Mending: closer to the truth than any blur, edges and colour kept, the rest untouched."""

from dataclasses import replace
from pathlib import Path

import cv2
import numpy as np
import pytest
import skimage.data
from numpy.typing import NDArray
from prints import FOUR_INKS, as_scan, card_print, scanned

from moire.examine import examine
from moire.mend import mend
from moire.model import Scan
from moire.proof import ScreenOrder
from moire.scanfile import read
from moire.scanner import srgb_decode, srgb_encode

DEMOS = Path(__file__).resolve().parents[1] / "demo_images"
MENDABLE = ("harbour-postcard", "courier-leaf", "cookery-magazine")


def psnr(a: NDArray[np.float32], b: NDArray[np.float32]) -> float:
    return float(-10 * np.log10(np.mean((np.clip(a, 0, 1) - b) ** 2)))


def best_gaussian(scan: NDArray[np.float32], truth: NDArray[np.float32]) -> float:
    """PSNR of the Gaussian blur whose width was chosen with the truth, in sRGB or linear light."""
    linear = srgb_decode(scan).astype(np.float32)
    sigmas = np.geomspace(0.35, 5, 20)
    blurred = [cv2.GaussianBlur(scan, (0, 0), s) for s in sigmas]
    blurred += [srgb_encode(cv2.GaussianBlur(linear, (0, 0), s)).astype(np.float32) for s in sigmas]
    return max(psnr(b, truth) for b in blurred)


def edge_energy(result: NDArray[np.float32], truth: NDArray[np.float32]) -> float:
    """Gradient energy on the truth's strongest edges over the truth's own."""
    energies = []
    for p in (result.mean(axis=2), truth.mean(axis=2)):
        gx, gy = cv2.Sobel(p, cv2.CV_32F, 1, 0), cv2.Sobel(p, cv2.CV_32F, 0, 1)
        energies.append(gx**2 + gy**2)
    strong = energies[1] >= np.quantile(energies[1], 0.97)
    return float(energies[0][strong].sum() / energies[1][strong].sum())


@pytest.mark.parametrize("name", MENDABLE)
def test_demo_scans_come_closer_to_their_truth_than_any_gaussian(name: str) -> None:
    scan, truth = read(DEMOS / f"{name}.png"), read(DEMOS / f"{name}.unscreened.png")
    target = (truth.pixels / 255).astype(np.float32)
    mended = (mend(scan).scan.pixels / 255).astype(np.float32)
    assert psnr(mended, target) > best_gaussian((scan.pixels / 255).astype(np.float32), target) + 1


def test_text_edges_keep_their_energy() -> None:
    """The leaf's strongest edges are its letters, over white and over tints."""
    scan, truth = read(DEMOS / "courier-leaf.png"), read(DEMOS / "courier-leaf.unscreened.png")
    mended = (mend(scan).scan.pixels / 255).astype(np.float32)
    assert 0.90 <= edge_energy(mended, (truth.pixels / 255).astype(np.float32)) <= 1.1


@pytest.fixture(scope="module")
def four() -> Scan:
    return scanned(card_print(*FOUR_INKS, width_in=1.2), 400)[0]


def test_measures_agree_with_what_was_done(four: Scan) -> None:
    done = mend(four)
    m = done.measures
    fundamentals = [line.removed_db for line in m.lines if line.kind == "halftone"]
    assert min(fundamentals) > 3
    assert np.median(fundamentals) > 15
    assert m.visibility_after < 0.25 * m.visibility_before
    assert m.colour_shift_mean < 0.5
    assert m.clipped_share < 0.01
    assert m.edge_energy_ratio is not None
    assert 0.7 < m.edge_energy_ratio < 1.2


def test_the_master_is_not_touched(four: Scan) -> None:
    before = four.pixels.copy()
    done = mend(four)
    assert (four.pixels == before).all()
    assert done.scan is not four
    assert done.scan.sha256 != four.sha256


def test_the_same_recipe_gives_the_same_bytes(four: Scan) -> None:
    one = mend(four)
    again = mend(four, recipe=one.recipe)
    assert (one.scan.pixels == again.scan.pixels).all()


def test_strength_trades_openly(four: Scan) -> None:
    none, half, full = (mend(four, strength=s).scan.pixels.astype(int) for s in (0.0, 0.5, 1.0))
    assert (none == four.pixels).all()
    assert np.abs(half - (full + four.pixels) / 2).max() <= 1


def test_a_clean_photograph_comes_back_as_it_was() -> None:
    photo = as_scan(skimage.data.astronaut(), 300)
    assert (mend(photo).scan.pixels == photo.pixels).all()


def test_paper_beside_a_screen_is_untouched() -> None:
    scan, _ = scanned(card_print(ScreenOrder(ruling_lpi=100, angle_deg=45, ink="black")), 300)
    page = np.full((900, 1000, 3), 232, np.uint8)
    page += np.random.default_rng(0).integers(0, 6, page.shape, dtype=np.uint8)
    page[40 : 40 + scan.height_px, 40 : 40 + scan.width_px] = scan.pixels
    done = mend(as_scan(page, 300))
    away = np.ones(page.shape[:2], bool)
    away[: 40 + scan.height_px + 40, : 40 + scan.width_px + 40] = False
    changed = np.abs(done.scan.pixels.astype(int) - page)[away]
    assert changed.max() <= 1
    assert done.measures.untouched_share > 0.98


def test_keep_and_only(four: Scan) -> None:
    assert (mend(four, keep=("halftone", "rosette")).scan.pixels == four.pixels).all()
    assert not [r for r in mend(four, only=("banding",)).recipe.removals if r.kind == "halftone"]


def test_sixteen_bits_stay_sixteen(four: Scan) -> None:
    deep = replace(four, pixels=four.pixels.astype(np.uint16) * 257, bit_depth=16)
    done = mend(deep, quick=True)
    shallow = mend(four, quick=True)
    assert done.scan.pixels.dtype == np.uint16
    assert np.abs(done.scan.pixels / 257 - shallow.scan.pixels).max() <= 1


def test_grey_and_bilevel_scans() -> None:
    scan, truth = scanned(card_print(ScreenOrder(ruling_lpi=85, angle_deg=45, ink="black")), 300)
    grey = as_scan(scan.pixels.mean(axis=2).round().astype(np.uint8), 300)
    target = truth.mean(axis=2)
    assert psnr(mend(grey).scan.pixels / 255, target) > psnr(grey.pixels / 255, target) + 10
    bilevel = replace(grey, pixels=np.where(grey.pixels > 110, 255, 0).astype(np.uint8), bit_depth=1)
    mended = mend(bilevel).scan
    assert mended.bit_depth == 8
    assert len(np.unique(mended.pixels)) > 50


def test_cmyk_plates_are_mended_one_by_one() -> None:
    scan, _ = scanned(card_print(*FOUR_INKS, width_in=1.0), 300)
    ink = 255 - scan.pixels
    cmyk = replace(scan, pixels=np.dstack([ink, np.zeros_like(ink[..., 0])]), mode="cmyk")
    done = mend(cmyk, quick=True)
    assert done.scan.pixels.shape == cmyk.pixels.shape
    assert done.measures.visibility_after < 0.5 * done.measures.visibility_before


def test_a_reduced_derivative_has_its_rate_and_no_screen(four: Scan) -> None:
    small = mend(four, to_ppi=150).scan
    assert small.ppi == (150, 150)
    assert small.width_px == round(four.width_px * 150 / 400)
    assert examine(small).verdict != "rescan"


def test_banding_is_mended() -> None:
    y = np.arange(512)[:, None, None]
    photo = np.repeat(skimage.data.moon()[..., None], 3, axis=2)
    banded = np.clip(photo + 3 * np.cos(2 * np.pi * y / 9.3), 0, 255).round().astype(np.uint8)
    done = mend(as_scan(banded, 300))
    assert [r.kind for r in done.recipe.removals] == ["banding"]
    inner = (slice(8, -8), slice(8, -8))
    before = psnr(banded[inner] / 255, photo[inner] / 255)
    assert psnr(done.scan.pixels[inner] / 255, photo[inner] / 255) > before + 6


@pytest.mark.parametrize("shape", [(1, 1), (1, 300, 3), (200, 3), (130, 131, 3)])
def test_scans_of_any_size_come_back(shape: tuple[int, ...]) -> None:
    scan = as_scan(np.random.default_rng(0).integers(0, 256, shape, dtype=np.uint8), 300)
    done = mend(scan)
    assert (done.scan.pixels == scan.pixels).all()
    assert np.isfinite(done.measures.colour_shift_mean)
