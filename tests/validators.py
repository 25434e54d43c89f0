"""Three independent judges of FHIR R4 resources: none is enough alone, so a resource must pass them all.

fhirkit-rs (structure, types, cardinality), the official JSON schema through jsonschema (codes, patterns), and the
constraints of the official definitions through a FHIRPath engine together with the required bindings. The schema and
the definitions in ``fixtures/reference/fhir_r4`` are reduced; its README says how.
"""

from __future__ import annotations

import copy
import json
from collections.abc import Callable, Iterator
from datetime import datetime
from functools import cache
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import fhirkit
import jsonschema
from fhirpathpy import compile as compile_path
from fhirpathpy.engine.nodes import ResourceNode
from fhirpathpy.models import models

DEFINITIONS = Path(__file__).parent.parent / "fixtures" / "reference" / "fhir_r4"
TYPES = ("Device", "Flag", "Observation", "Provenance")
XHTML = "{http://www.w3.org/1999/xhtml}"
# A part of what R4 allows in a narrative (basic formatting of HTML, no scripts or forms) is enough for what we write.
TAGS = {
    "b",
    "br",
    "div",
    "em",
    "i",
    "li",
    "ol",
    "p",
    "span",
    "strong",
    "table",
    "tbody",
    "td",
    "th",
    "thead",
    "tr",
    "ul",
}


def problems(path: Path) -> list[str]:
    """What the three judges object to in our four types in a folder of ``*.ndjson``, or in one such file."""
    files = sorted(path.glob("*.ndjson")) if path.is_dir() else [path]
    found, seen = [], 0
    for file in files:
        for number, line in enumerate(file.read_text(encoding="utf-8").splitlines(), 1):
            resource = json.loads(line)
            if resource.get("resourceType") in TYPES:
                seen += 1
                found += [f"{file.name}:{number}: {text}" for judge in JUDGES for text in judge(resource)]
    return found if seen else [f"{path.name}: nothing there to judge"]


def by_structure(resource: dict[str, Any]) -> list[str]:
    """Objections of fhirkit-rs."""
    return [f"{issue.path}: {issue.message}" for issue in fhirkit.validate(resource) if issue.severity == "error"]


def by_schema(resource: dict[str, Any]) -> list[str]:
    """Objections of the official JSON schema."""
    return [f"{error.json_path}: {error.message}" for error in _schema(resource["resourceType"]).iter_errors(resource)]


def by_constraints(resource: dict[str, Any]) -> list[str]:
    """Broken constraints and required bindings of the official definitions."""
    return [
        f"{path}: {text}"
        for path, kinds, node in _nodes(resource["resourceType"], resource)
        for text in [*_broken(path, kinds, node, resource), *_unbound(path, node)]
    ]


JUDGES: tuple[Callable[[dict[str, Any]], list[str]], ...] = (by_structure, by_schema, by_constraints)


@cache
def _schema(kind: str) -> jsonschema.Draft6Validator:
    schema = json.loads((DEFINITIONS / "schema.json").read_text(encoding="utf-8"))
    return jsonschema.Draft6Validator({**schema, "$ref": f"#/definitions/{kind}"})


@cache
def _definitions() -> dict[str, Any]:
    found: dict[str, Any] = json.loads((DEFINITIONS / "elements.json").read_text(encoding="utf-8"))
    return found


def _nodes(path: str, node: Any) -> Iterator[tuple[str, tuple[str, ...], Any]]:
    """Every node with its path in the definitions and the paths whose constraints apply to it."""
    elements = _definitions()["elements"]
    row = elements.get(path, {})
    path = row.get("same_as", path)
    types = elements.get(path, {}).get("types", [])
    yield path, (path, *types) if len(types) == 1 else (path,), node
    if not isinstance(node, dict):
        return
    inside = types[0] if len(types) == 1 and types[0] not in ("BackboneElement", "Element") else path
    for key, value in node.items():
        for item in value if isinstance(value, list) else [value]:
            yield from _child(inside, key, item)


def _child(parent: str, key: str, node: Any) -> Iterator[tuple[str, tuple[str, ...], Any]]:
    elements = _definitions()["elements"]
    if f"{parent}.{key}" in elements:
        yield from _nodes(f"{parent}.{key}", node)
        return
    for cut in range(len(key) - 1, 0, -1):
        choice = f"{parent}.{key[:cut]}[x]"
        kind = next((t for t in elements.get(choice, {}).get("types", []) if t.lower() == key[cut:].lower()), None)
        if kind:
            yield from _nodes(kind, node)
            return


def _broken(path: str, kinds: tuple[str, ...], node: Any, resource: dict[str, Any]) -> Iterator[str]:
    for kind in kinds:
        for constraint in _definitions()["elements"].get(kind, {}).get("constraints", []):
            key = constraint["key"]
            if constraint["severity"] == "error" and not _holds(key, constraint["expression"], kind, node, resource):
                yield f"{key} is broken"


def _unbound(path: str, node: Any) -> Iterator[str]:
    value_set = _definitions()["elements"].get(path, {}).get("binding")
    if value_set and isinstance(node, str) and node not in _definitions()["value_sets"][value_set]:
        yield f"{node} is not in {value_set}"


def _holds(key: str, expression: str, kind: str, node: Any, resource: dict[str, Any]) -> bool:
    if key in BY_HAND:
        return BY_HAND[key](node)
    context = {"resource": resource, "rootResource": resource}
    result = _compiled(expression)(ResourceNode.create_node(copy.deepcopy(node), kind), context)
    return result == [True]


@cache
def _compiled(expression: str) -> Any:
    return compile_path(expression, models["r4"], {"traceFn": lambda *_: None})


def _range_in_order(node: dict[str, Any]) -> bool:
    low, high = node.get("low"), node.get("high")
    return not low or not high or low.get("code") != high.get("code") or low["value"] <= high["value"]


def _period_in_order(node: dict[str, Any]) -> bool:
    ends = [datetime.fromisoformat(node[key]) for key in ("start", "end") if key in node]
    return len(ends) < 2 or ends[0] <= ends[1]


def _plain_html(div: str) -> bool:
    try:
        root = ElementTree.fromstring(div)  # noqa: S314 - our own output, and nothing in it is resolved
    except ElementTree.ParseError:
        return False
    names = [element.tag for element in root.iter()]
    return names[0] == f"{XHTML}div" and all(
        name.startswith(XHTML) and name.removeprefix(XHTML) in TAGS for name in names
    )


def _some_text(div: str) -> bool:
    return bool("".join(ElementTree.fromstring(div).itertext()).strip())  # noqa: S314


# What the engine does not have: comparison of quantities, hasValue() and htmlChecks().
BY_HAND: dict[str, Callable[[Any], bool]] = {
    "rng-2": _range_in_order,
    "per-1": _period_in_order,
    "txt-1": _plain_html,
    "txt-2": _some_text,
}
