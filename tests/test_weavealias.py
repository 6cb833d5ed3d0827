"""A cloth's beats with a pixel grid are where, and as strong, as the kernel of the reduction makes them."""

from dataclasses import replace
from functools import cache
from typing import Any

import cv2
import numpy as np
import pytest
import skimage.data
from numpy.typing import NDArray
from PIL import Image
from prints import as_scan

from moire.bindings import parse_binding
from moire.kernels import Kernel
from moire.loom import Cloth
from moire.mend import mend
from moire.patterns import cloth_pattern
from moire.prediction import Capture, predict
from moire.scanner import Scanner, digitise, sample
from moire.vision import lightness
from moire.weavealias import explain_alias, kernel_transfer, thread_aliases
from moire.weaves import find_threads

PILLOW = {
    "pillow-box": Image.Resampling.BOX, "pillow-bilinear": Image.Resampling.BILINEAR,
    "pillow-hamming": Image.Resampling.HAMMING, "pillow-bicubic": Image.Resampling.BICUBIC,
    "pillow-lanczos": Image.Resampling.LANCZOS,
}  # fmt: skip
SIDE = 900


def reduced(image: NDArray[Any], kernel: str, size: int) -> NDArray[Any]:
    if kernel.startswith("opencv"):
        flag = cv2.INTER_NEAREST if kernel == "opencv-nearest" else cv2.INTER_AREA
        return np.asarray(cv2.resize(image, (size, size), interpolation=flag))
    return np.asarray(Image.fromarray(image).resize((size, size), PILLOW[kernel]))


def amplitude(image: NDArray[np.float32], f: tuple[float, float]) -> float:
    rows, columns = image.shape
    window = np.outer(np.hanning(rows), np.hanning(columns))
    y, x = np.mgrid[:rows, :columns]
    wave = np.exp(-2j * np.pi * (f[0] * x + f[1] * y))
    return float(2 * np.abs((image * window * wave).sum()) / window.sum())


@pytest.mark.parametrize("kernel", ["opencv-nearest", "opencv-area", *PILLOW])
@pytest.mark.parametrize(("f", "size"), [((0.31, 0.02), 360), ((0.27, 0.0), 300)])
def test_a_line_leaves_through_the_kernel_what_is_foretold(
    kernel: Kernel, f: tuple[float, float], size: int
) -> None:
    y, x = np.mgrid[:SIDE, :SIDE]
    image = (128 + 60 * np.cos(2 * np.pi * (f[0] * x + f[1] * y))).astype(np.float32)
    scale = (SIDE / size, SIDE / size)
    (alias,) = thread_aliases(
        np.array(f), np.array([0.0, 0.1]), orders=((1.0, 0.0),), reduction=scale, kernel=kernel
    )
    seen = amplitude(reduced(image, kernel, size), alias.f_cpp)
    assert seen == pytest.approx(60 * alias.transfer, abs=0.6)


def test_box_at_its_own_rate_leaves_nothing() -> None:
    assert kernel_transfer("pillow-box", np.array([0.25, 0.0]), (4.0, 4.0)) == pytest.approx(0, abs=1e-12)
    assert kernel_transfer("opencv-nearest", np.array([0.25, 0.3]), (4.0, 4.0)) == pytest.approx(1)
    assert kernel_transfer("pillow-lanczos", np.array([0.0, 0.0]), (4.0, 4.0)) == pytest.approx(1)


@pytest.mark.parametrize(
    ("kernel", "size"), [("opencv-nearest", 75), ("opencv-area", 110), ("pillow-bicubic", 110)]
)
def test_a_beat_over_reduced_cloth_is_explained_by_its_threads(kernel: Kernel, size: int) -> None:
    cloth = Cloth(width_in=1.25, height_in=1.25, ends_per_cm=22, picks_per_cm=19, unevenness=0.0)
    scanner = Scanner(ppi=(600, 600))
    pixels = digitise(sample(cloth, scanner), scanner, np.random.default_rng(0))
    master = lightness(pixels.astype(np.float32))
    threads = find_threads(master)
    assert threads is not None
    scale = (750 / size, 750 / size)
    aliases = thread_aliases(threads.warp, threads.weft, reduction=scale, kernel=kernel)
    ends = next(a for a in aliases if a.order == (1, 0))
    seen = amplitude(reduced(master, kernel, size), ends.f_cpp)
    assert seen == pytest.approx(amplitude(master, tuple(threads.warp)) * ends.transfer, rel=0.1)
    found = explain_alias(np.array(ends.f_cpp) + 0.2 / size, aliases, tolerance=0.5 / size)
    assert found is not None
    assert (found.order, found.fold) == ((1, 0), ends.fold)


def test_a_line_of_its_own_is_no_alias_of_the_threads() -> None:
    aliases = thread_aliases(np.array([0.31, 0.0]), np.array([0.0, 0.23]), reduction=(2.0, 2.0))
    assert explain_alias(np.array([0.111, 0.077]), aliases, tolerance=0.004) is None


@cache
def fine_master(pattern: str, ends: float, picks: float) -> NDArray[np.uint8]:
    cloth = Cloth(
        width_in=2.2, height_in=2.2, ends_per_cm=ends, picks_per_cm=picks, pattern=pattern, unevenness=0.1,
        jitter=0.01, hair=0.2,
    )  # fmt: skip
    scanner = Scanner(ppi=(600, 600))
    return digitise(sample(cloth, scanner), scanner, np.random.default_rng(0))


@pytest.mark.parametrize(
    ("cloth", "kernel"),
    [
        (("plain", 26, 20), "opencv-nearest"),
        (("plain", 26, 20), "opencv-area"),
        (("plain", 26, 20), "pillow-hamming"),
        (("twill2/2Z", 22, 16), "opencv-nearest"),
        (("twill2/2Z", 22, 16), "pillow-box"),
    ],
)
def test_beats_of_a_reduced_cloth_are_explained_and_mended_and_its_weave_stays(
    cloth: tuple[str, float, float], kernel: Kernel
) -> None:
    """Thread lines keep 95 % and more; the strongest beat loses 9 dB, none grows."""
    small = reduced(fine_master(*cloth), kernel, 300)
    mending = mend(as_scan(small, 300 / 2.2))
    before, after = (lightness(p.astype(np.float32)) for p in (small, mending.scan.pixels))
    found = {f.kind: f for f in mending.before.findings}
    assert found["weave"].weave is not None
    assert found["weave"].weave.ends_per_cm == pytest.approx(cloth[1], rel=0.005)
    for line in found["weave"].lines:
        f = (line.fx_cpp, line.fy_cpp)
        assert amplitude(after, f) > 0.95 * amplitude(before, f)
    assert found["alias"].parents == (mending.before.findings.index(found["weave"]),)
    assert "order" in found["alias"].evidence[0]
    for line in found["alias"].lines:
        f = (line.fx_cpp, line.fy_cpp)
        strong = amplitude(before, f) > 0.3
        assert amplitude(after, f) < (10 ** (-9 / 20) if strong else 0.9) * amplitude(before, f)


@pytest.mark.parametrize("kernel", ["pillow-bilinear", "pillow-lanczos"])
def test_kernels_that_average_leave_no_beat_to_mend(kernel: Kernel) -> None:
    small = reduced(fine_master("plain", 26, 20), kernel, 300)
    mending = mend(as_scan(small, 300 / 2.2))
    assert not mending.recipe.removals
    assert (mending.scan.pixels == small).all()


def test_the_weave_itself_is_removed_only_when_asked() -> None:
    """For those who want the picture on the canvas: it comes nearer to what was printed."""
    figure = (0.35 + 0.65 * (skimage.data.astronaut()[:400, :400] / 255) ** 2.2).astype(np.float32)
    cloth = Cloth(
        width_in=1.5, height_in=1.5, ends_per_cm=16, picks_per_cm=13, jitter=0.03, thickness=0.08, hair=0.2,
        figure=figure, warp=(0.6, 0.55, 0.5), weft=(0.8, 0.75, 0.7), dpi=1200,
    )  # fmt: skip
    scanner = Scanner(ppi=(300, 300), turn_deg=0.4)
    canvas = digitise(sample(cloth, scanner), scanner, np.random.default_rng(0))
    smooth = replace(cloth, woven=False, hair=0.0)
    printed = lightness(
        digitise(sample(smooth, scanner), scanner, np.random.default_rng(0)).astype(np.float32)
    )
    kept = mend(as_scan(canvas, 300))
    assert all(r.kind != "weave" for r in kept.recipe.removals)
    bare = mend(as_scan(canvas, 300), kept.before, only=["weave"])
    before, after = (lightness(p.astype(np.float32)) for p in (canvas, bare.scan.pixels))
    (found,) = [f for f in kept.before.findings if f.kind == "weave"]
    for line in sorted(found.lines, key=lambda line: -line.amplitude)[:4]:
        f = (line.fx_cpp, line.fy_cpp)
        assert amplitude(after, f) < 10 ** (-15 / 20) * amplitude(before, f)

    def apart(plane: NDArray[np.float32]) -> float:
        gap = plane - printed
        return float((gap - cv2.GaussianBlur(gap, (0, 0), 20)).std())

    assert apart(after) < 0.4 * apart(before)


def test_plans_and_examinations_reckon_alike() -> None:
    """What `plan` foretells of a reduced cloth lies where, and shrinks as, its aliases here say."""
    ends, picks, master = 22.0, 19.0, 600.0
    rates = np.array([[600.0, 600.0], [100.0, 100.0]])
    woven = cloth_pattern("cloth", "plain", ends * 2.54, picks * 2.54, 0.0, 0.0)
    for kernel in ("opencv-nearest", "opencv-area", "pillow-bicubic"):
        capture = Capture(rates=rates, grid=(master, master), kernel=kernel, derivative=True)
        lines = predict((woven,), capture)
        aliases = thread_aliases(
            np.array([ends * 2.54 / master, 0.0]), np.array([0.0, picks * 2.54 / master]),
            orders=parse_binding("plain").orders(2), reduction=(master / 100,) * 2, kernel=kernel,
        )  # fmt: skip
        assert len(aliases) >= 2
        compared = 0
        for i, ((_, m, n),) in enumerate(lines.parts):
            for alias in (a for a in aliases if a.order == (m / 2, n / 2) and not lines.image[i].any()):
                assert lines.seen_cpi[1, i] / 100 == pytest.approx(np.array(alias.f_cpp), abs=1e-9)
                assert tuple(lines.order[1, i]) == alias.fold
                share = lines.amplitude[1, i] / lines.amplitude[0, i]
                # Higher orders of lightness are partly made of lower ones, which shrink otherwise.
                if alias.order == (1, 0):
                    assert share == pytest.approx(alias.transfer, rel=0.1)
                compared += 1
        assert compared >= 2
