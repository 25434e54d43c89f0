"""The canonical addresses under which this program writes, and by which it knows its own output.

``BASE`` lies in the domain that RFC 2606 reserves for examples: it identifies and does not resolve. Public systems
(LOINC, UCUM, HL7) stand here too, so that each address is spelled once.
"""

from __future__ import annotations

BASE = "http://fhiro2.example.org/fhir"

DERIVED_VALUE = f"{BASE}/CodeSystem/derived-value"
FORMULA = f"{BASE}/CodeSystem/formula"
RULE = f"{BASE}/CodeSystem/rule"
CATEGORY = f"{BASE}/CodeSystem/category"

IDENTIFIERS = f"{BASE}/identifier/"
VALUE_IDENTIFIER = f"{IDENTIFIERS}value"
FLAG_IDENTIFIER = f"{IDENTIFIERS}flag"
SOFTWARE_IDENTIFIER = f"{IDENTIFIERS}software"
CONTENT_IDENTIFIER = f"{IDENTIFIERS}content-sha256"

STANDARD_UNCERTAINTY = f"{BASE}/StructureDefinition/standard-uncertainty"
CONSTANTS = f"{BASE}/StructureDefinition/constants"

LOINC = "http://loinc.org"
UCUM = "http://unitsofmeasure.org"
OBSERVATION_CATEGORY = "http://terminology.hl7.org/CodeSystem/observation-category"
FLAG_CATEGORY = "http://terminology.hl7.org/CodeSystem/flag-category"
FLAG_DETAIL = "http://hl7.org/fhir/StructureDefinition/flag-detail"
FLAG_PRIORITY = "http://hl7.org/fhir/StructureDefinition/flag-priority"
FLAG_PRIORITY_CODE = "http://hl7.org/fhir/flag-priority-code"
DATA_OPERATION = "http://terminology.hl7.org/CodeSystem/v3-DataOperation"
PARTICIPANT_TYPE = "http://terminology.hl7.org/CodeSystem/provenance-participant-type"
XHTML = "http://www.w3.org/1999/xhtml"
