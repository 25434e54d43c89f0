"""Admission: blood by all evidence, subjects in their forms, merges, a site's mapping, panels and absences."""

from __future__ import annotations

import json
from itertools import product
from typing import Any, get_args

import pytest

from fhiro2.errors import Bucket, Reason
from fhiro2.fhir.systems import IDENTIFIERS, SOFTWARE_IDENTIFIER, VALUE_IDENTIFIER
from fhiro2.model import Caution, Kind, Specimen, SpecimenEvidence
from fhiro2.settings import ContextFact, Settings
from tests.feeds import (
    SITE,
    UCUM,
    at,
    component,
    concept,
    fate,
    mapping,
    observation,
    pair,
    panel,
    patient,
    quantity,
    reading,
    refusal,
    seen,
    specimen,
    take,
)

MRN = "urn:example:mrn"

# --- blood -------------------------------------------------------------------------------------------------------

ARTERIAL, VENOUS, MIXED, CENTRAL, CAPILLARY = (
    Specimen.ARTERIAL, Specimen.VENOUS, Specimen.MIXED_VENOUS, Specimen.CENTRAL_VENOUS, Specimen.CAPILLARY,
)  # fmt: skip
ANY_VENOUS = {VENOUS, MIXED, CENTRAL}
ANYTHING = {ARTERIAL, CAPILLARY, *ANY_VENOUS}
BY_CODE = {
    "2703-7": {ARTERIAL}, "2705-2": ANY_VENOUS, "19211-2": {MIXED}, "2704-5": {CAPILLARY}, "11556-8": ANYTHING,
}  # fmt: skip
BY_TYPE = {"BLDA": {ARTERIAL}, "BLDV": ANY_VENOUS, "BLDC": {CAPILLARY}, "BLD": ANYTHING, None: ANYTHING}
BY_SITE = {
    "radial": {ARTERIAL}, "pulmonary": {MIXED}, "jugular": {CENTRAL}, "elbow": ANY_VENOUS, "left": ANYTHING,
    None: ANYTHING,
}  # fmt: skip
SITES = mapping(
    specimens=[
        {"system": SITE, "code": code, "specimen": kind}
        for code, kind in (
            ("radial", "arterial"), ("pulmonary", "mixed_venous"), ("jugular", "central_venous"), ("elbow", "venous"),
        )
    ]
)  # fmt: skip


def test_a_mapped_method_states_the_blood_as_a_body_site_does() -> None:
    value = observation(code="11556-8", method=concept((SITE, "radial")))
    found = reading(value, given=SITES)
    assert (found.specimen, found.evidence) == (ARTERIAL, SpecimenEvidence.BODY_SITE)
    assert refusal(observation(code="2705-2", method=concept((SITE, "radial"))), given=SITES) is Reason.SPECIMEN


@pytest.mark.parametrize("on_specimen", [True, False], ids=["site of the specimen", "site of the result"])
@pytest.mark.parametrize(("code", "kind", "site"), list(product(BY_CODE, BY_TYPE, BY_SITE)))
def test_blood_is_what_all_evidence_allows(code: str, kind: str | None, site: str | None, on_specimen: bool) -> None:
    """Each statement allows some kinds (venous: any venous); none in common is refused, all in common is unknown."""
    drawn = specimen("s", kind, site if on_specimen else None)
    body_site = concept((SITE, site)) if site and not on_specimen else None
    value = observation(code=code, specimen={"reference": "Specimen/s"}, bodySite=body_site)
    allowed = BY_CODE[code] & BY_TYPE[kind] & BY_SITE[site]
    if not allowed:
        assert refusal(value, drawn, given=SITES) is Reason.SPECIMEN
        return
    found = reading(drawn, value, given=SITES)
    expected = Specimen.UNKNOWN if allowed == ANYTHING else VENOUS if allowed == ANY_VENOUS else next(iter(allowed))
    assert found.specimen is expected


@pytest.mark.parametrize(
    ("more", "evidence"),
    [
        ({"code": "2703-7"}, SpecimenEvidence.CODE),
        ({"code": "11556-8", "specimen": {"reference": "Specimen/s"}}, SpecimenEvidence.SPECIMEN),
        ({"code": "11556-8", "bodySite": concept((SITE, "radial"))}, SpecimenEvidence.BODY_SITE),
        (
            {"code": "2703-7", "specimen": {"reference": "Specimen/s"}, "bodySite": concept((SITE, "radial"))},
            SpecimenEvidence.CODE | SpecimenEvidence.SPECIMEN | SpecimenEvidence.BODY_SITE,
        ),
        ({"code": "11556-8"}, SpecimenEvidence.NOTHING),
    ],
)
def test_the_evidence_for_the_blood_is_kept(more: dict[str, Any], evidence: SpecimenEvidence) -> None:
    found = reading(specimen("s"), observation(**more), given=SITES)
    assert found.evidence == evidence


def test_blood_of_unknown_kind_never_leads_an_arterial_table() -> None:
    found = pair(observation("gas", "11556-8"), observation("so2", "20564-1", 97, "%"))
    assert [found.anchors(kind) for kind in ("arterial", "mixed-venous", "central-venous")] == [[], [], []]


def test_a_site_without_mapping_says_nothing() -> None:
    assert reading(observation(code="11556-8", bodySite=concept((SITE, "radial")))).specimen is Specimen.UNKNOWN


def test_a_specimen_entered_in_error_is_not_used() -> None:
    withdrawn = specimen("s", status="entered-in-error")
    assert reading(withdrawn, observation(code="11556-8", specimen={"reference": "Specimen/s"})).specimen is (
        Specimen.UNKNOWN
    )


def test_plasma_contradicts_no_blood() -> None:
    lactate = observation(code="2518-9", value=2, unit="mmol/L", specimen={"reference": "Specimen/s"})
    assert reading(specimen("s", "PLAS"), lactate).specimen is ARTERIAL


def test_pulse_oximetry_has_no_blood() -> None:
    found = reading(specimen("s"), observation(code="59408-5", value=97, unit="%", specimen={
        "reference": "Specimen/s"}))  # fmt: skip
    assert found.specimen is Specimen.NONE


# --- subjects and patients ---------------------------------------------------------------------------------------

SERVER = Settings(base_urls=("https://fhir.example.org/r4", "https://old.example.org/"))


@pytest.mark.parametrize(
    "text",
    [
        "Patient/p1",
        "Patient/p1/_history/2",
        "https://fhir.example.org/r4/Patient/p1",
        "https://old.example.org/Patient/p1/_history/7",
    ],
)
def test_references_to_our_own_patient(text: str) -> None:
    assert reading(observation(subject={"reference": text}), settings=SERVER).patient == "feed|Patient/p1"


@pytest.mark.parametrize(
    "text", ["https://fhir.example.org/Patient/p1", "http://fhir.example.org/r4/Patient/p1", "patient/p1", "p1"]
)
def test_references_to_others_are_refused(text: str) -> None:
    assert fate(observation(subject={"reference": text}), settings=SERVER) == (Bucket.QUARANTINED, Reason.SUBJECT)


def bundle(*entries: tuple[str, dict[str, Any]]) -> dict[str, Any]:
    made = [{"fullUrl": url, "resource": resource} for url, resource in entries]
    return {"resourceType": "Bundle", "type": "collection", "entry": made}


PERSON, SAMPLE, RESULT, OTHER = (f"urn:uuid:00000000-0000-4000-8000-00000000000{number}" for number in range(4))


def without_id(resource: dict[str, Any]) -> dict[str, Any]:
    return {key: value for key, value in resource.items() if key != "id"}


def test_a_bundle_is_read_by_its_full_urls() -> None:
    value = observation(code="11556-8", subject={"reference": PERSON}, specimen={"reference": SAMPLE})
    sent = bundle((RESULT, without_id(value)), (PERSON, without_id(patient())), (SAMPLE, without_id(specimen("s"))))
    intake = take(sent)
    [found] = seen(intake)
    assert (found.resource, found.specimen) == (RESULT.removeprefix("urn:uuid:"), ARTERIAL)
    assert found.patient == f"feed|Patient/{PERSON.removeprefix('urn:uuid:')}"
    assert intake.account.buckets == {Bucket.USED: 3}


def test_full_urls_lead_to_resources_with_ids() -> None:
    sent = bundle((PERSON, patient("p7")), (RESULT, observation(subject={"reference": PERSON})))
    assert reading(sent).patient == "feed|Patient/p7"


def test_a_full_url_of_two_resources_names_neither() -> None:
    sent = bundle(
        (PERSON, patient("p7")), (PERSON, patient("p8")), (RESULT, observation(subject={"reference": PERSON}))
    )
    assert take(sent).account.reasons == {(Bucket.QUARANTINED, Reason.SUBJECT): 1}


LINKS = {
    "old": ["replaced-by", "mid"],
    "mid": ["replaced-by", "new"],
    "new": None,
    "root": ["replaces", "gone"],
    "gone": None,
    "ring1": ["replaced-by", "ring2"],
    "ring2": ["replaced-by", "ring1"],
    "self": ["replaced-by", "self"],
    "seen": ["seealso", "new"],
    "torn": ["replaced-by", "new"],
    "two": ["replaces", "torn"],
}


@pytest.mark.parametrize(
    ("written", "root"),
    [
        ("old", "new"), ("mid", "new"), ("new", "new"), ("gone", "root"), ("ring1", "ring1"), ("ring2", "ring2"),
        ("self", "self"), ("seen", "seen"), ("torn", "torn"), ("unheard", "unheard"),
    ],
)  # fmt: skip
def test_merges_are_followed_to_their_root(written: str, root: str) -> None:
    """Chains and both directions are followed; rings, see-also and two different successors merge nothing."""
    people = [
        patient(name, link=[{"other": {"reference": f"Patient/{link[1]}"}, "type": link[0]}] if link else None)
        for name, link in LINKS.items()
    ]
    people = [{key: part for key, part in one.items() if part is not None} for one in people]
    found = pair(observation(subject={"reference": f"Patient/{written}"}), *people)
    assert {one.key for one in found.timelines.patients} == {f"feed|Patient/{root}"}


# --- own output --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("more", [{"identifier": [{"system": VALUE_IDENTIFIER, "value": "1"}]}])
def test_own_values_are_known_by_their_identifier(more: dict[str, Any]) -> None:
    own = observation("tested", "59274-1", 20, "mL/dL", **more)
    assert fate(own) == (Bucket.OUT_OF_SCOPE, Reason.OWN_OUTPUT)


@pytest.mark.parametrize(
    "resource",
    [
        {"resourceType": "Flag", "id": "f", "identifier": [{"system": f"{IDENTIFIERS}flag", "value": "1"}]},
        {"resourceType": "Device", "id": "d", "identifier": [{"system": SOFTWARE_IDENTIFIER, "value": "fhiro2"}]},
        {
            "resourceType": "Provenance",
            "id": "p",
            "agent": [{"who": {"identifier": {"system": SOFTWARE_IDENTIFIER, "value": "fhiro2"}}}],
        },
    ],
)
def test_other_own_resources_are_known_by_their_identifier(resource: dict[str, Any]) -> None:
    assert fate(resource) == (Bucket.OUT_OF_SCOPE, Reason.OWN_OUTPUT)


def test_the_same_code_from_others_is_read() -> None:
    theirs = observation("tested", "59274-1", 20, "mL/dL", identifier=[{"system": "urn:example:lab", "value": "1"}])
    assert reading(theirs).value == 20


# --- a site's mapping --------------------------------------------------------------------------------------------


def test_a_site_code_means_what_the_site_says() -> None:
    site = mapping(codes=[{"system": SITE, "code": "GASO2", "loinc": "2703-7"}])
    value = {**observation(), "code": concept((SITE, "GASO2"))}
    assert reading(value, given=site).specimen is ARTERIAL
    assert fate(value) == (Bucket.OUT_OF_SCOPE, Reason.UNMAPPED_CODE)


def test_a_site_default_unit_holds_for_its_source_and_code_only() -> None:
    site = mapping(default_units=[{"source": "feed", "loinc": "2703-7", "unit": "kPa"}])
    bare = observation(value=12, unit=None)
    found = reading(bare, given=site)
    assert found.value == pytest.approx(12 * 7.500637554)  # UCUM: 1 kPa = 7.500637554 mm[Hg]
    assert found.cautions == Caution.SITE_DEFAULT_UNIT
    assert refusal({**bare, "code": concept("2705-2")}, given=site) is Reason.UNIT
    assert not reading(observation(), given=site).cautions


ANSWER = concept((SITE, "A"))


def test_consciousness_is_read_by_its_coded_answers() -> None:
    answers = {"LA9340-6": 0, "LA6560-2": 1, "LA17108-4": 2, "LA17107-6": 3, "LA9343-0": 4}
    for code, number in answers.items():
        value = observation("tested", "67775-7", None, valueCodeableConcept=concept(code))
        assert reading(value).answer == number


def test_a_site_answer_means_what_the_site_says() -> None:
    site = mapping(answers=[{"system": SITE, "code": "A", "quantity": "consciousness", "answer": "voice"}])
    value = observation("tested", "80288-4", None, valueCodeableConcept=ANSWER)
    assert reading(value, given=site).answer == 2
    assert refusal(value) is Reason.TYPE
    assert refusal(observation("tested", "67775-7", 1, "1"), given=site) is Reason.TYPE
    assert refusal(observation(value=None, valueCodeableConcept=ANSWER), given=site) is Reason.TYPE


FACTS = mapping(facts=[{"system": SITE, "code": "ECMO", "fact": "ecmo"}])
SUPPORT = concept((SITE, "ECMO"))


def procedure(status: str, **more: Any) -> dict[str, Any]:
    return {
        "resourceType": "Procedure",
        "id": "support",
        "status": status,
        "code": SUPPORT,
        "subject": {"reference": "Patient/p1"},
        **more,
    }


def condition(**more: Any) -> dict[str, Any]:
    return {
        "resourceType": "Condition",
        "id": "support",
        "code": SUPPORT,
        "subject": {"reference": "Patient/p1"},
        **more,
    }


def verified(code: str) -> dict[str, Any]:
    return concept(("http://terminology.hl7.org/CodeSystem/condition-ver-status", code))


@pytest.mark.parametrize(
    ("stated", "state"),
    [
        (procedure("in-progress", performedPeriod={"start": at(-600)}), 1),
        (procedure("completed", performedPeriod={"start": at(-600), "end": at(600)}), 1),
        (procedure("completed", performedPeriod={"start": at(-600), "end": at(-60)}), 0),
        (procedure("completed", performedPeriod={"start": at(60)}), -1),
        (procedure("not-done", performedDateTime=at(-600)), 0),
        (condition(onsetDateTime=at(-600)), 1),
        (condition(onsetDateTime=at(-600), abatementDateTime=at(-60)), 0),
        (condition(verificationStatus=verified("refuted")), 0),
        (patient("p1"), -1),
    ],
)
def test_a_fact_is_yes_no_or_unknown_at_the_instant(stated: dict[str, Any], state: int) -> None:
    found = pair(observation(), stated, given=FACTS)
    assert found.tables["arterial"].facts["ecmo"].tolist() == [state]


@pytest.mark.parametrize(
    ("stated", "reason"),
    [
        (procedure("entered-in-error"), Reason.RETRACTED),
        (condition(verificationStatus=verified("entered-in-error")), Reason.RETRACTED),
        (procedure("preparation"), Reason.STATUS),
        ({**condition(), "code": concept((SITE, "OTHER"))}, Reason.UNMAPPED_CODE),
        ({"resourceType": "Basic", "id": "x"}, Reason.OTHER_TYPE),
        ({**condition(), "id": 7}, Reason.INVARIANT),
        ({**condition(), "subject": []}, Reason.TYPE),
    ],
)
def test_context_that_states_nothing_is_accounted_for(stated: dict[str, Any], reason: Reason) -> None:
    assert fate(stated, given=FACTS)[1] is reason


@pytest.mark.parametrize("name", get_args(ContextFact))
def test_every_fact_of_the_mapping_is_stated_at_the_anchors(name: str) -> None:
    site = mapping(facts=[{"system": SITE, "code": "ECMO", "fact": name}])
    facts = pair(observation(), condition(onsetDateTime=at(-600)), given=site).tables["arterial"].facts
    assert {fact: state.tolist() for fact, state in facts.items()} == {
        fact: [1 if fact == name else -1] for fact in get_args(ContextFact)
    }


def test_a_medication_and_a_device_can_state_a_fact() -> None:
    site = mapping(
        facts=[
            {"system": SITE, "code": "RBC", "fact": "transfusion-or-bleed"},
            {"system": SITE, "code": "PUMP", "fact": "ecmo"},
        ]
    )
    given_blood = {
        "resourceType": "MedicationAdministration",
        "id": "m",
        "status": "completed",
        "medicationCodeableConcept": concept((SITE, "RBC")),
        "subject": {"reference": "Patient/p1"},
        "effectivePeriod": {"start": at(-600), "end": at(600)},
    }
    pump = {
        "resourceType": "Device", "id": "d", "type": concept((SITE, "PUMP")), "patient": {"reference": "Patient/p1"},
    }  # fmt: skip
    facts = pair(observation(), given_blood, pump, given=site).tables["arterial"].facts
    assert (facts["transfusion-or-bleed"].tolist(), facts["ecmo"].tolist()) == ([1], [1])


def test_a_fact_of_a_merged_patient_holds_for_the_root() -> None:
    merged = patient("p1", link=[{"other": {"reference": "Patient/p2"}, "type": "replaced-by"}])
    value = observation(subject={"reference": "Patient/p2"})
    found = pair(value, merged, condition(onsetDateTime=at(-600)), given=FACTS)
    assert found.tables["arterial"].facts["ecmo"].tolist() == [1]


# --- panels and absences -----------------------------------------------------------------------------------------


def test_a_panel_its_members_and_single_results_give_the_same_values() -> None:
    parts = [("2703-7", 90.0, "mm[Hg]"), ("2019-8", 40.0, "mm[Hg]"), ("2744-1", 7.4, "[pH]")]
    whole = panel("tested", *(component(*part) for part in parts))
    single = [observation(str(number), *part) for number, part in enumerate(parts)]
    members = [{"reference": f"Observation/{number}"} for number in range(3)]
    grouping = observation("group", "24336-0", None, hasMember=members)

    def values(*resources: dict[str, Any]) -> list[tuple[str, float, Specimen]]:
        return [(one.quantity, one.value, one.specimen) for one in seen(take(*resources))]

    assert values(whole) == values(*single) == values(grouping, *single)


@pytest.mark.parametrize("order", [1, -1])
def test_members_of_a_panel_are_one_sample(order: int) -> None:
    members = [{"reference": "Observation/a"}, {"reference": "Observation/b/_history/1"}]
    grouping = observation("group", "24336-0", None, hasMember=members)
    intake = take(*[grouping, observation("a"), observation("b", "2019-8", 40), observation("c")][::order])
    assert [(one.resource, one.sample) for one in seen(intake)] == [
        ("a", "feed|panel group"), ("b", "feed|panel group"), ("c", ""),
    ]  # fmt: skip
    assert intake.account.reasons == {(Bucket.OUT_OF_SCOPE, Reason.GROUPING_ONLY): 1}


def test_a_specimen_is_a_nearer_sample_than_a_panel() -> None:
    grouping = observation("group", "24336-0", None, hasMember=[{"reference": "Observation/tested"}])
    assert reading(grouping, observation(specimen={"reference": "Specimen/s"})).sample == "feed|specimen Specimen/s"


def test_an_accession_is_one_sample_over_specimens() -> None:
    accession = {"system": "urn:example:lab", "value": "A7"}
    drawn = [specimen(name, accessionIdentifier=accession) for name in ("s", "t")]
    values = [observation(name, specimen={"reference": f"Specimen/{name}"}) for name in ("s", "t")]
    assert {one.sample for one in seen(take(*drawn, *values))} == {"feed|accession urn:example:lab|A7"}


def test_contained_specimens_of_two_results_are_two_samples() -> None:
    inside = [{"resourceType": "Specimen", "id": "s", "type": specimen("s")["type"]}]
    values = [observation(name, specimen={"reference": "#s"}, contained=inside) for name in ("a", "b")]
    assert len({one.sample for one in seen(take(*values))}) == 2


def test_an_empty_panel_is_grouping_only() -> None:
    assert fate(observation("tested", "24336-0", None)) == (Bucket.OUT_OF_SCOPE, Reason.GROUPING_ONLY)


def test_a_panel_of_unmapped_components_is_out_of_scope() -> None:
    unmapped = {"code": concept((SITE, "X")), "valueQuantity": quantity(1)}
    assert fate(panel("tested", unmapped)) == (Bucket.OUT_OF_SCOPE, Reason.UNMAPPED_CODE)


def test_a_panel_with_only_refused_components_is_used_with_its_parts_counted() -> None:
    intake = take(panel("tested", component("2703-7", 13, None), component("2744-1", 74, "[pH]")))
    assert seen(intake) == []
    assert intake.account.buckets == {Bucket.USED: 1}
    assert intake.account.parts == {Reason.UNIT: 1, Reason.RANGE: 1}


def test_a_stated_absence_is_a_reading_without_value() -> None:
    found = reading(observation(value=None, dataAbsentReason={"text": "clotted"}))
    assert (found.value != found.value, found.low != found.low, found.answer) == (True, True, -1)


def test_a_component_can_be_absent_beside_others() -> None:
    absent = {"code": concept("2019-8"), "dataAbsentReason": {"text": "not measured"}}
    found = seen(take(panel("tested", component("2703-7", 90, "mm[Hg]"), absent)))
    assert [(one.quantity, one.value == one.value) for one in found] == [("po2", True), ("pco2", False)]


# --- status, kind, units -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("status", "end"),
    [
        ("final", (Bucket.USED, None)),
        ("amended", (Bucket.USED, None)),
        ("corrected", (Bucket.USED, None)),
        ("preliminary", (Bucket.WAITING, Reason.PRELIMINARY)),
        ("registered", (Bucket.WAITING, Reason.PRELIMINARY)),
        ("entered-in-error", (Bucket.OUT_OF_SCOPE, Reason.RETRACTED)),
        ("cancelled", (Bucket.OUT_OF_SCOPE, Reason.RETRACTED)),
        ("unknown", (Bucket.QUARANTINED, Reason.STATUS)),
        ("bogus", (Bucket.QUARANTINED, Reason.STATUS)),
        (None, (Bucket.QUARANTINED, Reason.STATUS)),
    ],
)
def test_every_status_has_its_place(status: str | None, end: tuple[Bucket, Reason | None]) -> None:
    assert fate(observation(status=status)) == end


def test_known_at_is_update_then_issue_then_the_time_itself() -> None:
    for more, known in (
        ({"issued": at(600)}, "2026-03-03T00:00:00Z"),
        ({"meta": None, "issued": at(600)}, at(600)),
        ({"meta": None}, at()),
    ):
        intake = take(observation(**more), observation("other", effectiveDateTime=known))
        known_of, effective_of = intake.readings["known"].tolist(), intake.readings["effective"].tolist()
        assert known_of[0] == effective_of[1]


@pytest.mark.parametrize(("seconds", "end"), [(300, Bucket.USED), (301, Bucket.QUARANTINED)])
def test_later_than_it_was_known_by_five_minutes_is_refused(seconds: int, end: Bucket) -> None:
    value = observation(seconds=seconds, meta={"versionId": "1", "lastUpdated": at()})
    assert fate(value)[0] is end


def test_kind_and_cautions_of_the_code_travel_with_the_value() -> None:
    from_haematocrit = reading(observation("tested", "20509-6", 14, "g/dL"))
    assert from_haematocrit.kind is Kind.ESTIMATED
    assert from_haematocrit.cautions == Caution.CALCULATED_HAEMOGLOBIN
    assert reading(observation("tested", "19994-3", 40, "%")).kind is Kind.SETTING
    assert reading(observation("tested", "2710-2", 97, "%")).cautions == Caution.LEGACY_CODE


def test_severe_anaemia_in_millimoles_asks_for_its_unit() -> None:
    assert reading(observation("tested", "718-7", 2.9, "mmol/L")).cautions & Caution.SEVERE_ANAEMIA_OR_TETRAMER
    assert not reading(observation("tested", "718-7", 3.4, "mmol/L")).cautions


@pytest.mark.parametrize("spelling", ["mmHg", "mm Hg", "MMHG", "torr"])
def test_a_known_legacy_spelling_is_read_with_a_caution(spelling: str) -> None:
    found = reading(observation(valueQuantity={"value": 90, "unit": spelling}))
    assert (found.value, found.cautions) == (90, Caution.UNIT_SPELLING)


def test_the_code_of_the_unit_decides_and_its_text_may_say_it_otherwise() -> None:
    found = reading(observation(valueQuantity={"value": 90, "unit": "mmHg", "system": UCUM, "code": "mm[Hg]"}))
    assert (found.value, found.cautions) == (90, Caution.NONE)


def test_a_line_that_begins_otherwise_is_the_same_resource() -> None:
    value = observation()
    turned = dict(reversed(value.items()))
    assert json.dumps(turned) != json.dumps(value)
    assert seen(take(turned)) == seen(take(value))
