"""Timelines: which version stands whatever the order of arrival, and patients' readings in one order.

The order of versions is a rule of this project: greatest ``lastUpdated``, then integer versionId, then content hash.
"""

from __future__ import annotations

import hashlib
import random
from itertools import permutations
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhiro2.bulk.intake import Intake
from fhiro2.errors import Bucket, Reason
from fhiro2.model import Timelines
from fhiro2.timeline import MOST_PATIENTS, Roster, Versions, batches, resolve
from tests.feeds import at, observation, panel, patient, seen, take

Row = tuple[str, str, int, str]  # key, versionId, lastUpdated, content


def standing(rows: list[Row]) -> list[Row]:
    """The rows whose version stands, sorted."""
    versions = Versions()
    for place, (key, version, updated, _) in enumerate(rows):
        versions.add(key, version, updated, Bucket.USED, None, place, 0, place, -1)
    found = resolve(versions, lambda chosen: {row: hashlib.sha256(rows[row][3].encode()).digest() for row in chosen})
    return sorted(row for row, stands in zip(rows, found.stands.tolist(), strict=True) if stands)


def test_the_latest_update_stands_whatever_the_versions_say() -> None:
    rows = [("a", "9", 10, "x"), ("a", "1", 30, "y"), ("a", "7", 20, "z")]
    for order in permutations(rows):
        assert standing(list(order)) == [("a", "1", 30, "y")]


def test_at_one_instant_the_greater_whole_number_stands() -> None:
    rows = [(key, version, 10, f"{key} {version}") for key in "abcdef" for version in ("9", "10", "8")]
    for seed in range(5):
        random.Random(seed).shuffle(rows)
        assert standing(rows) == [(key, "10", 10, f"{key} 10") for key in "abcdef"]


def test_versions_that_are_no_numbers_are_told_apart_by_content() -> None:
    rows = [("a", "W/x", 10, "one"), ("a", "W/y", 10, "two"), ("a", "W/z", 10, "three")]
    greatest = max(rows, key=lambda row: hashlib.sha256(row[3].encode()).digest())
    for order in permutations(rows):
        assert standing(list(order)) == [greatest]


def test_a_resource_without_version_or_update_loses_to_one_with() -> None:
    rows = [("a", "", -(2**62), "x"), ("a", "1", 10, "y")]
    for order in permutations(rows):
        assert standing(list(order)) == [("a", "1", 10, "y")]


def test_one_version_with_two_contents_does_not_stand_but_another_may() -> None:
    rows = [("a", "2", 20, "x"), ("a", "2", 20, "y"), ("a", "1", 10, "z"), ("b", "1", 10, "x")]
    for order in permutations(rows):
        assert standing(list(order)) == [("a", "1", 10, "z"), ("b", "1", 10, "x")]


def test_one_version_sent_again_stands_once() -> None:
    versions = Versions()
    for place in range(3):
        versions.add("a", "1", 10, Bucket.USED, None, place, 0, place, -1)
    found = resolve(versions, lambda rows: dict.fromkeys(rows, b"the same"))
    assert found.stands.sum() == 1
    assert sorted(map(str, found.counts())) == sorted(
        map(str, [(Bucket.USED, None, 1), (Bucket.REPEATED, Reason.SAME_VERSION, 2)])
    )


def test_what_has_no_identity_is_never_superseded() -> None:
    assert len(standing([("", "", 0, "x"), ("", "", 0, "y")])) == 2


@given(
    st.lists(
        st.tuples(
            st.sampled_from("ab"), st.sampled_from(["", "1", "2", "10", "W/a"]), st.integers(0, 2),
            st.sampled_from(["x", "y"]),
        ),
        max_size=7,
    ),
    st.randoms(use_true_random=False),
)  # fmt: skip
def test_no_order_of_arrival_changes_what_stands(drawn: list[Row], chance: random.Random) -> None:
    rows = [(*row[:3], f"{row[1]} {row[2]} {row[3]}") for row in drawn]  # version and update are part of the content
    shuffled = list(rows)
    chance.shuffle(shuffled)
    assert standing(shuffled) == standing(rows)


def version(number: int, status: str, value: float, **more: Any) -> dict[str, Any]:
    return observation(
        value=value, status=status, meta={"versionId": str(number), "lastUpdated": at(number)}, seconds=-60, **more
    )


@pytest.mark.parametrize(
    ("last", "values"),
    [
        (version(4, "entered-in-error", 90), []),
        (version(4, "cancelled", 90), []),
        (version(4, "amended", 95), [95]),
        (version(4, "preliminary", 95), []),
    ],
)
def test_every_order_of_a_life_gives_the_same_readings(last: dict[str, Any], values: list[float]) -> None:
    life = [version(1, "preliminary", 80), version(2, "final", 85), version(3, "corrected", 90), last]
    for order in permutations(life):
        assert [one.value for one in seen(take(*order))] == values


def test_equal_content_in_other_writing_is_the_same_version() -> None:
    compact = b'{"resourceType":"Patient","id":"p1","meta":{"versionId":"1"},"active":true}'
    spaced = b'{"id":"p1", "resourceType":"Patient", "active":true, "meta":{"versionId":"1"}}'
    assert take(compact, spaced).account.reasons == {(Bucket.REPEATED, Reason.SAME_VERSION): 1}


# --- order -------------------------------------------------------------------------------------------------------


def feed() -> list[dict[str, Any]]:
    """Readings of five patients, two merged into one, several at one instant, one panel."""
    made = [
        observation(f"{number:02d}", value=80 + number, seconds=60 * (number % 4),
                    subject={"reference": f"Patient/p{number % 5}"})
        for number in range(20)
    ]  # fmt: skip
    component = {"code": made[0]["code"], "valueQuantity": made[0]["valueQuantity"]}
    made.append(panel("panel", component, {**component, "code": {"coding": [
        {"system": "http://loinc.org", "code": "2019-8"}]}}))  # fmt: skip
    return [*made, patient("p4", link=[{"other": {"reference": "Patient/p0"}, "type": "replaced-by"}])]


def batched(intake: Intake, most: int = 50_000) -> list[Timelines]:
    return list(batches(intake.readings, intake.rows.names, intake.rows.origins, intake.roster, most))


def in_words(found: list[Timelines]) -> list[tuple[Any, ...]]:
    return [
        (timelines.patients[row["patient"]].key, int(row["effective"]), timelines.origins.ids[row["origin"]],
         int(row["part"]), float(row["value"]))
        for timelines in found
        for row in timelines.readings
    ]  # fmt: skip


def test_readings_are_ordered_by_patient_time_id_and_component() -> None:
    words = in_words(batched(take(*feed())))
    assert words == sorted(words)
    assert len(words) == 22
    assert {key for key, *_ in words} == {f"feed|Patient/p{number}" for number in range(4)}


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize("most", [1, 7, 50_000])
def test_neither_arrival_nor_the_size_of_batches_changes_the_order(seed: int, most: int) -> None:
    shuffled = feed()
    random.Random(seed).shuffle(shuffled)
    assert in_words(batched(take(*shuffled), most)) == in_words(batched(take(*feed())))


def test_a_patient_is_never_cut_in_two() -> None:
    parts = batched(take(*feed()), 1)
    keys = [patient.key for part in parts for patient in part.patients]
    assert len(parts) == len(keys) == len(set(keys)) == 4


def test_a_batch_holds_no_more_patients_than_its_keys_can_tell_apart() -> None:
    intake = take(*[
        observation(str(number), subject={"reference": f"Patient/{number}"}) for number in range(MOST_PATIENTS + 3)
    ])  # fmt: skip
    assert [len(part.patients) for part in batched(intake)] == [MOST_PATIENTS, 3]


def test_no_readings_give_no_batches() -> None:
    intake = take(patient())
    assert batched(intake) == []
    assert list(batches(intake.readings, intake.rows.names, intake.rows.origins, Roster({}, {}, {}))) == []


def test_uncertainty_is_entered_for_values_and_bounds() -> None:
    """Oxygen pressure: 1.5 mm[Hg] and 3 % combined (catalogue row): at 100 mm[Hg] sqrt(1.5^2 + 3^2)."""
    [timelines] = batched(take(observation(value=100)))
    assert np.allclose(timelines.readings["uncertainty"], [np.sqrt(1.5**2 + 3.0**2)])
