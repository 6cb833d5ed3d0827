"""Recipes: strict, repeatable, and refused where they do not fit."""

import msgspec
import pytest
from prints import FOUR_INKS, card_print, scanned

from moire.errors import BadRequest, RecipeMismatch
from moire.examine import examine
from moire.model import Examination, Recipe
from moire.recipe import check_fits, from_json, prescribe, refit, to_json


@pytest.fixture(scope="module")
def found() -> Examination:
    return examine(scanned(card_print(*FOUR_INKS), 400)[0])


def test_a_recipe_survives_json(found: Examination) -> None:
    recipe = prescribe(found)
    assert recipe.removals
    assert from_json(to_json(recipe)) == recipe


def test_only_and_keep_choose_kinds(found: Examination) -> None:
    assert {r.kind for r in prescribe(found, only=("rosette",)).removals} <= {"rosette"}
    assert "halftone" not in {r.kind for r in prescribe(found, keep=("halftone",)).removals}


def test_on_its_own_scan_a_recipe_stays_as_it_is(found: Examination) -> None:
    assert refit(prescribe(found), found) == prescribe(found)


def beats_of(recipe: Recipe) -> set[tuple[float, float]]:
    """Beats to four digits, one of each opposite pair."""
    beats = (v for r in recipe.removals if r.kind == "rosette" for v in r.vectors_cpp)
    return {(round(max(v, (-v[0], -v[1]))[0], 4), round(max(v, (-v[0], -v[1]))[1], 4)) for v in beats}


def test_the_next_leaf_lies_a_little_turned(found: Examination) -> None:
    """Angles and rulings are measured anew within 3 degrees and 2 %, beats follow, inks keep apart."""
    leaf = examine(scanned(card_print(*FOUR_INKS), 400, turn_deg=1.4)[0])
    fitted = {r.ink: r for r in refit(prescribe(found), leaf).removals if r.method == "descreen"}
    own = {r.ink: r for r in prescribe(leaf).removals if r.method == "descreen"}
    assert fitted.keys() == own.keys()
    assert all(fitted[ink].vectors_cpp == own[ink].vectors_cpp for ink in own)
    assert beats_of(refit(prescribe(found), leaf)) == beats_of(prescribe(leaf))


def test_a_leaf_turned_further_is_another_print(found: Examination) -> None:
    leaf = examine(scanned(card_print(*FOUR_INKS), 400, turn_deg=8)[0])
    assert refit(prescribe(found), leaf) == prescribe(found)


@pytest.mark.parametrize("change", [{"strength": 1.5}, {"to_ppi": 1200.0}, {"to_ppi": 1.0}])
def test_meaningless_requests_are_refused(found: Examination, change: dict[str, float]) -> None:
    with pytest.raises(BadRequest):
        prescribe(found, **change)


@pytest.mark.parametrize(
    ("field", "value", "word"),
    [
        ("version", 2, "version 2"),
        ("format", "moire.plan", "moire.plan"),
        ("strength", 3.0, "strength"),
        ("strength", "1", "strength"),
        ("removals", [{"kind": "halftone", "method": "descreen", "vectors_cpp": [[0.1, 0.2]]}], "vectors"),
        ("removals", [{"kind": "banding", "method": "notch", "vectors_cpp": [[0.1, 7.0]]}], "vectors"),
        ("removals", [{"kind": "spots", "method": "notch", "vectors_cpp": []}], "spots"),
    ],
)
def test_wrong_recipes_name_what_is_wrong(found: Examination, field: str, value: object, word: str) -> None:
    document = msgspec.to_builtins(prescribe(found)) | {field: value}
    with pytest.raises(RecipeMismatch, match=word):
        from_json(msgspec.json.encode(document), name="leaf.json")


def test_a_recipe_for_another_rate_is_refused(found: Examination) -> None:
    recipe = prescribe(found)
    other, _ = scanned(card_print(FOUR_INKS[0]), 300)
    with pytest.raises(RecipeMismatch, match="400 x 400"):
        check_fits(recipe, other)
