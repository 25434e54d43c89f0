"""What a resource is, whom it is of and what it points to: all that is kept beside its raw JSON."""

from __future__ import annotations

import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

_LOCAL = re.compile(r"[A-Z][A-Za-z]{1,40}/[A-Za-z0-9\-.]{1,64}", re.ASCII)
_POINTERS = ("subject", "patient", "specimen", "encounter", "device")


@dataclass(frozen=True)
class Label:
    """Key (``Type/id``), versionId and lastUpdated as written ('' without), patient ('' without), targets."""

    key: str
    version: str
    updated: str
    patient: str
    targets: tuple[str, ...]


def label(resource: dict[str, Any], base_urls: Sequence[str]) -> Label | None:
    """The label of a resource; None for one without type or id."""
    kind, identity = resource.get("resourceType"), resource.get("id")
    if not isinstance(kind, str) or not isinstance(identity, str) or not _LOCAL.fullmatch(f"{kind}/{identity}"):
        return None
    meta = resource.get("meta")
    key = f"{kind}/{identity}"
    pointers = {name: local(_part(resource.get(name), "reference"), base_urls) for name in _POINTERS}
    patient = key if kind == "Patient" else pointers["subject"] or pointers["patient"]
    links = list(_links(resource, base_urls)) if kind == "Patient" else []
    named = resource.get("identifier") if kind == "Patient" else [_part_of(resource.get("subject"), "identifier")]
    targets = dict.fromkeys([*pointers.values(), *links, *_identifiers(named)])
    return Label(
        key,
        _part(meta, "versionId"),
        _part(meta, "lastUpdated"),
        patient if patient.startswith("Patient/") else "",
        tuple(target for target in targets if target),
    )


def local(reference: str, base_urls: Sequence[str]) -> str:
    """A reference as ``Type/id`` of this source; '' where it is none."""
    for base in base_urls:
        reference = reference.removeprefix(base.rstrip("/") + "/")
    reference = reference.partition("/_history/")[0]
    return reference if _LOCAL.fullmatch(reference) else ""


def _links(resource: dict[str, Any], base_urls: Sequence[str]) -> Iterator[str]:
    links = resource.get("link")
    for link in links if isinstance(links, list) else ():
        yield local(_part(_part_of(link, "other"), "reference"), base_urls)


def _identifiers(rows: Any) -> Iterator[str]:
    for row in rows if isinstance(rows, list) else ():
        if value := _part(row, "value"):
            yield f"identifier {_part(row, 'system')}|{value}"


def _part_of(node: Any, name: str) -> Any:
    return node.get(name) if isinstance(node, dict) else None


def _part(node: Any, name: str) -> str:
    found = _part_of(node, name)
    return found if isinstance(found, str) else ""
