"""Recipes: strict, repeatable, and refused where they do not fit."""

import msgspec
import pytest
from prints import FOUR_INKS, card_print, scanned

from moire.errors import BadRequest, RecipeMismatch
from moire.examine import examine
from moire.model import Examination
from moire.recipe import check_fits, from_json, prescribe, to_json


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
