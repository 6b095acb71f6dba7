"""A patient's FHIR resources (R4, R4B, R5) read into the Context that the rules look at."""
