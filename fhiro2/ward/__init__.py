"""The synthetic ward: twelve beds over 48 hours as NDJSON, written by rule and seed alone; no real person.

``scenario`` holds the courses, ``feed`` says them in three dialects, ``people`` is their context, ``mess`` plants
what goes wrong in real feeds.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path

from fhiro2.ward.feed import Feed
from fhiro2.ward.mess import Mess
from fhiro2.ward.people import conditions, devices, encounters, patients, procedures
from fhiro2.ward.scenario import BEDS, HOURS, START
from fhiro2.ward.vocabulary import Json

_MAPPING = """\
mapping: ward-nine
version: 1
owner: Ward Nine informatics (synthetic)
signed: 2026-02-20
zone: Europe/Berlin
codes:
  - {system: "urn:w9:codes", code: "BG-PO2A", loinc: "2703-7"}
facts:
  - {system: "urn:w9:facts", code: "ECMO", fact: ecmo}
  - {system: "urn:w9:facts", code: "SHUNT", fact: intracardiac-shunt}
  - {system: "urn:w9:facts", code: "SMOKE", fact: smoke-or-nitroprusside-exposure}
  - {system: "urn:w9:facts", code: "BLEED", fact: transfusion-or-bleed}
  - {system: "urn:w9:facts", code: "RED-CELLS", fact: transfusion-or-bleed}
  - {system: "urn:w9:facts", code: "CONTROLLED-VENTILATION", fact: controlled-ventilation}
specimens:
  - {system: "urn:w9:specimens", code: "PA-LINE", specimen: mixed_venous}
  - {system: "urn:w9:specimens", code: "CV-LINE", specimen: central_venous}
default_units: []
answers: []
excluded_patients: []
"""

_README = """\
# Ward Nine

A synthetic high-care ward of {beds} beds over {hours} hours from {start}.
Nobody in it exists: names, courses and numbers were made for this project.
`fhiro2.ward.write_ward` writes these files byte for byte from a seed.

## The beds
| bed | dialect | course |
|---|---|---|
{courses}

Extracorporeal support and intracardiac shunts were looked for and refuted in beds 2, 3 and 4; in all others nobody
said anything about them.

## Three dialects
- **A**: one Observation an analyte; blood by a shared Specimen with its accession; mm[Hg], g/dL; times at +00:00.
- **B**: a gas is one panel with components and a Specimen; kPa, g/L; local time at +01:00; on the ward the oxygen flow
  is a component of the pulse oximetry.
- **C**: a grouping panel names its members; blood by the code alone (central venous blood by a Specimen as well); old
  unit spellings without UCUM; monitor values by MDC code alone.

## Files
| file | lines |
|---|---|
{files}

`late.ndjson` is what a second export brought later; its last line breaks off. `mapping.yaml` is the ward's mapping.

## What is wrong in it, on purpose
| what | how often |
|---|---|
{mess}

## Notice
This material contains content from LOINC (http://loinc.org). LOINC is copyright (c) 1995-2020, Regenstrief Institute,
Inc. and the Logical Observation Identifiers Names and Codes (LOINC) Committee and is available at no cost under the
license at http://loinc.org/license. LOINC(R) is a registered United States trademark of Regenstrief Institute, Inc.
"""


def write_ward(folder: Path, seed: int = 20260301) -> None:
    """Write the ward's NDJSON files, ``mapping.yaml`` and ``README.md`` into ``folder``; equal seeds, equal bytes."""
    folder.mkdir(parents=True, exist_ok=True)
    feed = Feed(seed)
    mess = Mess(feed)
    files = {
        "patients.ndjson": _lines(patients()),
        "encounters.ndjson": _lines(encounters()),
        "devices.ndjson": _lines(devices()),
        "specimens.ndjson": _lines(feed.specimens),
        "conditions.ndjson": _lines(conditions()),
        "procedures.ndjson": _lines(procedures()),
        "observations.ndjson": mess.lines(),
        "late.ndjson": mess.late_lines(),
    }
    for name, lines in files.items():
        end = "" if name == "late.ndjson" else "\n"
        (folder / name).write_text("\n".join(lines) + end, encoding="utf-8", newline="\n")
    (folder / "mapping.yaml").write_text(_MAPPING, encoding="utf-8", newline="\n")
    (folder / "README.md").write_text(_readme(files, mess.counts), encoding="utf-8", newline="\n")


def _lines(resources: Sequence[Json]) -> list[str]:
    return [json.dumps(row, separators=(",", ":"), ensure_ascii=False) for row in resources]


def _readme(files: Mapping[str, Sequence[str]], counts: Mapping[str, int]) -> str:
    return _README.format(
        beds=len(BEDS),
        hours=HOURS,
        start=START.isoformat(),
        courses="\n".join(f"| {bed.number} | {bed.dialect} | {bed.story} |" for bed in BEDS),
        files="\n".join(f"| `{name}` | {len(lines)} |" for name, lines in files.items()),
        mess="\n".join(f"| {title} | {count} |" for title, count in counts.items()),
    )
