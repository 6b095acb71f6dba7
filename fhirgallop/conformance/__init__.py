"""Conformance: a judge for FHIR resources by the base specification and profiles."""
