"""Folders of small scans, some of them broken, and workers that fail on demand."""

import ctypes
import os
import signal
import sqlite3
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from pathlib import Path
from typing import Any

import numpy as np
from PIL import Image

from moire.station import prepare


def tiny_folder(folder: Path, count: int, *, broken_every: int = 0) -> list[Path]:
    """`count` grey scans of 40 x 32 px, no two alike; every so many is cut short."""
    rng = np.random.default_rng(7)
    paths = []
    for i in range(count):
        place = folder / f"volume-{i // 100:02d}"
        place.mkdir(parents=True, exist_ok=True)
        path = place / f"leaf-{i:05d}.png"
        Image.fromarray(rng.integers(0, 255, (32, 40), np.uint8)).save(path)
        if broken_every and i % broken_every == 1:
            path.write_bytes(path.read_bytes()[:200])
        paths.append(path)
    return paths


def sabotaged(jobs: int = 2) -> ProcessPoolExecutor:
    """Workers that fail on files of some names.

    They die on crash*, hang on hang* without giving up the interpreter, stop so dead on stop*
    that they cannot even end themselves, and raise on bug*.
    """
    return ProcessPoolExecutor(jobs, mp_context=get_context("forkserver"), initializer=_sabotage)


def _sabotage() -> None:
    import moire.scanfile

    prepare()
    whole = moire.scanfile.pages

    def pages(path: Any) -> int:
        name = Path(path).name
        if name.startswith("crash"):
            os.kill(os.getpid(), signal.SIGSEGV)
        if name.startswith("hang"):
            ctypes.PyDLL(None).sleep(60)
        if name.startswith("stop"):
            os.kill(os.getpid(), signal.SIGSTOP)
        if name.startswith("bug"):
            raise ZeroDivisionError("a fault of ours")
        return whole(path)

    moire.scanfile.pages = pages


def kept(ledger: Path) -> int:
    """Results in a ledger, 0 where there is none yet."""
    if not ledger.exists():
        return 0
    db = sqlite3.connect(ledger, timeout=10)
    try:
        return int(db.execute("SELECT count(*) FROM results").fetchone()[0])
    except sqlite3.Error:
        return 0
    finally:
        db.close()
