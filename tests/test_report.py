"""The report is one page, complete, readable and still; checked in a real browser."""

import os
import re
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from prints import FOUR_INKS, card_print, scanned

from moire.errors import OutputRefused
from moire.examine import examine
from moire.mend import mend
from moire.model import Mending, Scan
from moire.report import render_report, with_sigma, write_report

BROWSER = shutil.which("chromium")
FLAGS = ["--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
         "--disable-background-networking", "--disable-component-update", "--disable-sync"]  # fmt: skip


@pytest.fixture(scope="module")
def master() -> Scan:
    return scanned(card_print(*FOUR_INKS, width_in=1.2), 400)[0]


@pytest.fixture(scope="module")
def mending(master: Scan) -> Mending:
    return mend(master, quick=True)


@pytest.fixture(scope="module")
def html(master: Scan, mending: Mending) -> str:
    return render_report(
        master=master,
        before=mending.before,
        mending=mending,
        derivative_name="out.png",
        derivative_sha256="ab" * 32,
    )


def test_the_page_loads_nothing_from_elsewhere(html: str) -> None:
    assert not re.search(r"https?://", html)
    for value in re.findall(r'(?:src|href)="([^"]*)"', html):
        assert value.startswith(("data:", "#"))
    assert "default-src 'none'" in html


def test_every_picture_has_an_alternative(html: str) -> None:
    images = re.findall(r"<img [^>]*>", html)
    assert len(images) >= 4
    assert all(re.search(r'alt="[^"]+"', i) for i in images)
    assert all("aria-label=" in svg for svg in re.findall(r"<svg [^>]*>", html))


def test_nothing_moves_by_itself(html: str) -> None:
    """WCAG 2.x success criterion 2.3.1 (three flashes): nothing flashes because nothing is animated."""
    assert not re.search(r"animation|transition|@keyframes|<blink|<marquee|setInterval|setTimeout", html)


def test_it_says_what_was_found_removed_and_kept(html: str, mending: Mending) -> None:
    for word in (
        "cyan",
        "magenta",
        "yellow",
        "black",
        "not evidence",
        "keeper",
        "WCAG",
        "Barten",
        "CIEDE2000",
        "SHA-256",
    ):
        assert word in html
    assert mending.before.sha256 in html
    assert "ab" * 32 in html
    assert "moire.recipe" in html
    for finding in mending.before.findings:
        if finding.screen:
            assert f"{finding.screen.ruling_lpcm:.3f}" in html


def test_hostile_names_are_escaped(master: Scan) -> None:
    from dataclasses import replace

    name = '<script>alert("x")</script>.tif'
    page = render_report(master=master, before=replace(examine(master), file=name), mending=None)
    assert "<script>alert" not in page
    assert "&lt;script&gt;" in page


def test_an_examination_alone_has_no_wipe(master: Scan) -> None:
    page = render_report(master=master, before=examine(master), mending=None)
    assert 'id="wipe-range"' not in page
    assert "What was found" in page


def test_the_page_is_small(html: str) -> None:
    assert len(html) < 6_000_000


@pytest.mark.parametrize(
    ("value", "sigma", "text"),
    [
        (132.99871, 0.0021, "132.9987 ± 0.0021"),
        (85.2, 0.3, "85.20 ± 0.30"),
        (45.0, 2.0, "45.0 ± 2.0"),
        (9.0, 0.0, "9.00"),
    ],
)
def test_digits_follow_the_uncertainty(value: float, sigma: float, text: str) -> None:
    assert with_sigma(value, sigma) == text


def _luminance(colour: str) -> float:
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("name", ["ink", "soft", "accent", "mark"])
def test_text_contrast(html: str, scheme: str, name: str) -> None:
    """WCAG 2.x 1.4.3: at least 4.5 : 1, ratio (L1 + 0.05) / (L2 + 0.05)."""
    blocks = re.findall(r":root \{([^}]*)\}", html)
    colours = dict(re.findall(r"--([a-z-]+): (#[0-9a-f]{6})", blocks[0 if scheme == "light" else 1]))
    for ground in ("ground", "panel"):
        pair = sorted((_luminance(colours[name]), _luminance(colours[ground])))
        assert (pair[1] + 0.05) / (pair[0] + 0.05) >= 4.5


def test_a_report_never_overwrites(tmp_path: Path, html: str) -> None:
    write_report(html, tmp_path / "r.html")
    with pytest.raises(OutputRefused):
        write_report(html, tmp_path / "r.html")


@pytest.fixture(scope="module")
def page_at(html: str, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Any]:
    if BROWSER is None and not os.environ.get("CI"):
        pytest.skip("chromium is not installed")
    from playwright.sync_api import sync_playwright

    path = tmp_path_factory.mktemp("report") / "r.html"
    path.write_text(html, encoding="utf-8")
    with sync_playwright() as player:
        browser = player.chromium.launch(executable_path=BROWSER, args=FLAGS)

        def open_page(width: int, **media: str) -> Any:
            page = browser.new_page(viewport={"width": width, "height": 900})
            page.emulate_media(**media)  # type: ignore[arg-type]
            page.messages = []
            page.on("console", lambda m: page.messages.append(m.text))
            page.on("pageerror", lambda e: page.messages.append(str(e)))
            page.goto(path.as_uri())
            return page

        yield open_page
        browser.close()


@pytest.mark.parametrize("width", [360, 800, 1280])
def test_no_sideways_scrolling_and_no_complaints(page_at: Any, width: int) -> None:
    page = page_at(width)
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    assert page.messages == []


def test_the_wipe_works_with_the_keyboard(page_at: Any) -> None:
    page = page_at(1000)
    slider = page.locator("#wipe-range")
    slider.focus()
    for _ in range(5):
        page.keyboard.press("ArrowRight")
    assert slider.input_value() == "55"
    assert page.evaluate("document.querySelector('.wipe').style.getPropertyValue('--cut')") == "55%"


def test_the_wipe_follows_the_pointer(page_at: Any) -> None:
    page = page_at(1000)
    box = page.locator(".wipe").bounding_box()
    page.mouse.move(box["x"] + box["width"] / 2, box["y"] + 20)
    page.mouse.down()
    page.mouse.move(box["x"] + box["width"] / 4, box["y"] + 20)
    page.mouse.up()
    assert abs(int(page.locator("#wipe-range").input_value()) - 25) <= 1


def test_crops_are_pixel_exact_at_each_zoom(page_at: Any) -> None:
    page = page_at(1000)
    crop = page.locator(".place img").first
    assert crop.bounding_box()["width"] == 192
    page.locator("input[name=zoom][value='2']").check()
    assert crop.bounding_box()["width"] == 384
    assert crop.evaluate("e => getComputedStyle(e).imageRendering") == "pixelated"


def test_print_shows_both_states_and_no_controls(page_at: Any) -> None:
    page = page_at(800, media="print")
    assert not page.locator("#wipe-range").is_visible()
    assert not page.locator("fieldset").is_visible()
    boxes = [page.locator(".wipe figure").nth(i).bounding_box() for i in (0, 1)]
    assert boxes[0]["x"] != boxes[1]["x"] or boxes[0]["y"] != boxes[1]["y"]
