"""From what stands to the outbox: the flags of held patients stay, a withdrawal says why."""

from __future__ import annotations

import json
from pathlib import Path

from fhiro2.bulk.posting import post
from fhiro2.store import Store
from fhiro2.store.entry import NEW, Entry
from fhiro2.write import Run
from fhiro2.write.identity import SOFTWARE_REFERENCE
from fhiro2.write.provenance import STANDS_NO_LONGER

RUN = Run("2026-01-02T00:00:00.000Z", "ab" * 32, "0.1.0")


def written(reference: str, patient: str) -> Entry:
    parts = {"period": {"start": "2026-01-01T00:00:00Z"}, "code": {"coding": [{"code": "a-rule"}]}}
    content = json.dumps({"resourceType": reference.partition("/")[0], "status": "active", **parts}).encode()
    return Entry(reference, patient, f"hash of {reference}", content)


def test_the_flags_of_held_patients_stay_and_all_else_is_withdrawn(tmp_path: Path) -> None:
    """Of a patient on whom the evaluators disagree nobody knows which flags should stand."""
    names = ("Flag/1", "Observation/1")
    with Store(tmp_path / "store.sqlite").transaction() as work:
        for patient in ("held", "free"):
            for name in names:
                one = written(f"{name}{patient}", f"Patient/{patient}")
                work.post([one])
                work.confirm(one, 'W/"1"', 0)
        group = {"Patient/held", "Patient/free"}
        assert post(work, group, {}, {"Patient/held"}, RUN, STANDS_NO_LONGER) == 3
        waiting = {one.reference: one for one in work.outbox()}
        assert {reference for reference in waiting if not reference.startswith("Provenance/")} == {
            SOFTWARE_REFERENCE, "Flag/1free", "Observation/1free", "Observation/1held",
        }  # fmt: skip
        assert json.loads(waiting["Flag/1free"].content)["status"] == "entered-in-error"
        provenance = [json.loads(one.content) for one in waiting.values() if one.after == "Flag/1free"]
        assert [one["reason"] for one in provenance] == [[{"text": STANDS_NO_LONGER}]]
        assert {one.state for one in waiting.values()} == {NEW}
        assert post(work, group, {}, {"Patient/held"}, RUN, STANDS_NO_LONGER) == 0
