"""The report is one page, complete, readable and still; checked in a real browser."""

import os
import re
import shutil
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import cv2
import numpy as np
import pytest
from skimage.data import astronaut

from moire.errors import OutputRefused
from moire.model import (
    Candidate,
    Examination,
    Finding,
    Kind,
    Line,
    LineRemoved,
    Measures,
    Mending,
    Recipe,
    Removal,
    Scan,
    Screen,
    Viewing,
    Weave,
)
from moire.report import number, render_report, with_sigma, write_report

BROWSER = shutil.which("chromium")
FLAGS = ["--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
         "--disable-background-networking", "--disable-component-update", "--disable-sync"]  # fmt: skip
HOSTILE = '<script>alert("x")</script>\'"&.tif'


def _screened() -> np.ndarray:
    """A colour picture of 900 x 700 px under a dot screen of 0.22 cycles per pixel at 15 degrees."""
    picture = cv2.resize(astronaut(), (900, 700), interpolation=cv2.INTER_AREA) / 255
    y, x = np.mgrid[:700, :900]
    t = np.radians(15)
    u, v = np.cos(t) * x - np.sin(t) * y, np.sin(t) * x + np.cos(t) * y
    cell = (np.cos(2 * np.pi * 0.22 * u) + np.cos(2 * np.pi * 0.22 * v)) / 4 - 0.5
    return np.rint(255 / (1 + np.exp(-9 * (picture + cell[..., None])))).astype(np.uint8)


def _finding(kind: Kind, *vectors: tuple[float, float], **more: Any) -> Finding:
    orders = ((1, 0), (0, 1)) if len(vectors) > 1 else (None,)
    lines = tuple(
        Line(fx_cpp=x, fy_cpp=y, sigma_cpp=2e-5, amplitude=4.2, snr_db=25.0, order=order)
        for (x, y), order in zip(vectors, orders, strict=True)
    )
    plain: dict[str, Any] = {
        "confidence": 0.9,
        "visibility": 2.0,
        "coverage": 0.8,
        "regions": (),
        "evidence": ("seen along the whole page",),
    }
    return Finding(kind=kind, lines=lines, period_px=1 / float(np.hypot(*vectors[0])), **(plain | more))


def _screen(ruling_lpi: float, sigma: float, ink: Any) -> Screen:
    return Screen(
        ruling_lpi=ruling_lpi,
        ruling_lpi_sigma=sigma,
        ruling_lpcm=ruling_lpi / 2.54,
        angle_deg=15.0,
        angle_deg_sigma=0.021,
        ink=ink,
        shape="dot",
    )


@pytest.fixture(scope="module")
def master() -> Scan:
    return Scan(
        pixels=_screened(),
        mode="rgb",
        bit_depth=8,
        ppi=(600.0, 600.0),
        ppi_source="option",
        ppi_in_file=(72.0, 72.0),
        name="leaf.tif",
        sha256="cd" * 32,
    )


@pytest.fixture(scope="module")
def before() -> Examination:
    """One finding of each sort that the report treats on its own."""
    fold = Candidate(ruling_lpi=528.4, angle_deg=4.0, order=(-1, 0), probability=0.53)
    cloth = Weave(
        ends_per_cm=70.9,
        picks_per_cm=66.1,
        sigma_per_cm=0.12,
        ends_per_inch=180.1,
        picks_per_inch=167.9,
        pattern="plain",
        skew_deg=-0.6,
    )
    findings = (
        _finding("halftone", (0.2125, -0.0569), (0.0569, 0.2125), screen=_screen(132.0, 0.043, "cyan")),
        _finding(
            "alias",
            (0.051, -0.032),
            (0.032, 0.051),
            screen=_screen(565.0, 12.0, "black"),
            candidates=(replace(fold, ruling_lpi=565.2, order=(1, 0), probability=0.97),),
        ),
        _finding("alias", (0.12, -0.01), candidates=(fold,), settled=False),
        _finding("rosette", (0.011, -0.008), parents=(0, 1), evidence=("S1 (1, 0) minus <i>A1</i>",)),
        _finding("banding", (0.0, -0.125)),
        _finding("weave", (0.3, 0.0), (0.0, -0.28), weave=cloth),
        _finding("content", (0.0, -0.031)),
        _finding("unexplained", (-0.49, -0.48)),
    )
    return Examination(
        software="moire 0.0",
        file="leaf.tif",
        sha256="cd" * 32,
        width_px=900,
        height_px=700,
        channels=3,
        bit_depth=8,
        ppi=(600.0, 600.0),
        ppi_source="option",
        ppi_in_file=(72.0, 72.0),
        viewing=Viewing(condition="monitor", distance_mm=500.0, monitor_ppi=110.0, model="Barten 1999"),
        verdict="mendable",
        visibility=8.3,
        advice=("Mend a derivative with `moire mend`.",),
        findings=findings,
    )


@pytest.fixture(scope="module")
def mending(master: Scan, before: Examination) -> Mending:
    screen = before.findings[0]
    return Mending(
        scan=replace(master, pixels=cv2.GaussianBlur(master.pixels, (0, 0), 2.2)),
        before=before,
        after=replace(before, verdict="sound", visibility=0.4, findings=(), advice=("Keep the scan.",)),
        recipe=Recipe(
            software="moire 0.0",
            ppi=(600.0, 600.0),
            strength=1.0,
            quick=False,
            to_ppi=None,
            removals=(
                Removal(
                    kind="halftone",
                    method="descreen",
                    vectors_cpp=tuple((line.fx_cpp, line.fy_cpp) for line in screen.lines),
                    ink="cyan",
                ),
            ),
        ),
        measures=Measures(
            lines=tuple(
                LineRemoved(
                    fx_cpp=line.fx_cpp,
                    fy_cpp=line.fy_cpp,
                    kind="halftone",
                    before_db=33.0,
                    after_db=-1.3,
                    removed_db=34.3,
                )
                for line in screen.lines
            ),
            visibility_before=8.3,
            visibility_after=0.4,
            edge_energy_ratio=0.93,
            edge_width_before_px=2.4,
            edge_width_after_px=2.7,
            colour_shift_mean=0.31,
            colour_shift_max=1.9,
            untouched_share=0.998,
            untouched_area=0.2,
            clipped_share=0.0,
        ),
        worst_places=((120, 90), (450, 350), (890, 690)),
    )


@pytest.fixture(scope="module")
def piece(master: Scan) -> Scan:
    """A corner of the master, for what does not depend on the pictures."""
    return replace(master, pixels=master.pixels[:100, :140])


@pytest.fixture(scope="module")
def mended_piece(piece: Scan, mending: Mending) -> Mending:
    return replace(mending, scan=piece)


@pytest.fixture(scope="module")
def html(master: Scan, mending: Mending) -> str:
    return render_report(
        master=master,
        before=mending.before,
        mending=mending,
        derivative_name="out.png",
        derivative_sha256="ab" * 32,
    )


@pytest.fixture(scope="module")
def examined(piece: Scan, before: Examination) -> str:
    """A report without a mending, its texts as hostile as names can be."""
    found = replace(before.findings[0], evidence=(HOSTILE,))
    hostile = replace(before, file=HOSTILE, software=HOSTILE, advice=(HOSTILE,), findings=(found,))
    return render_report(master=piece, before=hostile, mending=None, made_at=HOSTILE)


def _text(page: str) -> str:
    """What a reader sees, on one line."""
    from html import unescape

    body = re.sub(r"<(style|script)>.*?</\1>", "", page, flags=re.S)
    body = re.sub(r"</(?:t[dh]|li|p|h\d|d[dt])>", " ", body)
    return " ".join(unescape(re.sub(r"<[^>]*>", "", body)).split())


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


def test_it_says_what_was_found_removed_and_kept(html: str) -> None:
    text = _text(html)
    for words in (
        "Mendable. After mending: sound",
        "stood 8.3 times above the eye's threshold before, 0.4 times after",
        "keep the master",
        "sampling rate 600 ppi (given; the file says 72)",
        "of S1 and A1: S1 (1, 0) minus <i>A1</i>",
        "33.0 −1.3 34.3",
        "0.93 of the master's gradient energy",
        "2.40 px before, 2.70 px after",
        "0.31 mean, 1.90 largest (CIEDE2000",
        "99.80 % of its pixels changed by less than one code value",
        "halftone (cyan): descreen at (0.21250, −0.05690), (0.05690, 0.21250) cycles/px",
        "Barten 1999",
        "monitor of 110 ppi seen from 500 mm",
        "it is not evidence and not for measurement",
        "delete real detail at the frequencies removed",
        "exposes the original to light and handling. Its keeper decides",
        "photosensitive",
        "WCAG 2.3.1",
        "moire 0.0",
        "cd" * 32,
        "ab" * 32,
        '"format": "moire.recipe"',
    ):
        assert words in text, words


def test_rulings_are_given_per_inch_and_per_centimetre_with_the_digits_they_warrant(html: str) -> None:
    text = _text(html)
    assert "132.000 ± 0.043 51.969 ± 0.017 15.000 ± 0.021" in text
    assert "565 ± 12 222.4 ± 4.7" in text


def test_an_alias_tells_what_it_may_be_even_without_a_screen(html: str) -> None:
    text = _text(html)
    assert "A1: what it was settled from 565.2 lines/inch (222.52 lines/cm)" in text
    assert "A2: what it may be" in text
    assert "528.4 lines/inch (208.03 lines/cm) at 4.0°, folded, order −1, 0: probability 0.53" in text


def test_a_weave_is_told_per_centimetre_and_per_inch(html: str) -> None:
    assert "plain weave, 70.90 ± 0.12 ends/cm (180.10 ± 0.30 per inch), 66.10 ± 0.12 picks/cm" in _text(html)


def test_a_map_of_setts_is_darker_where_threads_lie_closer(master: Scan, before: Examination) -> None:
    found = next(f for f in before.findings if f.weave is not None)
    assert found.weave is not None
    cloth = replace(
        found.weave,
        structure="2/2 twill Z",
        ends_map_per_cm=((70.0, 71.0), (None, 72.0)),
        picks_map_per_cm=((66.0, 66.0), (None, 66.0)),
        ends_range_per_cm=(70.0, 72.0),
        picks_range_per_cm=(66.0, 66.1),
    )
    html = render_report(
        master=master, before=replace(before, findings=(replace(found, weave=cloth),)), mending=None
    )
    assert "2/2 twill Z weave" in _text(html)
    ends, picks = re.findall(r'<svg [^>]*aria-label="Map of[^>]*>(.*?)</svg>', html, flags=re.S)
    assert ends.count("<rect") == picks.count("<rect") == 3
    assert re.findall(r'fill="#(..)', ends) == ["eb", "96", "41"]
    assert "ends per cm: 70.00 (light) to 72.00 (dark)" in _text(html)


def test_sections_follow_the_readers_questions(html: str) -> None:
    headings = [_text(h) for h in re.findall(r"<h2[^>]*>(.*?)</h2>", html)]
    assert headings[0].startswith("Mendable")
    assert headings[1:] == [
        "Before and after",
        "Pixel for pixel, where most was changed",
        "Spectrum",
        "What was found",
        "What was removed",
        "What was kept",
        "Recipe",
        "Files",
        "Cautions",
    ]


@pytest.mark.parametrize(
    ("verdict", "left", "said", "unsaid"),
    [
        ("mendable", "sound", "keep the master as it is", "moire mend"),
        ("rescan", "sound", "Mend a derivative with moire mend", "What is left"),
        ("mendable", "mendable", "What is left", "keep the master as it is"),
    ],
)
def test_advice_is_about_what_to_do_now(
    piece: Scan, mended_piece: Mending, verdict: Any, left: Any, said: str, unsaid: str
) -> None:
    """A mending answers `moire mend`, but no advice to rescan; what is left is told."""
    first = replace(mended_piece.before, verdict=verdict)
    after = replace(mended_piece.after, verdict=left, advice=("What is left.",))
    page = render_report(master=piece, before=first, mending=replace(mended_piece, before=first, after=after))
    block = _text(page[page.index('class="verdict"') : page.index("</header>")])
    assert said in block
    assert unsaid not in block


def test_hostile_texts_are_escaped(examined: str, piece: Scan, mended_piece: Mending) -> None:
    mended = render_report(
        master=piece,
        before=replace(mended_piece.before, file=HOSTILE),
        mending=mended_piece,
        derivative_name=HOSTILE,
        derivative_sha256=HOSTILE,
    )
    for page in (examined, mended):
        assert "<script>alert" not in page
        assert page.count("<script>") == 1
        assert HOSTILE in _text(page)


def test_an_examination_alone_has_no_wipe(examined: str) -> None:
    assert 'id="wipe-range"' not in examined
    assert "What was found" in examined
    assert "After" not in _text(examined)


def test_a_scan_without_rate_or_findings_is_reported(piece: Scan, before: Examination) -> None:
    bare = replace(before, ppi=None, ppi_source=None, findings=(), verdict="sound")
    text = _text(render_report(master=replace(piece, ppi=None), before=bare, mending=None))
    assert "sampling rate unknown (the file's 72 is a placeholder)" in text
    assert "No periodic pattern." in text
    assert "cycles/pixel" in text
    assert "cycles/inch" not in text


def test_a_reduced_derivative_is_shown_by_the_same_piece_of_the_page(master: Scan, mending: Mending) -> None:
    """Half the rate: a piece of 192 px has 96 px after, at 1:1, from the same place."""
    small = np.ascontiguousarray(master.pixels[::2, ::2])
    reduced = replace(
        mending,
        scan=replace(master, pixels=small, ppi=(300.0, 300.0)),
        recipe=replace(mending.recipe, to_ppi=300.0),
    )
    page = render_report(master=master, before=mending.before, mending=reduced)
    sides = re.findall(r'--side: (\d+)px" src="data:image/png;base64,([^"]*)"', page)
    assert [int(side) for side, _ in sides] == [192, 96] * 3
    one, two = (_decoded(code) for _, code in sides[:2])
    assert np.array_equal(one[::2, ::2], two)
    assert "450 × 350 px, 300 ppi" in _text(page)
    assert "beyond these axes not marked" in _text(page)


def _decoded(code: str) -> np.ndarray:
    import base64

    return np.asarray(cv2.imdecode(np.frombuffer(base64.b64decode(code), np.uint8), cv2.IMREAD_COLOR))


def test_the_page_is_small(html: str) -> None:
    assert len(html) < 6_000_000


@pytest.mark.parametrize(
    ("value", "sigma", "text"),
    [
        (132.99871, 0.0021, "132.9987 ± 0.0021"),
        (85.2, 0.3, "85.20 ± 0.30"),
        (45.0, 2.0, "45.0 ± 2.0"),
        (9.0, 0.0, "9.00"),
        (15.0, 0.000003, "15.0000 ± 0.0001"),
    ],
)
def test_digits_follow_the_uncertainty(value: float, sigma: float, text: str) -> None:
    assert with_sigma(value, sigma) == text


def test_numbers_have_a_true_minus_and_no_negative_zero() -> None:
    assert (number(-1.26, 1), number(-0.001, 2)) == ("−1.3", "0.00")


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
    # The plate lies behind the spectra's axes, the halo behind the marks' labels.
    for ground in ("ground", "panel", "plate", *(["mark-halo"] if name == "mark" else [])):
        pair = sorted((_luminance(colours[name]), _luminance(colours[ground])))
        assert (pair[1] + 0.05) / (pair[0] + 0.05) >= 4.5


def test_a_report_never_overwrites(tmp_path: Path, html: str) -> None:
    write_report(html, tmp_path / "r.html")
    with pytest.raises(OutputRefused, match=r"r\.html"):
        write_report("", tmp_path / "r.html")
    assert (tmp_path / "r.html").read_text(encoding="utf-8") == html
    write_report("new", tmp_path / "r.html", force=True)
    assert (tmp_path / "r.html").read_text(encoding="utf-8") == "new"
    assert [f.name for f in tmp_path.iterdir()] == ["r.html"]


@pytest.fixture(scope="module")
def page_at(html: str, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Any]:
    if BROWSER is None and not os.environ.get("CI"):
        pytest.skip("chromium is not installed")
    from playwright.sync_api import sync_playwright

    path = tmp_path_factory.mktemp("report") / "r.html"
    path.write_text(html, encoding="utf-8")
    with sync_playwright() as player:
        browser = player.chromium.launch(executable_path=BROWSER, args=FLAGS)

        def open_page(width: int, *, script: bool = True, **media: str) -> Any:
            page = browser.new_page(viewport={"width": width, "height": 900}, java_script_enabled=script)
            page.emulate_media(**media)  # type: ignore[arg-type]
            page.messages, page.loads = [], []
            page.on("console", lambda m: page.messages.append(m.text))
            page.on("pageerror", lambda e: page.messages.append(str(e)))
            page.on("request", lambda r: page.loads.append(r.url))
            page.goto(path.as_uri())
            return page

        yield open_page
        browser.close()


@pytest.mark.parametrize("width", [360, 800, 1280])
def test_no_sideways_scrolling_and_no_complaints(page_at: Any, width: int) -> None:
    page = page_at(width)
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    assert page.messages == []
    assert [url[:40] for url in page.loads[1:] if not url.startswith("data:")] == []


def test_the_wipe_works_with_the_keyboard(page_at: Any) -> None:
    page = page_at(1000)
    slider = page.locator("#wipe-range")
    slider.focus()
    for _ in range(5):
        page.keyboard.press("ArrowRight")
    assert slider.input_value() == "55"
    assert page.evaluate("document.querySelector('.wipe').style.getPropertyValue('--cut')") == "55%"
    assert slider.get_attribute("aria-valuetext") == "55 % before, 45 % after"
    assert page.get_by_label("Before on the left").count() == 1


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


def test_both_states_of_the_wipe_cover_each_other(page_at: Any) -> None:
    page = page_at(360)
    boxes = [page.locator(".wipe img").nth(i).bounding_box() for i in (0, 1)]
    assert boxes[0] == boxes[1]


def _side_by_side(page: Any) -> bool:
    one, two = (page.locator(".wipe figure").nth(i).bounding_box() for i in (0, 1))
    return bool(one["x"] + one["width"] <= two["x"] or one["y"] + one["height"] <= two["y"])


def test_without_scripts_both_states_stand_side_by_side(page_at: Any) -> None:
    page = page_at(800, script=False)
    assert not page.locator("#wipe-range").is_visible()
    assert not page.locator("fieldset").is_visible()
    assert _side_by_side(page)


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_print_is_black_on_white_with_both_states_and_no_controls(page_at: Any, scheme: str) -> None:
    page = page_at(800, media="print", color_scheme=scheme)
    assert not page.locator("#wipe-range").is_visible()
    assert not page.locator("fieldset").is_visible()
    assert _side_by_side(page)
    style = "(k) => getComputedStyle(document.body)[k]"
    assert page.evaluate(style, "color") == "rgb(0, 0, 0)"
    assert page.evaluate(style, "backgroundColor") == "rgb(255, 255, 255)"


def test_the_keyboard_reaches_the_skip_link_first_and_focus_shows(page_at: Any) -> None:
    page = page_at(800)
    page.keyboard.press("Tab")
    assert page.evaluate("document.activeElement.className") == "skip"
    page.locator("#wipe-range").focus()
    page.keyboard.press("Tab")
    assert page.evaluate("getComputedStyle(document.activeElement).outlineStyle") == "solid"
