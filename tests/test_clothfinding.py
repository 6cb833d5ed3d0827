"""What an examination says of a cloth."""

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from prints import as_scan

from moire.examine import examine
from moire.loom import Cloth
from moire.model import Finding, Scan
from moire.scanner import Scanner, digitise, sample


@cache
def twill() -> Scan:
    cloth = Cloth(
        width_in=1.2, height_in=1.2, ends_per_cm=24, picks_per_cm=17, pattern="twill3/1S", jitter=0.02
    )
    scanner = Scanner(ppi=(400, 400), turn_deg=0.5)
    return as_scan(digitise(sample(cloth, scanner), scanner, np.random.default_rng(2)), 400)


def woven(scan: Scan, **how: str) -> Finding:
    (found,) = [f for f in examine(scan, **how).findings if f.kind == "weave"]  # type: ignore[arg-type]
    return found


def test_ends_run_down_the_page_unless_the_user_says_otherwise() -> None:
    down, across = woven(twill()), woven(twill(), warp="horizontal")
    assert down.weave is not None
    assert across.weave is not None
    assert down.weave.ends_per_cm == pytest.approx(24, rel=0.01)
    assert across.weave.picks_per_cm == pytest.approx(24, rel=0.01)
    assert (down.weave.structure, across.weave.structure) == ("3/1 twill S", "1/3 twill S")
    assert down.period_px < across.period_px


@pytest.mark.parametrize(("warp", "words"), [("vertical", "run down"), ("horizontal", "run across")])
def test_the_report_says_which_threads_were_taken_for_the_warp(warp: str, words: str) -> None:
    (said,) = [e for e in woven(twill(), warp=warp).evidence if "warp" in e]
    assert words in said
    assert f"--warp {warp}" in said


def test_without_a_rate_threads_are_told_in_pixels() -> None:
    found = woven(replace(twill(), ppi=None, ppi_source=None))
    assert found.weave is None
    (said,) = [e for e in found.evidence if "pixels an end" in e]
    size = float(said.split("unknown: ")[1].split()[0])
    assert size == pytest.approx(400 / 2.54 / 24, rel=0.01)
