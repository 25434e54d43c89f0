"""Where each written content came from: one Provenance a content, and the Device that is this software."""

from __future__ import annotations

from functools import cache

from fhiro2.fhir import systems
from fhiro2.fhir.resources import Shape, dumped, quoted, shape, text_slot, time_slot
from fhiro2.model import Origins
from fhiro2.write import Run
from fhiro2.write.identity import SOFTWARE, SOFTWARE_ID, SOFTWARE_REFERENCE, provenance_of

_IDENTIFIER = {"system": systems.SOFTWARE_IDENTIFIER, "value": SOFTWARE}

_ASSEMBLER = {"system": systems.PARTICIPANT_TYPE, "code": "assembler", "display": "Assembler"}
_AGENT = {"type": {"coding": [_ASSEMBLER]}, "who": {"reference": SOFTWARE_REFERENCE, "identifier": _IDENTIFIER}}


STANDS_NO_LONGER = "stands no longer by what is known now"
TAKEN_BACK = "all that this software wrote was taken back"


class References(dict[int, str]):
    """The reference to the Observation behind each origin, versioned where a version is known, fit for a slot."""

    def __init__(self, origins: Origins) -> None:
        super().__init__()
        self.origins = origins

    def __missing__(self, origin: int) -> str:
        version = self.origins.versions[origin]
        text = f"Observation/{self.origins.ids[origin]}" + (f"/_history/{version}" if version else "")
        self[origin] = quoted(text)
        return self[origin]


class Entities(dict[int, str]):
    """The Provenance entity of each origin; without a version the content hash says which content it was."""

    def __init__(self, references: References) -> None:
        super().__init__()
        self.references = references

    def __missing__(self, origin: int) -> str:
        origins = self.references.origins
        content_hash = "" if origins.versions[origin] else origins.hashes[origin]
        self[origin] = entity(self.references[origin], content_hash)
        return self[origin]


def entity(reference: str, content_hash: str) -> str:
    """A source entity; ``reference`` is fit for a slot, ``content_hash`` may be empty."""
    if content_hash:
        return _hashed_entity().filled((reference, content_hash))
    return _plain_entity().filled((reference,))


def software(run: Run) -> str:
    """The Device that stands for this software, as one line."""
    return dumped(
        "Device",
        {
            "resourceType": "Device",
            "id": SOFTWARE_ID,
            "identifier": [_IDENTIFIER],
            "deviceName": [{"name": SOFTWARE, "type": "user-friendly-name"}],
            "type": {"text": "Software that derives oxygen-transport values and flags"},
            "version": [{"value": run.software_version}],
        },
    )


@cache
def _plain_entity() -> Shape:
    what = {"reference": text_slot("reference")}
    return shape("ProvenanceEntity", {"role": "source", "what": what}, [text_slot("reference")])


@cache
def _hashed_entity() -> Shape:
    identifier = {"system": systems.CONTENT_IDENTIFIER, "value": text_slot("hash")}
    what = {"reference": text_slot("reference"), "identifier": identifier}
    return shape("ProvenanceEntity", {"role": "source", "what": what}, [text_slot("reference"), text_slot("hash")])


@cache
def provenance_shape(run: Run, kind: str, policy: str) -> Shape:
    """The Provenance of the contents of one kind of resource that one run writes by one formula or rule.

    ``policy`` is the address of the formula or rule with its version. Slots: id (``identity.provenance_of``), id of
    the target, effective time, entities.
    """
    sources = {"role": "source", "what": {"reference": text_slot("source")}}
    created = {"system": systems.DATA_OPERATION, "code": "CREATE", "display": "create"}
    content = {
        "resourceType": "Provenance",
        "id": text_slot("id"),
        "target": [{"reference": f"{kind}/{text_slot('target')}"}],
        "occurredDateTime": time_slot(1),
        "recorded": run.recorded,
        "policy": [policy, f"urn:sha256:{run.pack_hash}"],
        "activity": {"coding": [created]},
        "agent": [_AGENT],
        "entity": [sources],
    }
    return shape("Provenance", content, [text_slot("id"), text_slot("target"), time_slot(1), sources])


def withdrawal(run: Run, target: str, content_hash: str, reason: str) -> str:
    """The Provenance, as one line, of taking ``target`` back as entered in error, and why."""
    nullified = {"system": systems.DATA_OPERATION, "code": "NULLIFY", "display": "nullify"}
    return dumped(
        "Provenance",
        {
            "resourceType": "Provenance",
            "id": provenance_of(target.partition("/")[2], content_hash),
            "target": [{"reference": target}],
            "recorded": run.recorded,
            "policy": [f"urn:sha256:{run.pack_hash}"],
            "reason": [{"text": reason}],
            "activity": {"coding": [nullified]},
            "agent": [_AGENT],
        },
    )
