"""Pictures drawn by us to be printed: a harbour card and a leaf of text over tints."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from PIL.ImageDraw import ImageDraw

_OVERSAMPLING = 2
_LINES = (
    "The ferry left the quay at nine.",
    "Nets dried on the harbour wall and",
    "the bell rang twice for the tide.",
    "By noon the market was sold out.",
)


def draw_card(width: int = 1200, height: int = 900) -> NDArray[np.float32]:
    """A harbour in colour with soft tones, hard edges, fine detail and lettering.

    Returns
    -------
    ndarray, shape (height, width, 3)
        sRGB-encoded, 0..1.
    """
    from PIL import Image, ImageDraw

    size = (width * _OVERSAMPLING, height * _OVERSAMPLING)
    card = Image.fromarray(np.rint(np.clip(_harbour_tones(*size), 0, 1) * 255).astype(np.uint8))
    pen = ImageDraw.Draw(card)
    _harbour_objects(pen, *size)
    _write(pen, "Greetings from Lindmoor Harbour", (0.045 * size[0], 0.885 * size[1]), 0.058 * size[1])
    return _reduced(card)


def draw_leaf(width: int = 1200, height: int = 900) -> NDArray[np.float32]:
    """A leaf of a local newspaper: black text over white and tints, steps and a ramp.

    Returns
    -------
    ndarray, shape (height, width)
        sRGB-encoded grey, 0..1.
    """
    from PIL import Image, ImageDraw

    w, h = width * _OVERSAMPLING, height * _OVERSAMPLING
    tones = np.ones((h, w), np.float32)
    for i, tint in enumerate((1.0, 0.88, 0.74, 0.6)):
        tones[
            round((0.15 + 0.14 * i) * h) : round((0.27 + 0.14 * i) * h), round(0.04 * w) : round(0.96 * w)
        ] = tint
    across = slice(round(0.04 * w), round(0.96 * w))
    span = across.stop - across.start
    tones[round(0.73 * h) : round(0.82 * h), across] = np.linspace(0.05, 0.98, span, dtype=np.float32)
    steps = np.linspace(0.1, 0.95, 10, dtype=np.float32)
    tones[round(0.85 * h) : round(0.95 * h), across] = steps[np.arange(span) * 10 // span]
    leaf = Image.fromarray(np.rint(tones * 255).astype(np.uint8))
    pen = ImageDraw.Draw(leaf)
    _write(pen, "LINDMOOR COURIER", (0.06 * w, 0.025 * h), 0.1 * h)
    for i, text in enumerate(_LINES):
        _write(pen, text, (0.07 * w, (0.168 + 0.14 * i) * h), 0.068 * h)
    return _reduced(leaf)


def _harbour_tones(width: int, height: int) -> NDArray[np.float32]:
    y, x = np.mgrid[0:height, 0:width].astype(np.float32)
    u, v = x / width, y / height
    sky = np.stack([0.55 + 0.4 * v, 0.68 + 0.22 * v, 0.86 - 0.05 * v], axis=-1)
    sea = np.stack([0.10 + 0.25 * v, 0.28 + 0.25 * v, 0.38 + 0.18 * v], axis=-1)
    sea += (0.05 * np.sin(2 * np.pi * (26 * v**1.6 + 0.6 * np.sin(2 * np.pi * (2 * u + v)))))[..., None]
    card = np.where((v > 0.6)[..., None], sea, sky)
    cloud = np.exp(-(((u - 0.3) / 0.16) ** 2) - ((v - 0.16) / 0.05) ** 2)
    cloud += np.exp(-(((u - 0.78) / 0.2) ** 2) - ((v - 0.24) / 0.04) ** 2)
    card = card + (0.28 * cloud)[..., None] * (1 - card)
    hill = 0.44 + 0.07 * np.sin(5 * u + 1) + 0.03 * np.sin(13 * u)
    green = np.stack([0.30 + 0.3 * (v - hill), 0.42 + 0.3 * (v - hill), 0.26 + 0 * v], axis=-1)
    return np.asarray(np.where(((v > hill) & (v <= 0.6))[..., None], green, card), np.float32)


def _harbour_objects(pen: ImageDraw, width: int, height: int) -> None:
    rng = np.random.default_rng(7)

    def at(u: float, v: float) -> tuple[float, float]:
        return u * width, v * height

    for i in range(9):
        left, wide = 0.03 + 0.105 * i, 0.085
        top = 0.60 - float(rng.uniform(0.11, 0.18))
        red, green, blue = (int(255 * c) for c in rng.uniform((0.62, 0.42, 0.3), (0.95, 0.8, 0.62)))
        pen.rectangle([at(left, top), at(left + wide, 0.6)], fill=(red, green, blue))
        roof = [at(left - 0.008, top), at(left + wide / 2, top - 0.06), at(left + wide + 0.008, top)]
        pen.polygon(roof, fill=(140, 51, 38))
        for row, column in np.ndindex(2, 3):
            u, v = left + 0.012 + 0.024 * column, top + 0.02 + 0.045 * row
            pen.rectangle([at(u, v), at(u + 0.012, v + 0.022)], fill=(41, 46, 61))
    rope, mast = (36, 26, 20), round(width / 240)
    pen.polygon([at(0.50, 0.74), at(0.86, 0.74), at(0.80, 0.83), at(0.56, 0.83)], fill=(184, 33, 31))
    pen.line([at(0.66, 0.74), at(0.66, 0.34)], fill=rope, width=mast)
    pen.polygon([at(0.67, 0.36), at(0.83, 0.71), at(0.67, 0.71)], fill=(242, 235, 214))
    for end in (0.52, 0.58, 0.84):
        pen.line([at(0.66, 0.35), at(end, 0.74)], fill=rope, width=max(1, mast // 3))
    pen.rectangle([at(0.03, 0.87), at(0.74, 0.975)], fill=(245, 240, 224))


def _write(pen: ImageDraw, text: str, at: tuple[float, float], height: float) -> None:
    from PIL import ImageFont

    ink = 13 if pen.mode == "L" else (20, 20, 26)
    pen.text(at, text, fill=ink, font=ImageFont.load_default(size=height), stroke_width=height / 90)


def _reduced(picture: object) -> NDArray[np.float32]:
    from PIL import Image

    assert isinstance(picture, Image.Image)
    return np.asarray(picture.reduce(_OVERSAMPLING), np.float32) / np.float32(255)
