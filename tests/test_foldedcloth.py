"""Threads finer than the sampling grid reaches are named as such, and a second scan settles them."""

from functools import cache

import numpy as np
import pytest
from prints import as_scan

from moire.examine import examine
from moire.loom import Cloth
from moire.model import Finding, Scan
from moire.originals import measured_originals
from moire.scanner import Scanner, digitise, sample

PLAIN, TWILL, HOPSACK = (("plain", 41.0, 26.0), ("twill3/1S", 39.0, 27.0), ("basket2/2", 41.3, 35.4))


@cache
def scanned(pattern: str, ends: float, picks: float, ppi: float) -> Scan:
    cloth = Cloth(
        width_in=2.4, height_in=2.4, ends_per_cm=ends, picks_per_cm=picks, pattern=pattern, jitter=0.02,
        thickness=0.06, hair=0.2, dpi=1200, seed=4,
    )  # fmt: skip
    scanner = Scanner(ppi=(ppi, ppi), turn_deg=0.6)
    return as_scan(digitise(sample(cloth, scanner), scanner, np.random.default_rng(1)), ppi)


def woven(scan: Scan, second: Scan | None = None) -> Finding:
    (found,) = [f for f in examine(scan, second=second).findings if f.kind == "weave"]
    assert found.weave is not None
    return found


@pytest.mark.parametrize("cloth", [PLAIN, TWILL])
def test_threads_that_fold_are_read_from_their_binding(cloth: tuple[str, float, float]) -> None:
    """At 150 ppi ends of 1.4 to 1.5 pixels fold to 3 pixels; half of them would be another cloth."""
    found = woven(scanned(*cloth, 150))
    assert found.weave is not None
    assert found.weave.ends_per_cm == pytest.approx(cloth[1], rel=0.005)
    assert found.weave.picks_per_cm == pytest.approx(cloth[2], rel=0.005)
    assert not found.settled
    assert any("finer than half the sampling rate" in e for e in found.evidence)
    best = found.candidates[0]
    assert (best.order, best.probability > 0.5) == ((1, 0), True)
    assert best.ends_per_cm == pytest.approx(cloth[1], rel=0.01)
    assert sum(c.probability for c in found.candidates) <= 1 + 1e-9


def test_the_folded_line_is_a_beat_of_the_weave() -> None:
    found = examine(scanned(*PLAIN, 150))
    kinds = {f.kind: f for f in found.findings}
    assert kinds["alias"].parents == (found.findings.index(kinds["weave"]),)
    assert "order (" in kinds["alias"].evidence[0]
    assert any("cloth" in a for a in found.advice) or kinds["alias"].visibility < 1


def test_a_second_scan_settles_threads_that_fold() -> None:
    found = woven(scanned(*PLAIN, 150), second=scanned(*PLAIN, 300))
    assert found.settled
    assert found.weave is not None
    assert found.weave.ends_per_cm == pytest.approx(41, rel=0.005)
    assert any("second scan" in e for e in found.evidence)


def test_a_second_scan_overturns_what_only_looked_right() -> None:
    """A 2/2 hopsack that folds both ways looks like a plain weave of half its setts."""
    alone = woven(scanned(*HOPSACK, 150))
    assert not alone.settled
    assert any(c.ends_per_cm == pytest.approx(41.3, rel=0.01) for c in alone.candidates)
    settled = woven(scanned(*HOPSACK, 150), second=scanned(*HOPSACK, 300))
    assert settled.settled
    assert settled.weave is not None
    assert settled.weave.structure == "2/2 basket"
    assert settled.weave.ends_per_cm == pytest.approx(41.3, rel=0.005)
    assert settled.weave.picks_per_cm == pytest.approx(35.4, rel=0.005)


def test_a_plan_is_made_for_each_reading_left_open() -> None:
    readings = measured_originals(examine(scanned(*HOPSACK, 150)))
    assert len(readings) > 1
    assert readings[0].probability > readings[1].probability


def test_threads_well_within_reach_leave_nothing_open() -> None:
    found = woven(scanned(*PLAIN, 300))
    assert found.settled
    assert found.candidates == ()
