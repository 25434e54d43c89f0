"""What goes wrong in a real feed, planted in Ward Nine in small number: each kind once or a few times, and counted."""

from __future__ import annotations

import json
from collections.abc import Callable
from copy import deepcopy
from datetime import datetime, timedelta
from typing import Any

from fhiro2.units import UCUM
from fhiro2.ward.feed import LABORATORY, Feed, instant
from fhiro2.ward.people import MERGED_BED, MERGED_PATIENT
from fhiro2.ward.scenario import BEDS, START, Bed
from fhiro2.ward.vocabulary import DIALECTS, SITE_CODES, Json

_MERGED_HOURS = 6
_PERCENT = {"unit": "%", "system": UCUM, "code": "%"}


class Mess:
    """A feed with its blemishes: lines of the main file and of the late one, and how many blemishes of each kind."""

    def __init__(self, feed: Feed) -> None:
        self.feed = feed
        self.counts: dict[str, int] = {}
        self._late: list[Json] = []
        self._raw: list[tuple[str, str, str]] = []
        self._cut = ""
        for title, plant in _KINDS:
            self.counts[title] = plant(self)

    def lines(self) -> list[str]:
        """The main file, in the order in which the server knew things."""
        return [text for *_, text in sorted([*map(_keyed, self.feed.observations), *self._raw], key=_order)]

    def late_lines(self) -> list[str]:
        """The late file; its last line breaks off and has no line feed."""
        return [*(text for *_, text in sorted(map(_keyed, self._late), key=_order)), self._cut]

    def take_out(self, found: Json) -> Json:
        """Take a resource out of the main file."""
        place = next(number for number, row in enumerate(self.feed.observations) if row is found)
        return self.feed.observations.pop(place)

    def delay(self, found: Json, minutes: float) -> None:
        """Let the server know a resource later, in the late file."""
        _known_later(found, minutes)
        self._late.append(self.take_out(found))

    def revise(self, found: Json, minutes: float, before: Json) -> None:
        """Make ``found`` the second version, ``minutes`` after a first one that said ``before``."""
        self.feed.observations.append({**deepcopy(found), **before})
        found["meta"]["versionId"] = "2"
        _known_later(found, minutes)

    def repeat(self, found: Json, late: bool) -> None:
        """Send a resource once more, as it was."""
        (self._late if late else self.feed.observations).append(deepcopy(found))

    def double_key(self, found: Json, other: int) -> None:
        """Name the value of ``found`` twice in one line."""
        *key, text = _keyed(self.take_out(found))
        value = found["valueQuantity"]["value"]
        self._raw.append((key[0], key[1], text.replace(f'"value":{value}', f'"value":{value},"value":{other}')))

    def cut(self, found: Json) -> None:
        """End the late file in the middle of ``found``."""
        text = _text(self.take_out(found))
        self._cut = text[: 2 * len(text) // 3]


def _no_unit(mess: Mess) -> int:
    _extra(mess, 7, "blood hb", 10, {"valueQuantity": {"value": 13.1}})
    _extra(mess, 9, "arterial lactate", 10, {"valueQuantity": {"value": 1.1}})
    return 2


def _contradicting_unit(mess: Mess) -> int:
    for bed, value, unit, code in ((7, 12.3, "kPa", "mm[Hg]"), (11, 91.0, "mmHg", "kPa")):
        quantity = {"value": value, "unit": unit, "system": UCUM, "code": code}
        _extra(mess, bed, "arterial po2", 20, {"valueQuantity": quantity})
    return 2


def _flow_as_percent(mess: Mess) -> int:
    _extra(mess, 10, "fio2", 12, {"valueQuantity": {"value": 15, **_PERCENT}})
    return 1


def _flow_as_fraction_code(mess: Mess) -> int:
    quantity = {"value": 15, "unit": "L/min", "system": UCUM, "code": "L/min"}
    _extra(mess, 12, "fio2", 13, {"valueQuantity": quantity})
    return 1


def _percent_as_fraction(mess: Mess) -> int:
    _extra(mess, 7, "fio2", 14, {"valueQuantity": {"value": 40, "unit": "1", "system": UCUM, "code": "1"}})
    return 1


def _dangling_specimen(mess: Mess) -> int:
    _extra(mess, 8, "central po2", 16, {"specimen": {"reference": "Specimen/w9-s9999"}}, 38.0)
    return 1


def _venous_as_arterial(mess: Mess) -> int:
    reference = mess.feed.specimen(_bed(7), "venous", _moment(33))
    _extra(mess, 7, "arterial po2", 33, {"specimen": {"reference": reference}}, 37.0)
    return 1


def _preliminary(mess: Mess) -> int:
    for bed, hour in ((1, 3), (2, 15)):
        mess.revise(mess.feed.said[bed, "arterial lactate", hour], 25, {"status": "preliminary"})
    return 2


def _corrected(mess: Mess) -> int:
    for name, wrong in (("arterial po2", 84.7), ("arterial so2", 95.4)):
        found = mess.feed.said[5, name, 9]
        unit = found["valueQuantity"]["unit"]
        mess.revise(found, 50, {"valueQuantity": {"value": wrong, "unit": unit}})
        found["status"] = "corrected"
    return 2


def _entered_in_error(mess: Mess) -> int:
    for bed, term, value in ((1, "spo2", 71), (12, "hr", 190)):
        found = _extra(mess, bed, term, 5, {}, value)
        mess.revise(found, 40, {})
        found["status"] = "entered-in-error"
    return 2


def _repeated(mess: Mess) -> int:
    soon, late = ((3, "fio2_set", 10), (6, "spo2", 11), (8, "flow", 12)), ((4, "co", 8), (2, "hr", 30))
    for key in (*soon, *late):
        mess.repeat(mess.feed.said[key], late=key in late)
    return len(soon) + len(late)


def _two_contents(mess: Mess) -> int:
    found = mess.feed.said[10, "spo2", 21]
    other = deepcopy(found)
    other["valueQuantity"]["value"] = 91
    mess.feed.observations.append(other)
    return 1


def _late_results(mess: Mess) -> int:
    rows = [row for (bed, term, hour), row in mess.feed.said.items() if (bed, hour) == (7, 26) and "arterial" in term]
    rows.append(mess.feed.said[6, "arterial lactate", 20])
    for row in rows:
        mess.delay(row, 6 * 60)
    return len(rows)


def _charted_back(mess: Mess) -> int:
    for key in ((6, "fio2", 21), (1, "fio2", 14)):
        _known_later(mess.feed.said[key], 95)
    return 2


def _below_limit(mess: Mess) -> int:
    for bed, hour in ((7, 38), (11, 41)):
        quantity = mess.feed.said[bed, "arterial lactate", hour]["valueQuantity"]
        quantity.update({"value": 0.5, "comparator": "<"})
    return 2


def _clotted(mess: Mess) -> int:
    reason = {
        "coding": [{"system": "http://terminology.hl7.org/CodeSystem/data-absent-reason", "code": "error"}],
        "text": "clotted sample",
    }
    for name in ("po2", "pco2", "ph"):
        del _extra(mess, 11, f"arterial {name}", 23, {"dataAbsentReason": reason})["valueQuantity"]
    return 3


def _unmapped(mess: Mess) -> int:
    code = {"coding": [{"system": SITE_CODES, "code": "NU-1473"}], "text": "Comfort score"}
    for bed in (7, 8, 10, 12):
        quantity = {"value": 2, "unit": "1", "system": UCUM, "code": "1"}
        _extra(mess, bed, "hr", 18, {"code": code, "valueQuantity": quantity})
    return 4


def _fraction_as_percent(mess: Mess) -> int:
    _extra(mess, 11, "arterial so2", 11, {"valueQuantity": {"value": 0.97, **_PERCENT}})
    return 1


def _doubled_key(mess: Mess) -> int:
    mess.double_key(_extra(mess, 10, "spo2", 34, {}, 97), 79)
    return 1


def _truncated(mess: Mess) -> int:
    mess.cut(_extra(mess, 12, "spo2", 46, {}, 97))
    return 1


def _merged(mess: Mess) -> int:
    first = START + timedelta(hours=_MERGED_HOURS)
    rows = [
        row
        for row in mess.feed.observations
        if row["subject"]["reference"] == f"Patient/w9-p{MERGED_BED}"
        and datetime.fromisoformat(row["effectiveDateTime"]) < first
    ]
    for row in rows:
        row["subject"] = {"reference": f"Patient/{MERGED_PATIENT}"}
    return len(rows)


def _date_only(mess: Mess) -> int:
    _extra(mess, 10, "blood hb", 26, {"effectiveDateTime": "2026-03-02"}, 14.0)
    return 1


def _future(mess: Mess) -> int:
    later = DIALECTS[_bed(9).dialect].time(_moment(20) + timedelta(days=3))
    _extra(mess, 9, "hr", 20, {"effectiveDateTime": later}, 74)
    return 1


def _no_offset(mess: Mess) -> int:
    local = _moment(31).astimezone(DIALECTS["B"].zone).replace(tzinfo=None).isoformat(timespec="seconds")
    _extra(mess, 9, "hr", 31, {"effectiveDateTime": local}, 73)
    return 1


def _calculated(mess: Mess) -> int:
    return sum(1 for _, term, _ in mess.feed.said if term == "arterial so2_calculated")


def _local_code(mess: Mess) -> int:
    return sum(1 for row in mess.feed.observations if row["code"]["coding"][0]["code"] == "BG-PO2A")


_KINDS: tuple[tuple[str, Callable[[Mess], int]], ...] = (
    ("value without a unit", _no_unit),
    ("unit and unit code contradict each other (kPa, mm[Hg])", _contradicting_unit),
    ("an oxygen flow of 15 typed as FiO2 in %", _flow_as_percent),
    ("an oxygen flow of 15 L/min under the FiO2 code", _flow_as_fraction_code),
    ("FiO2 40 with unit 1", _percent_as_fraction),
    ("blood not specified and its Specimen missing", _dangling_specimen),
    ("venous Specimen under an arterial code", _venous_as_arterial),
    ("preliminary, then final", _preliminary),
    ("final, then corrected with another value", _corrected),
    ("final, then entered in error", _entered_in_error),
    ("same version, two contents (pairs)", _two_contents),
    ("inspired oxygen charted 95 min late", _charted_back),
    ("result known 6 h late", _late_results),
    ("the same line sent again", _repeated),
    ("lactate below the limit of quantification (<)", _below_limit),
    ("no value but a reason (clotted sample)", _clotted),
    ("local code without a mapping", _unmapped),
    ("local code with a mapping", _local_code),
    ("saturation 0.97 with %", _fraction_as_percent),
    ("one key twice in one object", _doubled_key),
    ("last line breaks off", _truncated),
    ("filed under a record that was merged away", _merged),
    ("date without time", _date_only),
    ("time in the future", _future),
    ("time without offset", _no_offset),
    ("saturation calculated from the pressure", _calculated),
)


def _extra(mess: Mess, bed: int, term: str, hour: int, more: Json, value: float = 1.0) -> Json:
    """One Observation of a quiet bed beside its course."""
    delay = LABORATORY if term.startswith(("arterial", "blood", "central")) else (10.0, 50.0)
    return mess.feed.say(_bed(bed), term, value, _moment(hour), delay, more)


def _bed(number: int) -> Bed:
    return BEDS[number - 1]


def _moment(hour: int) -> datetime:
    return START + timedelta(hours=hour, minutes=47)


def _known_later(found: Json, minutes: float) -> None:
    delay = timedelta(minutes=minutes)
    found["meta"]["lastUpdated"] = instant(datetime.fromisoformat(found["meta"]["lastUpdated"]) + delay)
    if "issued" in found:
        issued = (datetime.fromisoformat(found["issued"]) + delay).isoformat(timespec="seconds")
        found["issued"] = issued.replace("+00:00", "Z") if found["issued"].endswith("Z") else issued


def _text(resource: Json) -> str:
    return json.dumps(resource, separators=(",", ":"), ensure_ascii=False)


def _keyed(resource: Json) -> tuple[str, str, str]:
    return resource["meta"]["lastUpdated"], resource["id"], _text(resource)


def _order(row: tuple[Any, ...]) -> tuple[str, str]:
    return row[0], row[1]
