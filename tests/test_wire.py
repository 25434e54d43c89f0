"""The door: what the fast reader accepts, the strict one accepts with the same result, and both refuse the traps."""

import json
from collections.abc import Callable

import msgspec
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhiro2.errors import Reason, SkipError
from fhiro2.fhir import wire
from fhiro2.fhir.wire import Door

GAS = {
    "resourceType": "Observation",
    "id": "gas-1",
    "meta": {"versionId": "3", "lastUpdated": "2026-03-01T08:00:00.000Z"},
    "status": "final",
    "category": [{"coding": [{"system": "urn:c", "code": "laboratory"}]}],
    "code": {"coding": [{"system": "http://loinc.org", "code": "2703-7", "display": "pO2"}]},
    "subject": {"reference": "Patient/p1"},
    "effectiveDateTime": "2026-03-01T07:55:00+01:00",
    "valueQuantity": {"value": 13.3, "unit": "kPa", "system": "http://unitsofmeasure.org", "code": "kPa"},
    "note": [{"text": "drawn by hand"}],
}


def line(**changes: object) -> bytes:
    return json.dumps({**GAS, **changes}, separators=(",", ":")).encode()


def by_strict(content: bytes) -> wire.Observation:
    return wire._convert(wire.read_strictly(content))


def test_a_plain_line_goes_through_the_fast_reader() -> None:
    door = Door()
    found = door.observation(line())
    assert (door.fast, door.strict) == (1, 0)
    assert found.valueQuantity is not None
    assert found.valueQuantity.value == 13.3
    assert found == by_strict(line())


REFUSED = [
    (b'{"resourceType":"Observation","valueQuantity":{"value":7.4,"value":74}}', Reason.DUPLICATE_KEY),
    (b'{"resourceType":"Observation","valueQuantity":{"value":7.4,"valu\\u0065":74}}', Reason.DUPLICATE_KEY),
    (b'{"resourceType":"Observation","note":[{"text":"a","text":"b"}]}', Reason.DUPLICATE_KEY),
    (
        b'{"resourceType":"Observation","status":"final","valueQuantity":{"value":7.4,"value":74},"id" :"x"}',
        Reason.DUPLICATE_KEY,
    ),
    (b'{"resourceType":"Observation","valueQuantity":{"value":NaN}}', Reason.NUMBER),
    (b'{"resourceType":"Observation","valueQuantity":{"value":Infinity}}', Reason.NUMBER),
    (b'{"resourceType":"Observation","valueQuantity":{"value":1e400}}', Reason.RANGE),
    (b'{"resourceType":"Observation","valueQuantity":{"value":' + b"9" * 5000 + b"}}", Reason.RANGE),
    (b'{"resourceType":"Observation","valueQuantity":{"value":"7.4"}}', Reason.NUMBER),
    (b'{"resourceType":"Observation","valueQuantity":{"value":true}}', Reason.NUMBER),
    (b'{"resourceType":"Observation","valueQuantity":{"value":7.4,"units":"kPa"}}', Reason.VERSION),
    (b'{"resourceType":"Observation","triggeredBy":[]}', Reason.VERSION),
    (b'{"resourceType":"Observation","status":7}', Reason.TYPE),
    (b'{"resourceType":"Observation","id":"\\ud800"}', Reason.ENCODING),
    (b'{"resourceType":"Observation","id":"\xff"}', Reason.ENCODING),
    (b"[" * 100_000, Reason.DEPTH),
    (b'{"resourceType":"Observation","text":' + b"[" * 400 + b"]" * 400 + b"}", Reason.DEPTH),
    (b'{"resourceType":"Observation",', Reason.JSON),
    (b"[1,2]", Reason.JSON),
    (b'{"a":"' + b"x" * wire.MOST_BYTES + b'"}', Reason.SIZE),
]


@pytest.mark.parametrize(("content", "reason"), REFUSED)
def test_traps_are_refused_for_their_reason(content: bytes, reason: Reason) -> None:
    with pytest.raises(SkipError) as refused:
        Door().observation(content)
    assert refused.value.reason is reason


def test_siblings_of_primitives_are_read_by_the_strict_reader() -> None:
    door = Door()
    sent = line(_status={"extension": [{"url": "urn:x", "valueString": "y"}]})
    assert door.observation(sent).status == "final"
    assert (door.fast, door.strict) == (0, 1)


def test_colons_in_text_are_no_keys() -> None:
    door = Door()
    assert door.observation(line(id=":x:")).id == ":x:"
    assert door.fast == 1


def answer(read: Callable[[bytes], wire.Observation], content: bytes) -> wire.Observation | Reason:
    try:
        return read(content)
    except SkipError as error:
        return error.reason


json_values = st.recursive(
    st.none() | st.booleans() | st.integers(-1000, 1000) | st.text(max_size=8),
    lambda children: st.lists(children, max_size=3) | st.dictionaries(st.text(max_size=6), children, max_size=3),
    max_leaves=8,
)


@given(
    st.dictionaries(
        st.sampled_from(["id", "status", "issued", "note", "text", "valueQuantity", "subject", "component", "focus"]),
        json_values,
        max_size=5,
    )
)
def test_both_readers_give_the_same_answer(changes: dict[str, object]) -> None:
    content = line(**changes)
    door = Door()
    assert answer(door.observation, content) == answer(by_strict, content)


def test_canonical_content_ignores_order_space_and_how_a_number_is_written() -> None:
    one = wire.read_strictly(b'{"a": 7.40, "b": [1, {"d": 1, "c": 2}]}')
    other = wire.read_strictly(b'{"b":[1,{"c":2,"d":1}],"a":7.4}')
    assert wire.canonical(one) == wire.canonical(other)
    assert msgspec.json.decode(wire.canonical(one)) == one
