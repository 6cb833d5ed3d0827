"""A derivative's records hold the digests of the files as they lie, and fit their standards."""

import hashlib
import json
import re
import shutil
from pathlib import Path
from xml.etree import ElementTree

import pytest

from moire.cli.main import main
from moire.errors import OutputRefused
from moire.manifest import add_to_manifest, check_manifest
from moire.preservation import PREMIS

DEMOS = Path(__file__).resolve().parents[1] / "demo_images"
LEAF = DEMOS / "courier-leaf.png"
# Order of elements in PREMIS 3.0's schema (premis.xsd, complex types file, eventComplexType and
# agentComplexType; value from memory), those that occur here.
ORDER = {
    "premis": "object event agent",
    "object": "objectIdentifier objectCharacteristics originalName relationship linkingEventIdentifier",
    "objectCharacteristics": "fixity size format creatingApplication",
    "fixity": "messageDigestAlgorithm messageDigest",
    "formatDesignation": "formatName",
    "creatingApplication": "creatingApplicationName creatingApplicationVersion dateCreatedByApplication",
    "relationship": "relationshipType relationshipSubType relatedObjectIdentifier relatedEventIdentifier",
    "event": "eventIdentifier eventType eventDateTime eventDetailInformation eventOutcomeInformation "
    "linkingAgentIdentifier linkingObjectIdentifier",
    "eventOutcomeInformation": "eventOutcome eventOutcomeDetail",
    "agent": "agentIdentifier agentName agentType agentVersion",
    "linkingAgentIdentifier": "linkingAgentIdentifierType linkingAgentIdentifierValue linkingAgentRole",
    "linkingObjectIdentifier": "linkingObjectIdentifierType linkingObjectIdentifierValue linkingObjectRole",
}


def run(*arguments: object) -> int:
    with pytest.raises(SystemExit) as stop:
        main(["mend", *map(str, arguments), "--quick", "--quiet"])
    return int(stop.value.code or 0)


def sha256(path: Path) -> str:
    return hashlib.sha256(path.read_bytes()).hexdigest()


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    top = tmp_path_factory.mktemp("bag")
    (top / "data").mkdir()
    out = top / "data" / "leaf-mended.tif"
    assert run(LEAF, "-o", out, "--premis", top / "leaf.xml", "--manifest", top / "manifest-sha256.txt") == 0
    return top


def texts(parent: ElementTree.Element, path: str) -> list[str]:
    return [e.text or "" for e in parent.findall("/".join(f"{{{PREMIS}}}{p}" for p in path.split("/")))]


def test_the_record_has_the_standards_elements_in_its_order(made: Path) -> None:
    root = ElementTree.parse(made / "leaf.xml").getroot()
    assert root.tag == f"{{{PREMIS}}}premis"
    assert root.get("version") == "3.0"
    for element in root.iter():
        space, _, name = element.tag[1:].partition("}")
        assert space == PREMIS
        children = [c.tag.partition("}")[2] for c in element]
        if name in ORDER:
            places = [ORDER[name].split().index(c) for c in children]
            assert places == sorted(places)
        elif name.endswith("Identifier"):
            assert children == [f"{name}Type", f"{name}Value"]
        assert children or (element.text or "").strip()


def test_the_record_tells_of_the_creation_with_both_digests(made: Path) -> None:
    root = ElementTree.parse(made / "leaf.xml").getroot()
    out = made / "data" / "leaf-mended.tif"
    assert texts(root, "object/originalName") == ["courier-leaf.png", "leaf-mended.tif"]
    digests = [sha256(LEAF), sha256(out)]
    assert texts(root, "object/objectCharacteristics/fixity/messageDigest") == digests
    assert texts(root, "object/objectCharacteristics/size") == [str(p.stat().st_size) for p in (LEAF, out)]
    assert texts(root, "event/eventType") == ["creation"]
    assert texts(root, "event/linkingObjectIdentifier/linkingObjectIdentifierValue") == digests
    assert texts(root, "event/linkingObjectIdentifier/linkingObjectRole") == ["source", "outcome"]
    assert texts(root, "object/relationship/relationshipType") == ["derivation"]
    assert (
        texts(root, "object/relationship/relatedObjectIdentifier/relatedObjectIdentifierValue") == digests[:1]
    )
    (event,) = texts(root, "event/eventIdentifier/eventIdentifierValue")
    assert texts(root, "object/linkingEventIdentifier/linkingEventIdentifierValue") == [event, event]
    (when,) = texts(root, "event/eventDateTime")
    # XML Schema dateTime with its offset, as PREMIS asks.
    assert re.fullmatch(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d[+-]\d\d:\d\d", when)
    (detail,) = texts(root, "event/eventDetailInformation/eventDetail")
    recipe = json.loads(detail[detail.index("{") :])
    assert recipe["removals"][0]["method"] == "descreen"


def test_the_bag_is_valid_to_another_implementation(made: Path) -> None:
    """The Library of Congress's own validator (package bagit)."""
    bagit = pytest.importorskip("bagit", reason="the test extra is not installed")
    shutil.copy(LEAF, made / "data")
    add_to_manifest(made / "manifest-sha256.txt", made / "data" / LEAF.name)
    assert bagit.Bag(str(made)).validate()
    (made / "data" / LEAF.name).write_bytes(b"changed")
    with pytest.raises(bagit.BagValidationError):
        bagit.Bag(str(made)).validate()
    shutil.copy(LEAF, made / "data")


def test_a_manifest_keeps_other_lines_and_renews_its_own(tmp_path: Path) -> None:
    (tmp_path / "data" / "a").mkdir(parents=True)
    manifest = tmp_path / "manifest-sha512.txt"
    one, two = tmp_path / "data" / "a" / "one.tif", tmp_path / "data" / "100% two.tif"
    for path in (two, one, two):
        path.write_bytes(path.name.encode() + (b"" if not manifest.exists() else manifest.read_bytes()))
        add_to_manifest(manifest, path)
    lines = dict(reversed(line.split("  ", 1)) for line in manifest.read_text().splitlines())
    # RFC 8493, 2.1.3: the percent sign is encoded, the blank is not.
    assert list(lines) == ["data/100%25 two.tif", "data/a/one.tif"]
    assert lines["data/100%25 two.tif"] == hashlib.sha512(two.read_bytes()).hexdigest()
    assert (tmp_path / "bagit.txt").read_text() == "BagIt-Version: 1.0\nTag-File-Character-Encoding: UTF-8\n"


def test_what_does_not_fit_a_bag_is_refused_before_any_work(tmp_path: Path) -> None:
    (tmp_path / "data").mkdir()
    inside = tmp_path / "data" / "x.tif"
    with pytest.raises(OutputRefused, match="is named manifest-sha256"):
        check_manifest(tmp_path / "sums.txt", inside)
    with pytest.raises(OutputRefused, match="lists files below"):
        check_manifest(tmp_path / "manifest-sha256.txt", tmp_path / "x.tif")
    with pytest.raises(OutputRefused, match="does not exist"):
        check_manifest(tmp_path / "no" / "manifest-sha256.txt", inside)
    (tmp_path / "manifest-sha256.txt").write_text("this is no manifest\n")
    with pytest.raises(OutputRefused, match="line 1 is no digest"):
        check_manifest(tmp_path / "manifest-sha256.txt", inside)
    assert run(LEAF, "-o", inside, "--manifest", tmp_path / "manifest-sha256.txt") == 4
    assert run(LEAF, "-o", inside, "--premis", tmp_path / "no" / "x.xml") == 4
    assert run(LEAF, "-o", inside, "--premis", inside) == 2
    assert list((tmp_path / "data").iterdir()) == []
