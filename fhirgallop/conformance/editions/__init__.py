"""Editions: FHIR packages read, compiled to compact tables, and opened type by type."""

from fhirgallop.conformance.editions.edition import NAMES, VERSIONS, Edition, load

__all__ = ["NAMES", "VERSIONS", "Edition", "load"]
