"""A preservation record: how a derivative came to be, as PREMIS 3 XML.

The event is a creation of a new object with a derivation from its source. It is no
normalization and no migration: the derivative is for access, the master stays the archival copy.
"""

from __future__ import annotations

import uuid
from dataclasses import dataclass
from xml.etree import ElementTree

from moire.model import Mending
from moire.recipe import to_json

PREMIS = "http://www.loc.gov/premis/v3"
_SCHEMA = "http://www.loc.gov/standards/premis/v3/premis.xsd"
_XSI = "http://www.w3.org/2001/XMLSchema-instance"
_FORMATS = {
    "tif": "image/tiff", "tiff": "image/tiff", "png": "image/png", "jpg": "image/jpeg",
    "jpeg": "image/jpeg", "jp2": "image/jp2", "webp": "image/webp", "bmp": "image/bmp",
}  # fmt: skip


@dataclass(frozen=True, slots=True, kw_only=True)
class StoredFile:
    """A file as it lies on disk: name, SHA-256 in hexadecimal, size in bytes."""

    name: str
    sha256: str
    size: int


def premis(mending: Mending, *, master: StoredFile, derivative: StoredFile, at: str) -> bytes:
    """PREMIS 3.0 document of two file objects, the creation event between them, and its agent.

    Parameters
    ----------
    mending : Mending
    master, derivative : StoredFile
        Both with the digests of the files as they lie on disk.
    at : str
        When the derivative was written, in ISO 8601.

    Returns
    -------
    bytes
        UTF-8 XML.

    Notes
    -----
    PREMIS Data Dictionary for Preservation Metadata, version 3.0 (2015); event types as in the
    Library of Congress's preservation vocabularies.
    """
    ElementTree.register_namespace("", PREMIS)
    ElementTree.register_namespace("xsi", _XSI)
    event = str(uuid.uuid5(uuid.NAMESPACE_URL, f"{master.sha256} {derivative.sha256} {at}"))
    root = ElementTree.Element(
        f"{{{PREMIS}}}premis", {"version": "3.0", f"{{{_XSI}}}schemaLocation": f"{PREMIS} {_SCHEMA}"}
    )
    _object(root, master, event=event)
    made = _object(root, derivative, event=event, source=master, software=mending.before.software, at=at)
    assert made is not None
    _event(root, mending, master=master, derivative=derivative, event=event, at=at)
    agent = _add(root, "agent")
    _identifier(agent, "agentIdentifier", "local", mending.before.software)
    name, _, version = mending.before.software.partition(" ")
    _add(agent, "agentName", name)
    _add(agent, "agentType", "software")
    _add(agent, "agentVersion", version)
    ElementTree.indent(root)
    return bytes(ElementTree.tostring(root, encoding="UTF-8", xml_declaration=True)) + b"\n"


def _object(
    root: ElementTree.Element,
    file: StoredFile,
    *,
    event: str,
    source: StoredFile | None = None,
    software: str = "",
    at: str = "",
) -> ElementTree.Element:
    thing = _add(root, "object")
    thing.set(f"{{{_XSI}}}type", "file")
    _identifier(thing, "objectIdentifier", "SHA-256", file.sha256)
    about = _add(thing, "objectCharacteristics")
    fixity = _add(about, "fixity")
    _add(fixity, "messageDigestAlgorithm", "SHA-256")
    _add(fixity, "messageDigest", file.sha256)
    _add(about, "size", str(file.size))
    suffix = file.name.rpartition(".")[2].lower()
    designation = _add(_add(about, "format"), "formatDesignation")
    _add(designation, "formatName", _FORMATS.get(suffix, "application/octet-stream"))
    if software:
        name, _, version = software.partition(" ")
        by = _add(about, "creatingApplication")
        _add(by, "creatingApplicationName", name)
        _add(by, "creatingApplicationVersion", version)
        _add(by, "dateCreatedByApplication", at)
    _add(thing, "originalName", file.name)
    if source is not None:
        relationship = _add(thing, "relationship")
        _add(relationship, "relationshipType", "derivation")
        _add(relationship, "relationshipSubType", "has source")
        _identifier(relationship, "relatedObjectIdentifier", "SHA-256", source.sha256)
        _identifier(relationship, "relatedEventIdentifier", "UUID", event)
    _identifier(thing, "linkingEventIdentifier", "UUID", event)
    return thing


def _event(
    root: ElementTree.Element,
    mending: Mending,
    *,
    master: StoredFile,
    derivative: StoredFile,
    event: str,
    at: str,
) -> None:
    happened = _add(root, "event")
    _identifier(happened, "eventIdentifier", "UUID", event)
    _add(happened, "eventType", "creation")
    _add(happened, "eventDateTime", at)
    recipe = to_json(mending.recipe).decode()
    detail = f"Derivative with periodic artifacts of print and scanner removed by this recipe: {recipe}"
    _add(_add(happened, "eventDetailInformation"), "eventDetail", detail)
    outcome = _add(happened, "eventOutcomeInformation")
    _add(outcome, "eventOutcome", "success")
    m = mending.measures
    note = (
        f"Verdict {mending.before.verdict} before, {mending.after.verdict} after; strongest pattern "
        f"{m.visibility_before:.2f} times the eye's threshold before, {m.visibility_after:.2f} after; "
        f"mean colour shift {m.colour_shift_mean:.2f} (CIEDE2000). The master was not changed."
    )
    _add(_add(outcome, "eventOutcomeDetail"), "eventOutcomeDetailNote", note)
    agent = _identifier(happened, "linkingAgentIdentifier", "local", mending.before.software)
    _add(agent, "linkingAgentRole", "executing program")
    for file, role in ((master, "source"), (derivative, "outcome")):
        linked = _identifier(happened, "linkingObjectIdentifier", "SHA-256", file.sha256)
        _add(linked, "linkingObjectRole", role)


def _identifier(parent: ElementTree.Element, name: str, kind: str, value: str) -> ElementTree.Element:
    found = _add(parent, name)
    _add(found, f"{name}Type", kind)
    _add(found, f"{name}Value", value)
    return found


def _add(parent: ElementTree.Element, name: str, text: str = "") -> ElementTree.Element:
    child = ElementTree.SubElement(parent, f"{{{PREMIS}}}{name}")
    if text:
        # XML 1.0 has no control characters but tab and line ends.
        child.text = "".join(c if c >= " " or c in "\t\n" else "\N{REPLACEMENT CHARACTER}" for c in text)
    return child
