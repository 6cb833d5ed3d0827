"""The contact sheet sorts, filters and leads to each scan's report; checked in a real browser."""

import json
import os
import re
import shutil
import time
from collections.abc import Iterator
from dataclasses import replace
from functools import partial
from itertools import pairwise
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest

import moire
from moire.contact import CROP_PX, has_pictures, worst_box
from moire.crew import processes
from moire.errors import OutputRefused
from moire.model import Screen
from moire.outcome import Outcome, Terms, failed
from moire.scanfile import read
from moire.sheet import check_sheet, render_sheet, write_sheet

BROWSER = shutil.which("chromium")
FLAGS = ["--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
         "--disable-background-networking", "--disable-component-update", "--disable-sync"]  # fmt: skip
DEMOS = Path(__file__).resolve().parents[1] / "demo_images"
HOSTILE = '</script><script>alert("x")</script>&\u2028\'.png'


@pytest.fixture(scope="module")
def batch(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path, list[Outcome]]:
    """Four demo scans and a torn one with a hostile name, examined with their pictures."""
    top = tmp_path_factory.mktemp("batch")
    scans, sheet = top / "scans", top / "sheet"
    for name in (
        "courier-leaf.png",
        "market-flyer.png",
        "harbour-postcard.png",
        "courier-leaf.unscreened.png",
    ):
        (scans / "post").mkdir(parents=True, exist_ok=True)
        shutil.copy(DEMOS / name, scans / "post")
    torn = scans / HOSTILE.replace("/", "_")
    torn.write_bytes((DEMOS / "market-flyer.png").read_bytes()[:4000])
    paths = sorted(p for p in scans.rglob("*.png"))
    outcomes = list(moire.examine_many(paths, executor=partial(processes, 2), sheet=str(sheet)))
    html = render_sheet(outcomes, folder=str(scans), sheet=str(sheet), notes=(HOSTILE,), made_at="now")
    write_sheet(html, str(sheet))
    return scans, sheet, outcomes


def test_every_scan_has_thumbnail_piece_and_report(batch: tuple[Path, Path, list[Outcome]]) -> None:
    _, sheet, outcomes = batch
    for outcome in outcomes:
        assert has_pictures(str(sheet), outcome.sha256) == (not outcome.error)
    stem = next(o for o in outcomes if o.file == "courier-leaf.png").sha256
    place = sheet / "scans" / stem[:2]
    thumb = cv2.imread(str(place / f"{stem}.jpg"))
    assert thumb is not None
    assert max(thumb.shape) == 240
    assert "courier-leaf.png" in (place / f"{stem}.html").read_text(encoding="utf-8")
    assert not list(sheet.rglob("*.part"))


def test_the_piece_is_the_scan_itself_where_the_pattern_is(batch: tuple[Path, Path, list[Outcome]]) -> None:
    _, sheet, outcomes = batch
    outcome = next(o for o in outcomes if o.file == "courier-leaf.png")
    scan = read(DEMOS / "courier-leaf.png")
    x, y, width, height = worst_box(scan, outcome, Terms())
    assert (width, height) == (CROP_PX, CROP_PX)
    piece = cv2.imread(str(sheet / "scans" / outcome.sha256[:2] / f"{outcome.sha256}.png"))
    assert np.array_equal(np.asarray(piece)[..., ::-1], scan.pixels[y : y + height, x : x + width])


def test_the_piece_is_from_where_the_pattern_is() -> None:
    from moire.examine import examine

    scan, plain = (read(DEMOS / f"courier-leaf{part}.png") for part in ("", ".unscreened"))
    pixels = np.where((np.indices(scan.pixels.shape[:2]) > [[[190]], [[260]]]).all(axis=0)[..., None],
                      scan.pixels, plain.pixels)  # fmt: skip
    half = replace(scan, pixels=pixels)
    found = examine(half)
    assert found.verdict == "mendable"
    left, top, width, height = worst_box(half, found, Terms())
    assert left + width / 2 > 260
    assert top + height / 2 > 190


def test_hostile_names_stay_text(batch: tuple[Path, Path, list[Outcome]]) -> None:
    page = (batch[1] / "index.html").read_text(encoding="utf-8")
    assert page.count("<script") == 2
    assert "<script>alert" not in page
    rows = json.loads(re.search(r'id="rows">(.*?)</script>', page, re.S)[1])  # type: ignore[index]
    assert rows[0][0] == HOSTILE.replace("/", "_")


def test_a_sheet_goes_where_it_harms_nothing(tmp_path: Path) -> None:
    scans = tmp_path / "scans"
    scans.mkdir()
    for place in (scans, tmp_path):
        with pytest.raises(OutputRefused, match="nothing is written"):
            check_sheet(str(place), str(scans))
    check_sheet(str(scans / "sheet"), str(scans))
    other = tmp_path / "web"
    other.mkdir()
    check_sheet(str(other), str(scans))
    (other / "index.html").write_text("<h1>Our house</h1>")
    with pytest.raises(OutputRefused, match="is not a contact sheet"):
        check_sheet(str(other), str(scans))
    (other / "index.html").unlink()
    write_sheet(render_sheet([], folder="/s", sheet=str(other)), str(other))
    check_sheet(str(other), str(scans))


def test_nothing_moves_by_itself(batch: tuple[Path, Path, list[Outcome]]) -> None:
    """WCAG 2.x success criterion 2.3.1 (three flashes): nothing flashes because nothing is animated."""
    page = (batch[1] / "index.html").read_text(encoding="utf-8")
    assert not re.search(r"animation|transition|@keyframes|<blink|<marquee|setInterval|setTimeout", page)
    assert not re.search(r"https?://", page)


@pytest.fixture(scope="module")
def browser() -> Iterator[Any]:
    if BROWSER is None and not os.environ.get("CI"):
        pytest.skip("chromium is not installed")
    from playwright.sync_api import sync_playwright

    with sync_playwright() as player:
        running = player.chromium.launch(executable_path=BROWSER, args=FLAGS)
        yield running
        running.close()


def open_sheet(browser: Any, path: Path, *, width: int = 1200, **media: str) -> Any:
    page = browser.new_page(viewport={"width": width, "height": 900})
    page.emulate_media(**media)
    page.messages, page.loads = [], []
    page.on("console", lambda m: page.messages.append(m.text))
    page.on("pageerror", lambda e: page.messages.append(str(e)))
    page.on("request", lambda r: page.loads.append(r.url))
    page.goto(path.as_uri())
    return page


@pytest.fixture
def page(browser: Any, batch: tuple[Path, Path, list[Outcome]]) -> Iterator[Any]:
    opened = open_sheet(browser, batch[1] / "index.html")
    yield opened
    assert opened.messages == []
    opened.close()


def names(page: Any) -> list[str]:
    return list(page.locator(".card h3").all_inner_texts())


def test_the_worst_come_first(page: Any) -> None:
    assert [n.removesuffix(".png") for n in names(page)[1:]] == [
        "market-flyer",
        "courier-leaf",
        "harbour-postcard",
        "courier-leaf.unscreened",
    ]
    assert "ends early" in page.locator(".card.unreadable").inner_text()
    assert page.get_by_role("status").inner_text() == "5 scans, page 1 of 1"


def test_it_sorts(page: Any) -> None:
    page.get_by_label("Order").select_option("by name")
    assert names(page)[1:] == sorted(names(page)[1:])
    page.get_by_label("Order").select_option("by ruling")
    assert names(page)[:3] == ["courier-leaf.png", "harbour-postcard.png", "market-flyer.png"]


def test_it_filters_by_verdict_kind_ruling_and_name(page: Any) -> None:
    for verdict in ("unreadable", "sound", "rescan"):
        page.get_by_label(verdict).uncheck()
    assert names(page) == ["courier-leaf.png", "harbour-postcard.png"]
    page.get_by_label("Ruling from").fill("100")
    assert names(page) == ["harbour-postcard.png"]
    page.get_by_label("Ruling from").fill("")
    page.get_by_label("to", exact=False).locator("visible=true").first.wait_for()
    page.locator("[name=to]").fill("100")
    assert names(page) == ["courier-leaf.png"]
    page.locator("[name=to]").fill("")
    page.get_by_label("Name or folder").fill("POST/harbour")
    assert names(page) == ["harbour-postcard.png"]
    page.get_by_label("Name or folder").fill("")
    page.get_by_label("rescan").check()
    page.get_by_label("Kind").select_option("alias")
    assert "market-flyer.png" in names(page)
    assert "scan" in page.get_by_role("status").inner_text()


def test_it_leads_to_each_scans_own_report(page: Any) -> None:
    page.get_by_role("link", name="Report of market-flyer.png").click()
    page.wait_for_load_state()
    assert page.locator("h1").inner_text() == "market-flyer.png"
    assert page.locator(".verdict h2").inner_text() == "Rescan"


def test_pictures_load_and_pieces_are_pixel_exact(page: Any) -> None:
    for image in page.locator(".card img").all():
        image.scroll_into_view_if_needed()
        page.wait_for_function("i => i.complete && i.naturalWidth > 0", arg=image.element_handle())
    piece = page.locator(".piece").first
    assert piece.evaluate("i => [i.width, i.height, i.naturalWidth]") == [192, 192, 192]
    assert piece.evaluate("i => getComputedStyle(i).imageRendering") == "pixelated"


@pytest.mark.parametrize("width", [360, 800, 1280])
def test_no_sideways_scrolling(browser: Any, batch: tuple[Path, Path, list[Outcome]], width: int) -> None:
    page = open_sheet(browser, batch[1] / "index.html", width=width)
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    assert page.messages == []
    assert all(url.startswith("file:") for url in page.loads)
    page.close()


def test_every_control_and_picture_has_a_name(page: Any) -> None:
    """WCAG 2.x 1.1.1, 1.3.1 and 4.1.2: an accessible name for each control, picture and region."""
    nameless = page.evaluate(
        """() => [...document.querySelectorAll("input, select, button, img, a, nav, form")].filter((e) =>
          !(e.labels && e.labels.length && e.labels[0].innerText.trim()) && !e.getAttribute("aria-label")
          && !(e.alt || "").trim() && !(["BUTTON", "A"].includes(e.tagName) && e.innerText.trim())
        ).map((e) => e.outerHTML)"""
    )
    assert nameless == []
    assert page.evaluate("document.documentElement.lang") == "en"
    levels = page.evaluate("[...document.querySelectorAll('h1,h2,h3')].map((e) => +e.tagName[1])")
    assert levels[0] == 1
    assert all(b - a <= 1 for a, b in pairwise(levels))
    ids = page.evaluate("[...document.querySelectorAll('[id]')].map((e) => e.id)")
    assert len(ids) == len(set(ids))


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_text_contrast_as_drawn(browser: Any, batch: tuple[Path, Path, list[Outcome]], scheme: str) -> None:
    """WCAG 2.x 1.4.3: at least 4.5 : 1, ratio (L1 + 0.05) / (L2 + 0.05), of every text on its ground."""
    page = open_sheet(browser, batch[1] / "index.html", color_scheme=scheme)
    worst = page.evaluate(
        """() => {
          const parse = (c) => c.match(/[\\d.]+/g).map(Number);
          const light = (c) => parse(c).slice(0, 3).map((v) => v / 255)
            .map((v) => v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4)
            .reduce((sum, v, i) => sum + v * [0.2126, 0.7152, 0.0722][i], 0);
          const ground = (e) => {
            for (; e; e = e.parentElement) {
              const c = getComputedStyle(e).backgroundColor;
              if (parse(c).length < 4 || parse(c)[3] > 0) return c;
            }
            return "rgb(255, 255, 255)";
          };
          const texts = [...document.querySelectorAll("body *")].filter((e) => e.offsetParent && !e.disabled
            && [...e.childNodes].some((n) => n.nodeType === 3 && n.data.trim()));
          return Math.min(...texts.map((e) => {
            const pair = [light(getComputedStyle(e).color), light(ground(e))].sort((a, b) => b - a);
            return (pair[0] + 0.05) / (pair[1] + 0.05);
          }));
        }"""
    )
    assert worst >= 4.5
    page.close()


def test_the_keyboard_does_it_all(page: Any) -> None:
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.className") == "skip"
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.value") == "unreadable"
    page.keyboard.press("Space")
    assert len(names(page)) == 4
    for _ in range(40):
        page.keyboard.press("Tab")
        assert page.evaluate("getComputedStyle(document.activeElement).outlineStyle") == "solid"
        if page.evaluate("document.activeElement.tagName") == "A":
            break
    page.keyboard.press("Enter")
    page.wait_for_load_state()
    assert page.locator("h1").inner_text() == "market-flyer.png"


def many(count: int) -> Iterator[Outcome]:
    plain = replace(failed("/s/0.png", "", Terms()), verdict="sound")
    from moire.model import Finding

    for i in range(count):
        screen = Screen(
            ruling_lpi=60 + i % 140, ruling_lpi_sigma=0.1, ruling_lpcm=(60 + i % 140) / 2.54, angle_deg=45,
            angle_deg_sigma=0.1, ink="black", shape="dot",
        )  # fmt: skip
        finding = Finding(
            kind="halftone", confidence=1, visibility=1, coverage=1, regions=(), lines=(), period_px=3,
            screen=screen,
        )  # fmt: skip
        path = f"/s/volume-{i // 500:03d}/leaf-{i:05d}.png"
        name = path.rsplit("/", 1)[1]
        yield replace(plain, path=path, file=name, sha256=f"{i:064x}", findings=(finding,) if i % 3 else ())


def test_ten_thousand_scans_open_at_once(browser: Any, tmp_path: Path) -> None:
    write_sheet(render_sheet(many(10_000), folder="/s", sheet=str(tmp_path)), str(tmp_path))
    assert (tmp_path / "index.html").stat().st_size < 4_000_000
    began = time.perf_counter()
    page = open_sheet(browser, tmp_path / "index.html")
    assert page.get_by_role("status").inner_text() == "10000 scans, page 1 of 209"
    assert time.perf_counter() - began < 5
    assert len(names(page)) == 48
    page.get_by_role("button", name="Next page").click()
    assert names(page)[0] == "leaf-00048.png"
    page.get_by_label("Name or folder").fill("volume-019")
    assert page.get_by_role("status").inner_text() == "500 scans, page 1 of 11"
    assert page.get_by_role("button", name="Previous page").is_disabled()
    page.locator("[name=from]").fill("199")
    assert set(page.locator(".card p").filter(has_text="lines/inch").all_inner_texts()) == {
        "halftone, black, 199.0 lines/inch (78.3/cm) at 45.0°"
    }
    assert page.messages == []
    page.close()


def test_a_small_screen_of_scans_is_light(browser: Any, batch: tuple[Path, Path, list[Outcome]]) -> None:
    """Pictures below the window are not loaded until they are scrolled to."""
    html = (batch[1] / "index.html").read_text(encoding="utf-8")
    rows = json.loads(re.search(r'id="rows">(.*?)</script>', html, re.S)[1])  # type: ignore[index]
    path = batch[1] / "long.html"
    many_rows = json.dumps(rows[1:] * 60)
    path.write_text(
        re.sub(r'(id="rows">).*?(</script>)', lambda m: m[1] + many_rows + m[2], html, flags=re.S)
    )
    page = open_sheet(browser, path)
    held = page.evaluate("[...document.querySelectorAll('.card img')].filter((i) => !i.complete).length")
    assert held > 20
    path.unlink()
    page.close()
