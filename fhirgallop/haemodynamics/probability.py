"""Likelihood ratios and post-test probability: the arithmetic only, as fractions of one.

The pretest value comes from the user, never from here. A ratio whose interval spans 1 is refused; the product
of correlated findings is never formed. The tables of published ratios belong to the reasoning stage.
"""

from __future__ import annotations

from decimal import Decimal

from fhirgallop.haemodynamics.computation import Noted, Stop, computation


@computation("probability.post-test")
def post_test(
    pretest_probability: Decimal,
    likelihood_ratio: Decimal,
    ratio_low: Decimal | None,
    ratio_high: Decimal | None,
) -> Decimal | Stop | Noted:
    """Post-test probability by odds; with the interval of the ratio given, it is checked first."""
    if likelihood_ratio == 0:
        text = "A ratio of zero only says that no such case was in the sample: show it as below 0.1."
        return Stop("likelihood_ratio", "above 0", text)
    odds = pretest_probability / (1 - pretest_probability) * likelihood_ratio
    probability = odds / (1 + odds)
    if ratio_low is None or ratio_high is None:
        return Noted(probability, ("The interval of the ratio was not given: show it with the number.",))
    if not ratio_low <= likelihood_ratio <= ratio_high:
        return Stop("ratio_low", "interval around the ratio", "The interval does not contain the ratio.")
    if ratio_low <= 1 <= ratio_high:
        return Stop(
            "ratio_low", "interval on one side of 1", "Not informative: the ratio's interval spans 1."
        )
    return probability


@computation("probability.ratio-positive")
def ratio_positive(sensitivity: Decimal, specificity: Decimal) -> Decimal | Stop:
    """Positive likelihood ratio: sensitivity by one minus specificity."""
    if specificity == 1:
        text = "A specificity of 100 % gives no finite ratio: show it as above 10."
        return Stop("specificity", "below 1", text)
    return sensitivity / (1 - specificity)


@computation("probability.ratio-negative")
def ratio_negative(sensitivity: Decimal, specificity: Decimal) -> Decimal | Stop | Noted:
    """Negative likelihood ratio: one minus sensitivity by specificity."""
    if specificity == 0:
        return Stop("specificity", "above 0", "A specificity of zero gives no ratio.")
    ratio = (1 - sensitivity) / specificity
    return (
        Noted(ratio, ("A sensitivity of 100 %: show the ratio as below 0.1, never as 0.",))
        if ratio == 0
        else ratio
    )
