"""The JSON that commands print fits the schemas that ship in docs/."""

import json
import os
from pathlib import Path
from typing import Any

import jsonschema
import msgspec
import pytest
from prints import FOUR_INKS, card_print, scanned

from moire.batch import Batch, Failure
from moire.examine import examine
from moire.model import Examination, Recipe
from moire.outcome import Outcome, Terms, failed, succeeded
from moire.plan import plan
from moire.plans import Plan
from moire.proof import Truth
from moire.recipe import prescribe
from moire.volume import find_volumes

DOCS = Path(__file__).resolve().parents[1] / "docs"
SCHEMAS = {
    "batch": Batch,
    "examination": Examination,
    "outcome": Outcome,
    "plan": Plan,
    "recipe": Recipe,
    "truth": Truth,
}


@pytest.mark.parametrize("name", sorted(SCHEMAS))
def test_shipped_schema_is_the_records_own(name: str) -> None:
    """Set REMAKE_SCHEMAS=1 to write them anew after a record has changed."""
    path = DOCS / f"{name}.schema.json"
    schema = msgspec.json.schema(SCHEMAS[name])
    if os.environ.get("REMAKE_SCHEMAS"):
        path.write_text(json.dumps(schema, indent=1) + "\n")
    assert json.loads(path.read_text()) == json.loads(json.dumps(schema))


def document(record: Any) -> Any:
    return json.loads(msgspec.json.encode(record))


@pytest.mark.parametrize("ppi", [200, 400])
def test_examinations_and_recipes_fit(ppi: int) -> None:
    found = examine(scanned(card_print(*FOUR_INKS), ppi)[0])
    for name, record in (("examination", found), ("recipe", prescribe(found))):
        jsonschema.validate(document(record), json.loads((DOCS / f"{name}.schema.json").read_text()))


def test_outcomes_fit() -> None:
    schema = json.loads((DOCS / "outcome.schema.json").read_text())
    found = examine(scanned(card_print(FOUR_INKS[0]), 300)[0])
    for outcome in (succeeded(found, "/a/b.png", seconds=1.5), failed("/a/c.png", "is empty", Terms())):
        jsonschema.validate(document(outcome), schema)


def test_batches_fit() -> None:
    schema = json.loads((DOCS / "batch.schema.json").read_text())
    found = examine(scanned(card_print(FOUR_INKS[0]), 400)[0])
    leaves = [succeeded(found, f"/a/{i}.png") for i in range(3)]
    batch = Batch(
        software="moire", folder="/a", files=4, failed=(Failure(path="/a/4.png", error="is empty"),),
        verdicts={"unreadable": 1, "rescan": 0, "refer": 0, "mendable": 3, "sound": 0},
        volumes=tuple(find_volumes(leaves)), trends=(),
    )  # fmt: skip
    assert batch.volumes
    jsonschema.validate(document(batch), schema)


def test_plans_fit() -> None:
    found = examine(scanned(card_print(FOUR_INKS[0]), 200)[0])
    made = plan(found, rates=[(200.0, 200.0), (300.0, 300.0)], turns=(0.0, 5.0), reprint=(150.0, 45.0))
    jsonschema.validate(document(made), json.loads((DOCS / "plan.schema.json").read_text()))


def test_demo_truths_fit() -> None:
    schema = json.loads((DOCS / "truth.schema.json").read_text())
    truths = sorted((DOCS.parent / "demo_images").glob("*.truth.json"))
    assert len(truths) == 5
    for path in truths:
        jsonschema.validate(json.loads(path.read_text()), schema)


def test_a_wrong_document_does_not_fit() -> None:
    schema = json.loads((DOCS / "examination.schema.json").read_text())
    found = document(examine(scanned(card_print(FOUR_INKS[0]), 300)[0]))
    found["findings"][0]["kind"] = "smudge"
    with pytest.raises(jsonschema.ValidationError):
        jsonschema.validate(found, schema)
