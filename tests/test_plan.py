"""Plans: what is recommended, why, and with what uncertainty."""

from dataclasses import replace

import numpy as np
import pytest
from prints import FOUR_INKS, as_scan, card_print, scanned

import moire
from moire.errors import BadRequest
from moire.examine import examine
from moire.loom import Cloth
from moire.model import Candidate, Examination, Screen, Weave
from moire.plan import Scanning, plan, sweep
from moire.scanner import Scanner, digitise, sample
from moire.units import lpcm_to_lpi, lpi_to_lpcm

INKS = (("cyan", 15), ("magenta", 75), ("yellow", 0), ("black", 45))


def screen(lpi: float = 133, angle: float = 45, ink: str = "black", sigma: float = 0.0) -> Screen:
    return Screen(
        ruling_lpi=lpi, ruling_lpi_sigma=sigma, ruling_lpcm=lpi_to_lpcm(lpi), angle_deg=angle,
        angle_deg_sigma=0.0, ink=ink, shape="dot",
    )  # type: ignore[arg-type]  # fmt: skip


def weave(ends: float = 18, picks: float = 16) -> Weave:
    return Weave(
        ends_per_cm=ends, picks_per_cm=picks, sigma_per_cm=0.0, ends_per_inch=lpcm_to_lpi(ends),
        picks_per_inch=lpcm_to_lpi(picks), pattern="plain", skew_deg=0.0,
    )  # fmt: skip


def square(*ppi: float) -> list[tuple[float, float]]:
    return [(p, p) for p in ppi]


def test_the_function_keeps_its_name() -> None:
    assert callable(moire.plan)


def test_choices_are_sorted_by_what_their_beats_show() -> None:
    made = plan([screen()], rates=square(200, 266, 300, 400, 600, 1200))
    assert made.recommended == 0
    assert made.choices[0].ppi == (1200, 1200)
    assert made.choices[0].visibility < 1
    seen = [c.visibility for c in made.choices if c.visibility >= 1]
    assert seen == sorted(seen)
    for choice in made.choices:
        for beat in choice.beats:
            assert beat.visibility <= choice.visibility or beat.source == "rosette"


def test_a_screen_rendered_as_printed_is_not_a_beat() -> None:
    """At 1200 ppi nothing folds, but a 133 lpi screen is seen at 1:1: examine calls it mendable."""
    (choice,) = plan([screen()], rates=square(1200)).choices
    assert choice.visibility < 1 < choice.original_visibility
    assert choice.verdict == "mendable"


def test_a_folded_fundamental_means_rescan() -> None:
    made = plan([screen(150, 0)], rates=square(170))
    assert made.choices[0].verdict == "rescan"
    beat = made.choices[0].beats[0]
    assert beat.rate_order == (1, 0)
    assert beat.frequency_cpi == pytest.approx(20)
    assert beat.period_px == pytest.approx(8.5)
    assert beat.direction_deg == pytest.approx(0)


def test_rosettes_are_of_the_print_and_do_not_rank() -> None:
    made = plan([screen(133, a, ink) for ink, a in INKS], rates=square(300, 600, 1200))
    for choice in made.choices:
        (first, *_) = [b for b in choice.beats if b.source == "rosette"]
        assert first.frequency_cpi == pytest.approx(133 * 0.517638, rel=1e-5)
        assert first.rate_order == (0, 0)
        assert len(first.orders) == 2
    assert made.choices[0].visibility < 1
    assert any("whatever the rate" in line for line in made.why)


def test_measured_uncertainty_is_carried_into_the_period() -> None:
    """133.0 +/- 0.1 lpi twice folded by one rate: the beat is uncertain by 0.2 cycles/inch."""
    made = plan([screen(133.0, 0, sigma=0.1)], rates=square(259.57), scanning=Scanning(scale_sigma=0.0))
    beat = next(b for b in made.choices[0].beats if b.orders[0].orders in ((2, 0), (0, 2)))
    assert beat.frequency_sigma_cpi == pytest.approx(0.2)
    assert beat.period_mm == pytest.approx(25.4 / 6.43)
    assert beat.period_mm_range == pytest.approx((25.4 / 6.63, 25.4 / 6.23))


def test_an_uncertain_lock_is_not_trusted() -> None:
    """At three times a ruling at 0 degrees every fold meets a line of the screen; off scale it does not."""
    sure, unsure = (
        plan([screen(60, 0)], rates=square(180), scanning=Scanning(scale_sigma=s)).choices[0]
        for s in (0.0, 0.001)
    )
    assert sure.visibility == 0
    assert unsure.visibility > 1


def test_a_turn_is_a_choice() -> None:
    made = plan([screen(150, 0)], rates=square(310), turns=(0.0, 5.0, 10.0))
    assert sorted(c.turn_deg for c in made.choices) == [0, 5, 10]
    assert len({round(c.visibility, 6) for c in made.choices}) == 3


def test_unequal_rates() -> None:
    (choice,) = plan([screen(120, 30)], rates=[(300, 150)]).choices
    seen = {b.orders[0].orders: b for b in choice.beats}
    # Source: (-60, 103.923) folds to (-60, -46.076952) at 300 x 150 (petersen and Middleton 1962, worked).
    assert seen[(0, 1)].frequency_cpi == pytest.approx(np.hypot(60, 46.076952))


def test_a_reduction_names_its_kernel_and_master() -> None:
    coarse, fine = (
        plan([screen()], rates=square(150), scanning=Scanning(master=(600, 600), kernel=kernel)).choices[0]  # type: ignore[arg-type]
        for kernel in ("opencv-nearest", "pillow-lanczos")
    )
    assert coarse.master_ppi == (600, 600)
    assert coarse.kernel == "opencv-nearest"
    assert coarse.visibility > 5 * fine.visibility


def test_an_interpolated_rate_folds_by_the_sensor_too() -> None:
    made = plan(
        [screen(175, 0)], rates=square(450), scanning=Scanning(optical=(300, 300), kernel="opencv-linear")
    )
    folded = [b for b in made.choices[0].beats if b.capture_order != (0, 0)]
    assert folded
    assert "by the sensor" in folded[0].words


def test_a_reprint_beats_with_the_screen_left_in_the_scan() -> None:
    made = plan([screen(133, 45)], rates=square(600), reprint=(150.0, 45.0))
    beat = next(b for b in made.choices[0].beats if b.source == "reprint")
    assert beat.frequency_cpi == pytest.approx(17)
    assert beat.visibility > 1
    clean = plan(
        [screen(133, 45)], rates=square(100), reprint=(150.0, 45.0),
        scanning=Scanning(master=(600, 600), kernel="pillow-lanczos"),
    )  # fmt: skip
    assert all(b.visibility < 1 for b in clean.choices[0].beats if b.source == "reprint")


def test_cloth_is_honest_but_its_folds_are_not() -> None:
    made = plan(weave(), rates=square(72, 300))
    assert made.choices[0].ppi == (300, 300)
    assert made.choices[0].verdict == "sound"
    assert made.choices[1].visibility > 5
    assert not made.choices[1].keeps_detail
    assert made.patterns[0].kind == "cloth"


def test_a_plan_is_made_for_the_weave_that_was_read() -> None:
    """A 3/1 twill S has lines on its own diagonal, at quarters of its setts."""
    cloth = replace(weave(), pattern="twill", structure="3/1 twill S")
    made = plan(cloth, rates=square(40))
    assert made.patterns[0].name == "3/1 twill S weave"
    orders = [o.orders for b in made.choices[0].beats for o in b.orders]
    assert any(m % 4 and n % 4 for m, n in orders)
    assert all((m + n) % 4 == 0 for m, n in orders)


def test_rules_of_the_trade_are_weighed_not_recited() -> None:
    turned = {r.rule: r for r in plan([screen(133, 15)], rates=square(600)).rules}
    assert not turned["twice the ruling"].agrees
    assert "continuous-tone" in turned["twice the ruling"].words
    assert not turned["a whole multiple of the ruling"].agrees
    level = {r.rule: r for r in plan([screen(133, 0)], rates=square(600)).rules}
    assert level["a whole multiple of the ruling"].agrees
    assert "exact scale" in level["a whole multiple of the ruling"].words


def test_every_rate_above_the_one_named_is_free() -> None:
    made = plan([screen(85, 15)], rates=square(300))
    assert made.free_from_ppi is not None
    curve = sweep([screen(85, 15)], ppi=np.linspace(1.01, 1.5, 30) * made.free_from_ppi)
    assert (curve.visibility < 1).all()


def test_a_measured_scan_is_planned_from_with_its_uncertainty() -> None:
    found = examine(scanned(card_print(FOUR_INKS[3]), 600)[0])
    made = plan(found, rates=square(300, 600))
    assert made.patterns[0].frequencies_lpi[0] == pytest.approx(133, abs=0.2)
    assert made.patterns[0].sigma_lpi > 0
    assert made.readings == ()


@pytest.fixture
def unsettled() -> Examination:
    found = examine(scanned(card_print(FOUR_INKS[3]), 600)[0])
    lead = next(f for f in found.findings if f.screen)
    candidates = (
        Candidate(ruling_lpi=133.0, angle_deg=47.0, order=(0, 0), probability=0.6),
        Candidate(ruling_lpi=171.0, angle_deg=12.0, order=(1, 0), probability=0.3),
    )
    return replace(found, findings=(replace(lead, kind="alias", settled=False, candidates=candidates),))


def test_an_unsettled_fold_is_planned_for_in_each_reading(unsettled: Examination) -> None:
    made = plan(unsettled, rates=square(300, 600, 1200))
    (other,) = made.readings
    assert made.patterns[0].frequencies_lpi[0] == 133
    assert other.patterns[0].frequencies_lpi[0] == 171
    assert other.probability == 0.3
    assert made.settle is not None
    assert "settles it" in made.settle
    assert any(c.doubt > 0 for c in made.choices)


def test_cautions_defer_to_the_keeper() -> None:
    assert "keeper" in plan([screen()], rates=square(600)).caution


@pytest.mark.parametrize(
    "wrong",
    [
        lambda: plan([], rates=square(300)),
        lambda: plan([screen()], rates=[]),
        lambda: plan([screen(5)], rates=square(300)),
        lambda: plan([screen()], rates=square(5)),
        lambda: plan(weave(0.1), rates=square(300)),
        lambda: plan([screen()], rates=square(700), scanning=Scanning(master=(600, 600))),
        lambda: plan([screen()], rates=square(300), scanning=Scanning(master=(600, 600), optical=(600, 600))),
        lambda: plan(examine(as_scan(np.full((200, 200), 200, np.uint8), 300)), rates=square(300)),
        lambda: plan(examine(as_scan(np.full((200, 200), 200, np.uint8), None)), rates=square(300)),
    ],
)  # fmt: skip
def test_nothing_to_plan_for(wrong: object) -> None:
    with pytest.raises(BadRequest):
        wrong()  # type: ignore[operator]


def test_a_plan_from_scanned_cloth_is_for_its_own_weave_and_setts() -> None:
    cloth = Cloth(
        width_in=1.2, height_in=1.2, ends_per_cm=24, picks_per_cm=17, pattern="twill3/1S", jitter=0.02
    )
    scanner = Scanner(ppi=(400, 400))
    pixels = digitise(sample(cloth, scanner), scanner, np.random.default_rng(2))
    made = plan(examine(as_scan(pixels, 400)), rates=square(60, 300))
    (woven,) = made.patterns
    assert woven.name == "3/1 twill S weave"
    assert woven.frequencies_lpi == pytest.approx((24 * 2.54, 17 * 2.54), rel=0.01)
    assert made.choices[0].ppi == (300, 300)
    fine = made.choices[0].beats
    assert all(b.visibility < made.choices[1].visibility for b in fine)
