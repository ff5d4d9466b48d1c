"""The words in which an effect explains itself: rules, flags, and reasons why there is none.

Every member is its own code and carries one sentence for a reader; a rule also names its source.
"""

from __future__ import annotations

from enum import StrEnum


class Explained(StrEnum):
    """A string enumeration whose members carry an explanation a person can read, and perhaps a source."""

    explanation: str
    source: str

    def __new__(cls, code: str, explanation: str, source: str = "") -> Explained:
        member = str.__new__(cls, code)
        member._value_ = code
        member.explanation = explanation
        member.source = source
        return member


class Rule(Explained):
    """How a number was made from other numbers."""

    READY_MADE = (
        "effect-as-printed",
        "The effect is the printed one; its standard error is recovered from what is printed beside it.",
        "Cochrane Handbook for Systematic Reviews of Interventions 5.1, sections 7.7.3 and 7.7.7",
    )
    LOG_ODDS_RATIO = (
        "log-odds-ratio-of-two-proportions",
        "ln(ad/bc), variance 1/a + 1/b + 1/c + 1/d.",
        "Woolf 1955; Borenstein, Hedges, Higgins and Rothstein 2009, chapter 5",
    )
    LOG_RISK_RATIO = (
        "log-risk-ratio-of-two-proportions",
        "ln of the ratio of the two risks, variance 1/a - 1/n1 + 1/c - 1/n2.",
        "Katz, Baptista, Azen and Pike 1978; Borenstein, Hedges, Higgins and Rothstein 2009, chapter 5",
    )
    RISK_DIFFERENCE = (
        "risk-difference-of-two-proportions",
        "Difference of the two risks, variance ab/n1^3 + cd/n2^3.",
        "Borenstein, Hedges, Higgins and Rothstein 2009, chapter 5",
    )
    STANDARDISED_MEAN_DIFFERENCE = (
        "standardised-mean-difference-of-two-means",
        "Difference of the means over the pooled standard deviation, times the exact gamma-function correction J; "
        "variance J^2 (1/n1 + 1/n2 + d^2 / (2 (n1 + n2))).",
        "Hedges 1981; Borenstein, Hedges, Higgins and Rothstein 2009, chapter 4",
    )
    MEAN_DIFFERENCE = (
        "mean-difference-of-two-means",
        "Difference of the means with the pooled variance, or with both groups' own.",
        "Borenstein, Hedges, Higgins and Rothstein 2009, chapter 4",
    )
    LOG_RESPONSE_RATIO = (
        "log-response-ratio-of-two-means",
        "ln of the ratio of the means, variance s1^2/(n1 m1^2) + s2^2/(n2 m2^2).",
        "Hedges, Gurevitch and Curtis 1999",
    )
    CORRELATION = (
        "correlation-with-its-variance",
        "The correlation r, variance (1 - r^2)^2 / (n - 1).",
        "Borenstein, Hedges, Higgins and Rothstein 2009, chapter 6",
    )
    FISHER_Z = (
        "fisher-z-of-correlation",
        "The inverse hyperbolic tangent of r, variance 1/(n - 3).",
        "Fisher 1921; Borenstein, Hedges, Higgins and Rothstein 2009, chapter 6",
    )
    PARTIAL_CORRELATION = (
        "partial-correlation-of-test-statistic",
        "r = t / sqrt(t^2 + df).",
        "Stanley and Doucouliagos 2012; Aloe and Thompson 2013",
    )
    PARTIAL_FISHER_Z = (
        "fisher-z-of-partial-correlation",
        "The inverse hyperbolic tangent of the partial correlation, variance 1/(df - 1).",
        "Fisher 1924",
    )
    MARGINAL_EFFECT = (
        "marginal-effect-of-regression",
        "c'b with variance c'Vc, where c holds the derivatives of the terms at the point of evaluation.",
        "delta method; Brambor, Clark and Golder 2006 for interactions",
    )
    PER_UNIT = (
        "per-unit-of-exposure",
        "The derivative brought to units of the outcome for one unit of the exposure at the point of evaluation.",
        "chain rule",
    )
    ELASTICITY = (
        "elasticity-at-means",
        "The derivative times the exposure over the outcome at the point of evaluation.",
        "chain rule; delta method for the mean of the outcome",
    )
    SEMI_ELASTICITY = (
        "semi-elasticity-at-means",
        "The derivative over the outcome at the point of evaluation.",
        "chain rule; delta method for the mean of the outcome",
    )
    STANDARDISED_COEFFICIENT = (
        "standardised-coefficient-by-deviations",
        "The derivative times the standard deviation of the exposure over that of the outcome, both taken as fixed.",
        "common practice",
    )
    OUTCOME_DEVIATIONS = (
        "per-unit-of-exposure-in-outcome-deviations",
        "The derivative over the standard deviation of the outcome, taken as fixed.",
        "common practice",
    )
    ODDS_RATIO_TO_DIFFERENCE = (
        "log-odds-ratio-to-standardised-mean-difference",
        "d = ln OR sqrt(3)/pi, variance times 3/pi^2.",
        "Hasselblad and Hedges 1995",
    )
    DIFFERENCE_TO_ODDS_RATIO = (
        "standardised-mean-difference-to-log-odds-ratio",
        "ln OR = d pi/sqrt(3), variance times pi^2/3.",
        "Hasselblad and Hedges 1995",
    )
    CORRELATION_TO_DIFFERENCE = (
        "correlation-to-standardised-mean-difference",
        "d = 2r / sqrt(1 - r^2), variance 4V / (1 - r^2)^3.",
        "Borenstein, Hedges, Higgins and Rothstein 2009, chapter 7",
    )
    DIFFERENCE_TO_CORRELATION = (
        "standardised-mean-difference-to-correlation",
        "r = d / sqrt(d^2 + a), variance a^2 V / (d^2 + a)^3, a = (n1 + n2)^2 / (n1 n2).",
        "Borenstein, Hedges, Higgins and Rothstein 2009, chapter 7",
    )
    CORRELATION_TO_FISHER_Z = (
        "correlation-to-fisher-z",
        "z = atanh r, variance V / (1 - r^2)^2.",
        "delta method",
    )
    FISHER_Z_TO_CORRELATION = (
        "fisher-z-to-correlation",
        "r = tanh z, variance V (1 - r^2)^2.",
        "delta method",
    )
    DESIGN_EFFECT = (
        "inflation-for-clusters",
        "The standard error times the root of 1 + (M - 1) ICC, M the average cluster size.",
        "Kish 1965; Cochrane Handbook for Systematic Reviews of Interventions 5.1, section 16.3",
    )
    SIGN_ALIGNMENT = (
        "sign-alignment",
        "The sign is turned so that positive is good, because lower is better for this question.",
        "common practice",
    )


class Flag(Explained):
    """Something about an effect that a reader should know before leaning on it."""

    STANDARD_ERROR_BOUNDED = (
        "standard-error-bounded",
        "The printed numbers leave the standard error open between two bounds; the protocol's choice is used.",
    )
    APPROXIMATE_STANDARD_ERROR = (
        "approximate-standard-error",
        "Covariances that are not printed are taken as zero, so the standard error is approximate.",
    )
    COVARIANCES_ROUNDED_TO_FIT = (
        "covariances-rounded-to-fit",
        "The printed covariances are possible only within their rounding; they were shrunk by that much.",
    )
    BOUNDS_NOT_TIGHTENED = (
        "bounds-not-tightened",
        "The search for the attainable standard errors did not settle, so wider bounds that surely hold are used.",
    )
    STANDARD_ERROR_FROM_MARGINAL_EFFECT = (
        "standard-error-from-printed-marginal-effect",
        "The standard error is that of the marginal effect printed in the paper, at the same point.",
    )
    MARGINAL_EFFECT_AS_PRINTED = (
        "marginal-effect-as-printed",
        "The point of evaluation is not printed, so the marginal effect that the paper prints at its means is used.",
    )
    MARGINAL_EFFECT_SET_ASIDE = (
        "marginal-effect-set-aside",
        "The marginal effect printed in the paper is not what its coefficients give, so it is not used.",
    )
    FROM_THRESHOLD = (
        "standard-error-below-bound",
        "Only a significance threshold is printed, so the standard error is known to be below a bound and no more.",
    )
    COARSE_STANDARD_ERROR = (
        "coarse-standard-error-set-aside",
        "The standard error is printed with one digit; a printed item that pins it more tightly is used.",
    )
    CELLS_CORRECTED = "cells-corrected", "A count of zero was handled by adding to the cells."
    GEOMETRIC_MEAN = (
        "geometric-mean-used",
        "The mean of a logarithm stands in: the point of evaluation is the geometric mean.",
    )
    OUTCOME_MEAN_FIXED = (
        "outcome-mean-treated-as-fixed",
        "The sampling error of the outcome's mean is not printed and could not be carried into the standard error.",
    )
    MODERATOR_AT_SAMPLE = (
        "moderator-at-sample-value",
        "The protocol sets no value for a moderator, so the value printed in the paper is used.",
    )
    EXPOSURE_AT_SAMPLE = (
        "exposure-at-sample-mean",
        "The protocol sets no value for the exposure, so the mean printed in the paper is used.",
    )
    EXPOSURE_AS_TREATMENT = (
        "exposure-taken-as-treatment",
        "One unit of the exposure is taken as the difference between treated and not treated.",
    )
    TOTAL_DEVIATION = (
        "standardised-by-total-deviation",
        "The difference is in standard deviations of all outcomes rather than of those within groups.",
    )
    EQUAL_GROUPS_ASSUMED = (
        "equal-groups-assumed",
        "Group sizes are not printed; groups of equal size are assumed in a conversion.",
    )
    CONVERTED = (
        "converted-metric",
        "The effect was converted from another metric under distributional assumptions.",
    )
    DEGREES_OF_FREEDOM_APPROXIMATED = (
        "degrees-of-freedom-approximated",
        "Residual degrees of freedom are not printed; observations less the known terms and a constant are used.",
    )
    VALUE_DEPENDS_ON_STANDARD_ERROR = (
        "value-depends-on-standard-error",
        "The effect is made from a test statistic, so the open standard error moves the effect itself.",
    )
    ZERO_ORDER = (
        "zero-order-correlation",
        "No other regressors are held fixed in this correlation.",
    )
    PARTIAL_AS_CORRELATION = (
        "partial-taken-as-zero-order",
        "A correlation with other regressors held fixed stands for a plain one.",
    )
    CLUSTERING_CORRECTED = (
        "clustering-corrected",
        "The paper ignored its clusters; the standard error was inflated for them.",
    )
    CLUSTERING_NOT_CORRECTED = (
        "clustering-not-corrected",
        "The paper ignored its clusters and the standard error was not inflated for them, so it is too small.",
    )


class Reason(Explained):
    """Why no effect can be given."""

    METRIC_NOT_REACHABLE = (
        "metric-not-reachable",
        "What is printed cannot be turned into this question's metric.",
    )
    PRECISION_NOT_PRINTED = (
        "precision-not-printed",
        "No standard error, test statistic, interval or p value is printed for it.",
    )
    ESTIMATE_ROUNDS_TO_ZERO = (
        "estimate-rounds-to-zero",
        "The estimate is printed as zero, so its test statistic or p value says nothing about its standard error.",
    )
    TEST_STATISTIC_ZERO = (
        "test-statistic-zero",
        "The test statistic is printed as zero or the p value as one, so it says nothing about the standard error.",
    )
    ONLY_A_BOUND = (
        "standard-error-only-bounded",
        "The standard error is known only within bounds, and the protocol leaves such effects out.",
    )
    NO_EVENTS_ON_ONE_SIDE = (
        "no-contrast-in-either-group",
        "Nobody or everybody had the event in both groups, and the protocol leaves such tables out.",
    )
    ZERO_CELL = "zero-cell", "A count is zero and the protocol adds no correction, so the ratio is not defined."
    ZERO_VARIANCE = "zero-variance", "The printed numbers show no variation, so there is no standard error."
    TOO_FEW_OBSERVATIONS = (
        "too-few-observations",
        "There are too few observations for a standard error.",
    )
    MEANS_NOT_POSITIVE = (
        "means-not-positive",
        "A ratio of means needs both means above zero.",
    )
    PERFECT_CORRELATION = (
        "perfect-correlation",
        "A correlation of exactly one in size has no standard error and no Fisher z.",
    )
    OBSERVATIONS_NOT_PRINTED = (
        "observations-not-printed",
        "The number of observations is not printed, so there is no standard error.",
    )
    DEGREES_OF_FREEDOM_NOT_PRINTED = (
        "degrees-of-freedom-not-printed",
        "Neither degrees of freedom nor observations are printed, so there is no partial correlation.",
    )
    EXPOSURE_VALUE_NOT_PRINTED = (
        "exposure-value-not-printed",
        "The exposure's mean is not printed and the protocol sets no value at which to evaluate.",
    )
    EXPOSURE_VALUE_NOT_POSITIVE = (
        "exposure-value-not-positive",
        "A logarithm of the exposure is involved, and the point of evaluation is not above zero.",
    )
    EXPOSURE_VALUE_ZERO = (
        "exposure-value-zero",
        "At an exposure of zero every elasticity is zero, with no standard error.",
    )
    MODERATOR_VALUE_NOT_PRINTED = (
        "moderator-value-not-printed",
        "A moderator's value is not printed and the protocol sets none, so the effect has no point of evaluation.",
    )
    OUTCOME_MEAN_NOT_PRINTED = (
        "outcome-mean-not-printed",
        "The outcome's mean is not printed, and the metric is relative to it.",
    )
    OUTCOME_MEAN_NOT_POSITIVE = (
        "outcome-mean-not-positive",
        "The outcome's mean is not above zero, so a change relative to it has no meaning.",
    )
    DEVIATION_NOT_PRINTED = (
        "standard-deviation-not-printed",
        "A standard deviation that the metric needs is not printed.",
    )
    ZERO_DEVIATION = "zero-standard-deviation", "A standard deviation that the metric divides by is zero."
    NO_SLOPE_AT_POINT = (
        "no-slope-at-point",
        "Every term's derivative is zero at the point of evaluation, so the effect is zero without an error.",
    )
    COVARIANCES_IMPOSSIBLE = (
        "printed-covariances-impossible",
        "The printed covariances and standard errors cannot belong to one regression, even after rounding.",
    )
    OUTSIDE_NUMERIC_RANGE = (
        "outside-numeric-range",
        "The printed numbers lead to an effect or a standard error too large or too small to compute with.",
    )
