"""The only door to FHIR: JSON in (``wire``), resources out (``resources``), HTTP (``client``), names (``systems``)."""
