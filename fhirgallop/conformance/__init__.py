"""Conformance: a judge for FHIR resources by the base specification and profiles.

`validate` is the door. The order of the judgement stands in `validator` and `walk`, one module a clause:
structure, cardinality, primitives, bindings, references, contained, extensions, bundles, xhtml, invariants,
profiles (with profile_tree, slicing), vital_signs. `fast` settles what is plainly right before any of that.
`editions` reads FHIR packages and opens the compiled base definitions.
"""

from fhirgallop.conformance.validator import validate

__all__ = ["validate"]
