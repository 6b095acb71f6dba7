"""The HTTP service: a thin skin over the pipeline, answering bytes and FHIR OperationOutcomes."""
