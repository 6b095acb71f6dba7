"""FHIRPath: expressions compiled to closures over plain JSON values that carry their FHIR types.

`compile_expression` gives an Expression, to be kept; `Expression.test` answers True, False or None (empty)
at a node and raises CannotJudge where something it needs is not at hand.
Source: FHIRPath N1 (v2.0.0), FHIR R4 and R5 fhirpath.html.
"""

from fhirgallop.conformance.fhirpath.expression import Expression, compile_expression
from fhirgallop.conformance.fhirpath.items import CannotJudge, Collection, Item
from fhirgallop.conformance.fhirpath.tokens import ExpressionError

__all__ = ["CannotJudge", "Collection", "Expression", "ExpressionError", "Item", "compile_expression"]
