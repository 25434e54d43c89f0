"""Oxygen transport from FHIR Observations: computed, checked, flagged and open to review."""

__version__ = "0.1.0"
