"""Drawings of an examination: the heart cycle as it was heard, felt and measured. Pure; knows no FHIR."""
