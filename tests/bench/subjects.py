"""Pictures to print in benchmarks: a tuning set and a check set that share none."""

import cv2
import numpy as np
import skimage.data
from numpy.typing import NDArray

from moire.scanner import srgb_decode

TUNING = ("astronaut", "leaves", "camera", "leaves", "chelsea", "leaves", "gravel", "leaves")
# Looked at while rules were fixed; kept out of both sets: coffee, coins, rocket, retina, hubble, ihc.
CHECK = ("motorcycle", "leaves", "cell", "leaves", "brick", "leaves")
SEEDS = {"tuning": 3000, "check": 131000}


def dead_leaves(side: int, rng: np.random.Generator) -> NDArray[np.float32]:
    """Overlapping discs of random colour and power-law size, which have the statistics of photographs.

    The dead leaves model: A. B. Lee, D. Mumford and J. Huang, Int. J. Computer Vision 41 (2001) 35.
    """
    picture = np.zeros((side, side, 3), np.float32)
    base = rng.uniform(0.05, 0.9, 3)
    for _ in range(900):
        radius = 3 / np.sqrt(rng.uniform(1e-4, 1))
        centre = rng.uniform(0, side, 2)
        colour = np.clip(0.5 * base + 0.5 * rng.uniform(0, 1, 3) + rng.normal(0, 0.1, 3), 0, 1)
        place = (int(centre[0]), int(centre[1]))
        cv2.circle(picture, place, int(radius), colour.tolist(), -1, lineType=cv2.LINE_AA)
    ramp = np.linspace(0.75, 1.1, side, dtype=np.float32)[:, None, None]
    return np.clip(cv2.GaussianBlur(picture, (0, 0), 0.8) * ramp, 0, 1)


def subject(which: str, number: int, rng: np.random.Generator) -> NDArray[np.float32]:
    """A square picture of a set, linear light, 400 px or the source's shorter side."""
    names = TUNING if which == "tuning" else CHECK
    name = names[number % len(names)]
    if name == "leaves":
        return dead_leaves(400, rng) ** 2.2
    data = skimage.data.stereo_motorcycle()[0] if name == "motorcycle" else getattr(skimage.data, name)()
    data = np.repeat(data[..., None], 3, axis=2) if data.ndim == 2 else data[..., :3]
    side = min(400, *data.shape[:2])
    y, x = rng.integers(0, data.shape[0] - side + 1), rng.integers(0, data.shape[1] - side + 1)
    return srgb_decode(data[y : y + side, x : x + side] / 255).astype(np.float32)
