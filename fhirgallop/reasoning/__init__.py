"""Reasoning: Exam and Context against rules, to conclusions with their grounds. No FHIR here."""
