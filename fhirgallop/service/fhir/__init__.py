"""The FHIR addresses: what is kept, found and changed there, and the operations over it."""
