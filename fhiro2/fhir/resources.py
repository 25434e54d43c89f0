"""Resources out: each form is built once through ``fhir.resources.R4B`` and then filled in as text.

A *shape* is the JSON text of a resource that R4B accepted, cut at each place that varies from instance to instance (a
*slot*). While the shape is built a slot holds a stand-in that is valid there: ``text_slot`` (texts, ids, references),
``time_slot`` (dateTime, instant), ``number_slot`` (decimal); a whole entry, as the dictionary that was given for it,
is a slot for all entries of its list. ``quoted`` makes a text fit for a slot. R4B checks structure, not codes or
invariants: whoever builds a shape answers for the required bindings, obs-6, obs-7 and qty-3, which are the same in
every instance of it.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from functools import cache
from json.encoder import encode_basestring
from typing import Any

import numpy as np
from pydantic import BaseModel

from fhiro2.model import Integers


class Shape:
    """The text of a resource or element with slots."""

    def __init__(self, pieces: Sequence[str]) -> None:
        self._texts = [""] * (2 * len(pieces) - 1)
        self._texts[::2] = pieces

    def filled(self, slots: tuple[str, ...]) -> str:
        """The text with ``slots`` in their places; raises ValueError if there are too many or too few."""
        texts = self._texts.copy()
        texts[1::2] = slots
        return "".join(texts)


def text_slot(name: str) -> str:
    """A stand-in for a text, an id or a reference."""
    return f"slot-{name}-end"


def time_slot(number: int) -> str:
    """A stand-in for the ``number``-th point in time of a shape."""
    return f"1901-01-01T00:00:00.{number:06d}Z"


def number_slot(number: int) -> float:
    """A stand-in for the ``number``-th decimal of a shape."""
    return 900_000 + number + 0.125


def quoted(text: str) -> str:
    """``text`` as it stands between the quotes of a JSON string."""
    return encode_basestring(text)[1:-1]


def instants(microseconds: Integers) -> list[str]:
    """Points in time (microseconds since 1970) as FHIR instants in UTC, cut to milliseconds."""
    return [f"{text}Z" for text in np.datetime_as_string(microseconds.astype("M8[us]"), unit="ms").tolist()]


def date_times(microseconds: Integers) -> list[str]:
    """Points in time as FHIR dateTimes in UTC: in milliseconds, or in seconds where they are whole."""
    return [f"{text[:-5]}Z" if text.endswith(".000Z") else text for text in instants(microseconds)]


def dumped(kind: str, content: dict[str, Any]) -> str:
    """One line of JSON of a resource or element as R4B writes it; raises pydantic's ValidationError if R4B refuses.

    ``kind`` is the R4B class, for example ``Observation``; the elements come out in the order of the standard.
    """
    return _model(kind).model_validate(content).model_dump_json()


def shape(kind: str, content: dict[str, Any], slots: Sequence[object]) -> Shape:
    """The shape of ``content`` with ``slots``, which are named in the order of the standard.

    Raises ValueError if a slot does not occur exactly once, or not in that order: a shape is then wrongly built.
    """
    rest = dumped(kind, content)
    pieces = []
    for slot in slots:
        mark = _as_dumped(slot)
        head, found, rest = rest.partition(mark)
        if not found or mark in rest:
            raise ValueError(f"{kind}: the slot {mark} must occur once, in the order of the standard")
        pieces.append(head)
    return Shape([*pieces, rest])


def _as_dumped(slot: object) -> str:
    return slot if isinstance(slot, str) else json.dumps(slot, separators=(",", ":"))


@cache
def _model(kind: str) -> type[BaseModel]:
    from fhir.resources.R4B import get_fhir_model_class  # a quarter of a second that only writing should pay

    found: type[BaseModel] = get_fhir_model_class(kind)
    return found
