"""An Exam as coded FHIR: Observations, panel, DiagnosticReport, Provenance, in a transaction Bundle."""
