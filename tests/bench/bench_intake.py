"""What intake costs and what it survives: figures for docs/scale.md.

::

    python tests/bench/bench_intake.py survive FOLDER    # 2 000 files, killed ten times
    python tests/bench/bench_intake.py memory FOLDER     # 20 000 files, the parent's memory
    python tests/bench/bench_intake.py pace FOLDER       # A4 pages against merely decoding them
"""

import csv
import json
import os
import random
import sqlite3
import subprocess
import sys
import time
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from leaves import tiny_folder

from moire.crew import processes
from moire.outcome import Terms
from moire.scanfile import read
from moire.station import Job, examine_file

SEED = 11


def intake(top: Path, *more: str) -> list[str]:
    names = {"ledger": "l.sqlite", "csv": "t.csv", "jsonl": "t.jsonl"}
    outputs = [f"--{kind}={top / name}" for kind, name in names.items()]
    return [sys.executable, "-m", "moire", "intake", str(top / "scans"), "--quiet", *outputs, *more]


def survive(top: Path) -> None:
    """Kill a batch of 2 000 files, 2 % of them broken, ten times at random moments, and count."""
    paths = tiny_folder(top / "scans", 2000, broken_every=50)
    rng = random.Random(SEED)
    for kill in range(10):
        process = subprocess.Popen(intake(top, "--jobs", "2"), start_new_session=True)
        goal = kept(top / "l.sqlite") + rng.randint(1, 250)
        while kept(top / "l.sqlite") < goal:
            time.sleep(0.01)
        time.sleep(rng.uniform(0, 0.05))
        process.kill()
        process.wait()
        print(f"kill {kill + 1}: {kept(top / 'l.sqlite')} files in the ledger")
    done = subprocess.run(intake(top, "--jobs", "2"), check=False)
    expected = sorted(map(str, paths))
    with (top / "t.csv").open(newline="") as file:
        rows = [row["path"] for row in csv.DictReader(file)]
    lines = [json.loads(line) for line in (top / "t.jsonl").read_text().splitlines()]
    db = sqlite3.connect(top / "l.sqlite")
    ledger = [row[0] for row in db.execute("SELECT path FROM files ORDER BY path")]
    print(f"exit code {done.returncode}; integrity {db.execute('PRAGMA integrity_check').fetchone()[0]}")
    for name, found in (("ledger", ledger), ("csv", rows), ("json lines", [d["path"] for d in lines])):
        print(f"{name}: {len(found)} files, every file once: {found == expected}")
    reasons = {d["error"] for d in lines if d["error"]}
    print(f"broken: {sum(bool(d['error']) for d in lines)} of {len(lines)}, reasons: {reasons}")


def memory(top: Path) -> None:
    """Resident memory of the parent while it takes in 20 000 files (/proc/PID/status, VmRSS)."""
    tiny_folder(top / "scans", 20_000)
    process = subprocess.Popen(intake(top, "--jobs", "2"))
    steps = iter((500, 2000, 5000, 10_000, 15_000, 19_500))
    step, began = next(steps), time.perf_counter()
    while process.poll() is None:
        count = kept(top / "l.sqlite")
        while step is not None and count >= step:
            status = Path(f"/proc/{process.pid}/status").read_text()
            held = next(line for line in status.splitlines() if line.startswith("VmRSS"))
            print(f"after {count} files: {int(held.split()[1]) / 1024:.1f} MB")
            step = next(steps, None)
        time.sleep(0.05)
    size = (top / "l.sqlite").stat().st_size / 20_000
    print(f"{time.perf_counter() - began:.0f} s, ledger {size:.0f} bytes a file")


def pace(top: Path) -> None:
    """Processor time of pages, alone and two at once, and as a multiple of decoding the same files.

    The clock measures the other work of the machine too, processor time does not: by it two cores
    do ``2 * alone / together`` times what one does.
    """
    for kind, paths in pages(top).items():
        (alone, one_clock), (together, two_clock) = (taken(paths, jobs) for jobs in (1, 2))
        began = time.process_time()
        for path in paths:
            read(path)
        decode = (time.process_time() - began) / len(paths)
        gain = 2 * alone / together
        print(
            f"{kind}: {alone:.2f} s a page, {60 / alone:.0f} pages a minute and core, {alone / decode:.1f} "
            f"times decoding ({decode:.2f} s); {together:.2f} s with two at once, so two cores do {gain:.2f} "
            f"times what one does by processor time, {one_clock / two_clock:.2f} by the clock",
            flush=True,
        )


def taken(paths: list[Path], jobs: int) -> tuple[float, float]:
    """Mean processor seconds a page with so many processes at once, and seconds by the clock for all."""
    with processes(jobs) as pool:
        list(pool.map(examined, paths[:jobs]))  # started and warm
        began = time.perf_counter()
        spent = list(pool.map(examined, paths))
        return float(np.mean(spent)), time.perf_counter() - began


def examined(path: Path) -> float:
    began = time.process_time()
    examine_file(Job(path=str(path), terms=Terms(), limit_s=600))
    return time.process_time() - began


def pages(top: Path) -> dict[str, list[Path]]:
    """A4 pages at 300 ppi: four inks under a screen, one black screen, and text without any."""
    from PIL import Image, ImageDraw

    from moire.proof import ScreenOrder, print_sheet, scan_print
    from moire.scanner import Scanner
    from moire.testcard import draw_card

    card = (draw_card(900, 1270) ** 2.2).astype(np.float32)
    inks = {"cyan": 15, "magenta": 75, "yellow": 0, "black": 45}
    order = partial(ScreenOrder, ruling_lpi=150)
    out: dict[str, list[Path]] = {}
    for name, used in (("four inks", inks), ("one ink", {"black": 45})):
        if not made_before(top, name):
            orders = tuple(order(angle_deg=angle, ink=ink) for ink, angle in used.items())
            sheet = print_sheet(card, orders, width_in=8.27, height_in=11.69, seed=SEED)
            made: Any = scan_print(sheet, Scanner(ppi=(300, 300)), seed=SEED, name="a", unscreened_name="b")
            save(top, name, made.scan)
        out |= copies(top, name)
    page = Image.new("RGB", (2480, 3508), (246, 243, 236))
    draw = ImageDraw.Draw(page)
    rng = np.random.default_rng(SEED)
    for line in range(90):
        words = "".join(rng.choice(list("abcdefghij klmnopqrs tuvwxyz"), 85))
        draw.text((200, 200 + 34 * line), words, fill=(30, 28, 26), font_size=30)
    grain = rng.normal(0, 2, (3508, 2480, 1))
    save(top, "text", np.clip(np.asarray(page) + grain, 0, 255).astype(np.uint8))
    return out | copies(top, "text")


KINDS: dict[str, dict[str, Any]] = {"tif": {"compression": "tiff_lzw"}, "png": {}}


def first(top: Path, name: str, suffix: str) -> Path:
    return top / f"{name.replace(' ', '-')}-0.{suffix}"


def made_before(top: Path, name: str) -> bool:
    """Printing takes minutes: pages of an earlier run are used again."""
    return all(first(top, name, suffix).exists() for suffix in KINDS)


def save(top: Path, name: str, pixels: Any) -> None:
    from PIL import Image

    for suffix, options in KINDS.items():
        Image.fromarray(pixels).save(first(top, name, suffix), dpi=(300, 300), **options)


def copies(top: Path, name: str) -> dict[str, list[Path]]:
    """Four files of each kind: a result is found by its content, but only by a ledger."""
    out = {}
    for suffix in KINDS:
        source = first(top, name, suffix)
        paths = [source.with_name(source.name.replace("-0.", f"-{i}.")) for i in range(4)]
        for path in paths[1:]:
            path.write_bytes(source.read_bytes())
        out[f"{name}, {suffix}"] = paths
    return out


def kept(ledger: Path) -> int:
    if not ledger.exists():
        return 0
    db = sqlite3.connect(ledger, timeout=30)
    try:
        return int(db.execute("SELECT count(*) FROM files").fetchone()[0])
    except sqlite3.Error:
        return 0
    finally:
        db.close()


if __name__ == "__main__":
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    top = Path(sys.argv[2])
    top.mkdir(parents=True, exist_ok=True)
    {"survive": survive, "memory": memory, "pace": pace}[sys.argv[1]](top)
