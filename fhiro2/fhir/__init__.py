"""The only door to FHIR: JSON in (``wire``), resources out (``resources``), names of our systems (``systems``)."""
