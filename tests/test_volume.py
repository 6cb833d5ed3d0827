"""Leaves of one print are measured together, and a growing banding is seen over the days."""

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from prints import FOUR_INKS, card_print, scanned

from moire.examine import examine
from moire.mend import mend
from moire.model import Candidate, Finding, Line, Screen
from moire.outcome import Outcome, Terms, failed, succeeded
from moire.trend import find_trends, trend_note
from moire.volume import find_volumes, volume_note

SIGMA_LPI, SIGMA_DEG = 0.02, 0.01


def finding(**more: Any) -> Finding:
    plain: dict[str, Any] = {
        "kind": "halftone", "confidence": 1.0, "visibility": 3.0, "coverage": 1.0, "regions": (), "lines": (),
        "period_px": 3.0,
    }  # fmt: skip
    return Finding(**(plain | more))


def screen(ink: str, ruling: float, angle: float) -> Screen:
    return Screen(
        ruling_lpi=ruling, ruling_lpi_sigma=SIGMA_LPI, ruling_lpcm=ruling / 2.54, angle_deg=angle % 90,
        angle_deg_sigma=SIGMA_DEG, ink=ink, shape="dot",
    )  # fmt: skip


def leaf(path: str, *findings: Finding, ppi: float = 400.0) -> Outcome:
    name = path.rsplit("/", 1)[1]
    plain = replace(failed(path, "", Terms()), file=name, verdict="mendable", findings=findings)
    return replace(plain, ppi=(ppi, ppi))


def printed(folder: str, count: int, *, seed: int = 0, turn_deg: float = 2.0) -> list[Outcome]:
    """Leaves of a print at 133.3 lpi, cyan at 89 and black at 45 degrees, each turned on the platen."""
    rng = np.random.default_rng(seed)
    out = []
    for i in range(count):
        turn = rng.normal(0, turn_deg)
        screens = [
            screen(ink, 133.3 + rng.normal(0, SIGMA_LPI), angle + turn + rng.normal(0, SIGMA_DEG))
            for ink, angle in (("cyan", 89.0), ("black", 45.0))
        ]
        out.append(leaf(f"{folder}/leaf-{i:03d}.tif", *(finding(screen=s) for s in screens)))
    return out


def test_many_leaves_measure_better_than_one() -> None:
    """The mean of 25 leaves is five times as certain as one (sigma over the root of n)."""
    offs = []
    for seed in range(20):
        (volume,) = find_volumes(printed("/v", 25, seed=seed))
        assert (volume.folder, volume.leaves, volume.ppi) == ("/v", 25, (400.0, 400.0))
        for shared in volume.screens:
            assert shared.leaves == 25
            assert shared.ruling_lpi_sigma_one == SIGMA_LPI
            assert 0.8 * SIGMA_LPI / 5 < shared.ruling_lpi_sigma < 1.6 * SIGMA_LPI / 5
            offs.append((shared.ruling_lpi - 133.3) / shared.ruling_lpi_sigma)
    assert 0.7 < np.std(offs) < 1.3


def test_the_turn_of_each_leaf_leaves_the_angle_between_inks_alone() -> None:
    """Leaves turn by degrees; the angle between cyan and black comes out to a few thousandths."""
    (volume,) = find_volumes(printed("/v", 25))
    by_ink = {s.ink: s for s in volume.screens}
    between = (by_ink["cyan"].angle_deg - by_ink["black"].angle_deg) % 90
    assert between == pytest.approx(44, abs=0.01)
    assert by_ink["cyan"].angle_deg_sigma < SIGMA_DEG / 3
    assert volume.turn_deg == pytest.approx(2.0, rel=0.5)
    assert volume.recipe is None
    assert "differ too much" in volume_note(volume)


def test_each_folder_and_rate_is_a_volume_of_its_own() -> None:
    a, b, inner = printed("/s/a", 4), printed("/s/b", 3), printed("/s/a/plates", 3)
    few = printed("/s/c", 2)
    coarse = [replace(o, path=o.path.replace("leaf", "tiny"), ppi=(200.0, 200.0)) for o in a]
    batch = sorted([*a, *b, *inner, *few, *coarse], key=lambda o: o.path)
    found = sorted((v.folder, v.ppi[0], v.leaves) for v in find_volumes(batch))
    assert found == [("/s/a", 200.0, 4), ("/s/a", 400.0, 4), ("/s/a/plates", 400.0, 3), ("/s/b", 400.0, 3)]


def test_another_print_in_the_folder_does_not_count() -> None:
    leaves = printed("/v", 5)
    other = leaf("/v/zz.tif", finding(screen=screen("black", 100.0, 45.0)))
    (volume,) = find_volumes([*leaves, other])
    assert {s.leaves for s in volume.screens} == {5}
    assert volume.leaves == 5


def test_the_volume_settles_a_folded_leaf() -> None:
    candidates = tuple(
        Candidate(ruling_lpi=r, angle_deg=10.0, order=(1, 0), probability=0.4) for r in (133.0, 175.0)
    )
    folded = finding(kind="alias", settled=False, screen=screen("black", 175.0, 10.0), candidates=candidates)
    (volume,) = find_volumes([*printed("/v", 5), leaf("/v/zz.tif", folded)])
    assert volume.settled == ("/v/zz.tif",)
    assert "settles 1 folded leaves" in volume_note(volume)


def test_one_recipe_serves_real_leaves() -> None:
    """Scans of one print, turned a little, mended by the volume's recipe as by their own."""
    orders = (FOUR_INKS[0], FOUR_INKS[3])
    scans = [
        scanned(card_print(*orders, width_in=1.2, seed=seed), 400, turn_deg=turn)[0]
        for seed, turn in ((3, -0.3), (4, 0.0), (5, 0.3))
    ]
    outcomes = [succeeded(examine(s), f"/v/{i}.tif") for i, s in enumerate(scans)]
    (volume,) = find_volumes(outcomes)
    assert {s.ink: round(s.ruling_lpi) for s in volume.screens} == {"cyan": 133, "black": 133}
    for shared, order in zip(sorted(volume.screens, key=lambda s: s.ink), orders[::-1], strict=True):
        assert shared.ruling_lpi == pytest.approx(order.ruling_lpi, abs=4 * shared.ruling_lpi_sigma + 0.02)
        assert shared.angle_deg == pytest.approx(order.angle_deg, abs=0.05)
    assert volume.recipe is not None
    own = mend(scans[2], outcomes[2], quick=True)
    shared_way = mend(scans[2], outcomes[2], recipe=replace(volume.recipe, quick=True))
    removed = [min(r.removed_db for r in m.measures.lines) for m in (own, shared_way)]
    assert removed[1] > removed[0] - 1.5


def banded(
    days: int, per_day: int, grow: float, *, period_mm: float = 4.2
) -> Iterator[tuple[Outcome, float]]:
    rng = np.random.default_rng(5)
    f = 25.4 / period_mm / 400
    for day in range(days):
        for i in range(per_day):
            line = Line(
                fx_cpp=1e-5, fy_cpp=f * rng.normal(1, 0.001), sigma_cpp=1e-5,
                amplitude=0.5 + grow * day + rng.normal(0, 0.1), snr_db=20.0,
            )  # fmt: skip
            yield leaf(f"/d{day}/{i}.tif", finding(kind="banding", lines=(line,))), 19000.0 + day + i / 50


def test_banding_that_grows_is_pointed_out() -> None:
    (trend,) = find_trends(banded(10, 6, 0.08))
    assert (trend.along, trend.scans) == ("y", 60)
    assert trend.period_mm == pytest.approx(4.2, rel=1e-3)
    assert trend.first_amplitude == pytest.approx(0.5, abs=0.1)
    assert trend.last_amplitude == pytest.approx(0.5 + 9.1 * 0.08, abs=0.1)
    assert "4.200 mm along y grew from 0.48 to 1.23" in trend_note(trend)


def test_banding_that_stays_or_was_seen_too_briefly_is_not() -> None:
    assert find_trends(banded(10, 6, 0.0)) == ()
    assert find_trends(banded(10, 6, -0.02)) == ()
    assert find_trends(banded(2, 30, 0.5)) == ()
    assert find_trends(banded(4, 1, 0.5)) == ()
    assert find_trends([]) == ()


def test_two_periods_are_two_series() -> None:
    both = [*banded(10, 4, 0.08), *banded(10, 4, 0.0, period_mm=3.0)]
    (trend,) = find_trends(both)
    assert trend.period_mm == pytest.approx(4.2, rel=1e-3)


def test_the_command_tells_of_both(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    import json
    import os
    import shutil

    from moire.cli.main import main
    from moire.recipe import from_json

    demos = Path(__file__).resolve().parents[1] / "demo_images"
    scans = tmp_path / "courier"
    scans.mkdir()
    for i in range(3):
        shutil.copy(demos / "courier-leaf.png", scans / f"{i}.png")
        with (scans / f"{i}.png").open("ab") as file:
            file.write(b"\0" * i)  # another content, the same picture
        os.utime(scans / f"{i}.png", (i * 86400, i * 86400))
    with pytest.raises(SystemExit) as stop:
        main(["intake", str(scans), "--ledger", str(tmp_path / "l.sqlite"), "--jobs", "1", "--json",
              "--report", str(tmp_path / "sheet")])  # fmt: skip
    assert stop.value.code == 0
    out, err = capsys.readouterr()
    (volume,) = json.loads(out)["volumes"]
    assert volume["leaves"] == 3
    assert "courier: the same print on 3 leaves: black 84.9" in " ".join(err.split())
    (recipe,) = (tmp_path / "sheet" / "recipes").iterdir()
    assert recipe.name == "0001-courier.json"
    assert from_json(recipe.read_bytes()).removals[0].ink == "black"
    assert "One recipe serves them all" in (tmp_path / "sheet" / "index.html").read_text(encoding="utf-8")
