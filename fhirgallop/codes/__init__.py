"""Codes, units and exact-decimal JSON: what every stage shares about FHIR's data types."""
