"""Remakes moire/descreen_weights.npz: the mixing network of the descreening filter.

    pip install torch        # for training only; the product needs numpy alone
    python tests/bench/train_descreen.py

Prints are simulated at random from pictures that no test or demo uses: other pictures, rulings,
angles, dot shapes, inks, dot gain, optics. The check is `bench_descreen.py`, on other pictures.
"""

from __future__ import annotations

import argparse
import sys
import time
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import skimage.data
from numpy.typing import NDArray

from moire.descreen import apply_features, prepare
from moire.lattice import wrap
from moire.nulls import ScreenLattice
from moire.press import SPOTS
from moire.proof import ScreenOrder, print_sheet
from moire.scanner import Scanner, digitise, sample, srgb_decode
from moire.units import page_vector

SEED = 20261201
PIXELS = 288
SAMPLES = 5000
INKS = ("cyan", "magenta", "yellow", "black")
PICTURES = ("stereo_motorcycle", "immunohistochemistry", "retina", "rocket", "hubble_deep_field", "gravel",
            "brick", "moon", "grass")  # fmt: skip
OUT = Path(__file__).resolve().parents[2] / "moire" / "descreen_weights.npz"


def subject(rng: np.random.Generator, side: int) -> NDArray[np.float32]:
    """A linear-light picture: a photograph, dead leaves, or a page of text over tints."""
    kind = rng.random()
    if kind < 0.62:
        data = getattr(skimage.data, str(rng.choice(PICTURES, p=_ODDS)))()
        data = data[0] if isinstance(data, tuple) else data
        data = np.repeat(data[..., None], 3, axis=2) if data.ndim == 2 else data[..., :3]
        scale = int(rng.integers(1, 3))
        need = min(side * scale, *data.shape[:2])
        y, x = rng.integers(0, data.shape[0] - need + 1), rng.integers(0, data.shape[1] - need + 1)
        crop = data[y : y + need, x : x + need] / 255
        crop = crop[:: int(rng.choice([1, -1])), :: int(rng.choice([1, -1]))]
        return srgb_decode(np.clip(crop * rng.uniform(0.8, 1.1), 0, 1)).astype(np.float32)
    if kind < 0.74:
        return _dead_leaves(rng, side)
    return _text_page(rng, side)


_ODDS = np.array([5, 3, 1.5, 2, 1, 1.5, 1, 1, 1]) / 17


def _dead_leaves(rng: np.random.Generator, side: int) -> NDArray[np.float32]:
    import cv2

    page = np.zeros((2 * side, 2 * side, 3), np.uint8)
    for _ in range(500):
        radius = int(min(side, 3 / rng.uniform(0.01, 1) ** 0.7 + 2))
        colour = [int(c) for c in rng.integers(0, 256, 3)]
        centre = [int(c) for c in rng.integers(0, 2 * side, 2)]
        if rng.random() < 0.5:
            cv2.circle(page, centre, radius, colour, -1, cv2.LINE_AA)
        else:
            cv2.rectangle(page, centre, [c + radius for c in centre], colour, -1)
    return srgb_decode(page / 255).astype(np.float32)


def _text_page(rng: np.random.Generator, side: int) -> NDArray[np.float32]:
    from PIL import Image, ImageDraw, ImageFont

    page = Image.new("RGB", (3 * side, 3 * side), (255, 255, 255))
    pen = ImageDraw.Draw(page)
    y = 0.0
    while y < 3 * side:
        size = float(rng.uniform(18, 110))
        tint = tuple(int(c) for c in rng.integers(90, 256, 3)) if rng.random() < 0.6 else (255, 255, 255)
        if rng.random() < 0.5:
            tint = (tint[0],) * 3
        pen.rectangle([0, y, 3 * side, y + 1.6 * size], fill=tint)
        words = " ".join(
            "".join(chr(97 + int(c)) for c in rng.integers(0, 26, int(n))) for n in rng.integers(2, 9, 12)
        )
        ink = (8, 8, 8) if rng.random() < 0.75 else tuple(int(c) for c in rng.integers(0, 120, 3))
        if rng.random() < 0.15:
            ink = (255, 255, 255)
        pen.text(
            (rng.uniform(-20, 60), y + 0.1 * size), words, fill=ink, font=ImageFont.load_default(size=size)
        )
        y += 1.6 * size
    return srgb_decode(np.asarray(page) / 255).astype(np.float32)


def training_print(number: int) -> tuple[NDArray[np.float32], ...]:
    """Features, inputs, targets and loss weights of random pixels of one random print."""
    rng = np.random.default_rng((SEED, number))
    colour = rng.random() < 0.6
    period = float(np.exp(rng.uniform(np.log(1.9), np.log(8.0))))
    ppi = float(rng.choice([200, 300, 300, 400, 600, 600, 800]))
    ruling = float(np.clip(ppi / period, 55, 210))
    if colour:
        turn = float(rng.uniform(0, 90))
        offsets = (15, 75, 0, 45) if rng.random() < 0.7 else tuple(rng.uniform(0, 90, 4))
        count = int(rng.choice([2, 3, 4, 4, 4]))
        chosen = [str(i) for i in rng.permutation(INKS)[:count]]
        orders = tuple(
            ScreenOrder(
                ruling_lpi=ruling * float(rng.uniform(0.97, 1.06)),
                angle_deg=float(offsets[INKS.index(ink)] + turn),
                ink=ink,
                spot=SPOTS[int(rng.integers(4))],
            )
            for ink in chosen
        )
    else:
        ink = "black" if rng.random() < 0.8 else str(rng.choice(INKS[:3]))
        orders = (
            ScreenOrder(
                ruling_lpi=ruling,
                angle_deg=float(rng.uniform(0, 90)),
                ink=ink,
                spot=SPOTS[int(rng.integers(4))],
            ),
        )
    size = PIXELS / ppi
    sheet = print_sheet(
        subject(rng, 200), orders, width_in=size, height_in=size, seed=number,
        spread_um=float(rng.uniform(10, 38)), gain=float(rng.uniform(0, 0.2)),
    )  # fmt: skip
    scanner = Scanner(
        ppi=(ppi, ppi), lens_px=float(rng.uniform(0.2, 0.6)), noise=float(rng.uniform(0.002, 0.012)),
        jpeg_quality=int(rng.integers(80, 96)) if rng.random() < 0.2 else None,
    )  # fmt: skip
    pixels = digitise(sample(sheet, scanner), scanner, rng)
    truth = sample(replace(sheet, screened=False), scanner)
    if not colour and rng.random() < 0.5:
        pixels, truth = pixels.mean(axis=2, keepdims=True).round(), truth.mean(axis=2, keepdims=True)
    lattices = []
    for order in orders:
        # A lattice is measured to about a hundredth of a percent, not exactly.
        f = order.ruling_lpi / ppi * (1 + rng.normal(0, 5e-5))
        k1 = np.array(page_vector(f, order.angle_deg))
        lattices.append(ScreenLattice(k1=wrap(k1), k2=wrap(np.array([k1[1], -k1[0]]))))
    image = (pixels / 255).astype(np.float32)
    ready = prepare(image, lattices)
    features, inputs, targets = [], [], []
    for found, target in apply_features(image, truth, ready):
        edge = 12
        inner = np.zeros(target.shape, bool)
        inner[edge:-edge, edge:-edge] = True
        flat = rng.choice(np.flatnonzero(inner), SAMPLES, replace=False)
        features.append(np.stack([p.ravel()[flat] for p in found.pictures], axis=1))
        inputs.append(np.stack([p.ravel()[flat] for p in found.inputs], axis=1))
        targets.append(target.ravel()[flat])
    f, i, t = np.concatenate(features), np.concatenate(inputs), np.concatenate(targets)
    error = float(((f[:, 0] - t) ** 2).mean())
    weight = np.full(len(t), 1 / (error + 2e-5) / len(t) * SAMPLES, np.float32)
    return f.astype(np.float32), i.astype(np.float32), t.astype(np.float32), weight


def train(
    data: list[tuple[NDArray[np.float32], ...]], *, epochs: int, hidden: tuple[int, int]
) -> dict[str, NDArray]:
    """Fit the network; the last tenth of the prints is held out and reported."""
    import torch

    torch.manual_seed(SEED)
    torch.set_num_threads(2)
    held = max(1, len(data) // 10)
    fit, check = data[:-held], data[-held:]
    f, i, t, w = (torch.from_numpy(np.concatenate([d[k] for d in fit])) for k in range(4))
    centre, scale = i.mean(dim=0), i.std(dim=0) + 1e-3
    sizes = (i.shape[1], *hidden, f.shape[1])
    layers = [torch.nn.Linear(a, b) for a, b in pairwise(sizes)]
    model = torch.nn.Sequential(*[m for layer in layers[:-1] for m in (layer, torch.nn.ReLU())], layers[-1])
    optimiser = torch.optim.Adam(model.parameters(), lr=4e-3)
    batch = 8192
    steps = epochs * (len(t) // batch)
    schedule = torch.optim.lr_scheduler.OneCycleLR(optimiser, 6e-3, total_steps=steps)
    w = w / w.mean()
    for epoch in range(epochs):
        order = torch.randperm(len(t))
        for start in range(0, len(t) - batch + 1, batch):
            at = order[start : start + batch]
            weights = torch.softmax(model((i[at] - centre) / scale), dim=1)
            error = (weights * f[at]).sum(dim=1) - t[at]
            # The print's own weight keeps hard prints from ruling; the root keeps edges in play.
            loss = (w[at] * error**2).mean()
            optimiser.zero_grad()
            loss.backward()
            optimiser.step()
            schedule.step()
        if epoch % 5 == 4 or epoch == epochs - 1:
            gains = []
            with torch.no_grad():
                for df, di, dt, _ in check:
                    weights = torch.softmax(model((torch.from_numpy(di) - centre) / scale), dim=1).numpy()
                    mixed = (weights * df).sum(axis=1)
                    gains.append(
                        10
                        * np.log10(((df - dt[:, None]) ** 2).mean(axis=0).min() / ((mixed - dt) ** 2).mean())
                    )
            print(
                f"epoch {epoch + 1}: held out, {np.mean(gains):.2f} dB over the best single feature "
                f"(least {np.min(gains):.2f})",
                flush=True,
            )
    out = {"centre": centre.numpy(), "scale": scale.numpy()}
    for n, layer in enumerate(layers):
        out[f"matrix{n}"] = layer.weight.detach().numpy().T.astype(np.float32)
        out[f"bias{n}"] = layer.bias.detach().numpy().astype(np.float32)
    return out


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--prints", type=int, default=320)
    parser.add_argument("--epochs", type=int, default=30)
    parser.add_argument("--cache", help="keep the simulated samples in this .npz for another run")
    args = parser.parse_args()
    start = time.perf_counter()
    if args.cache and Path(args.cache).exists():
        with np.load(args.cache) as stored:
            data = [tuple(stored[f"{n}_{k}"] for k in range(4)) for n in range(len(stored.files) // 4)]
    else:
        with ProcessPoolExecutor(2) as pool:
            data = list(pool.map(training_print, range(args.prints), chunksize=4))
        if args.cache:
            np.savez(args.cache, **{f"{n}_{k}": d[k] for n, d in enumerate(data) for k in range(4)})
    print(f"{len(data)} prints in {time.perf_counter() - start:.0f} s", file=sys.stderr)
    np.savez_compressed(OUT, **train(data, epochs=args.epochs, hidden=(32, 32)))
    print(
        f"wrote {OUT}, {OUT.stat().st_size / 1000:.0f} kB, {time.perf_counter() - start:.0f} s",
        file=sys.stderr,
    )


if __name__ == "__main__":
    main()
