"""What the clinician meant: typed findings with presence, qualifiers, measures and time. No FHIR here."""
