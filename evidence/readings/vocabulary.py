"""The closed vocabularies of a reading: kinds, metrics, sources of precision, errors and discrepancies.

Every member is its own code (a string, safe in JSON and in URLs) and carries a one-sentence explanation that
the API documentation and the pages show as it stands.
"""

from enum import StrEnum


class Explained(StrEnum):
    """A string enumeration whose members carry an explanation a person can read."""

    explanation: str

    def __new__(cls, code: str, explanation: str) -> "Explained":
        member = str.__new__(cls, code)
        member._value_ = code
        member.explanation = explanation
        return member


class Kind(Explained):
    """What sort of result the coder read off the page."""

    READY_MADE_EFFECT = "ready-made-effect", "The paper prints the effect itself, with some sign of its precision."
    TWO_PROPORTIONS = "two-proportions", "Counts of events and totals in a treated and a control group."
    TWO_MEANS = "two-means", "Mean, standard deviation and number of observations in a treated and a control group."
    CORRELATION = "correlation", "A correlation coefficient and the number of observations behind it."
    REGRESSION = "regression", "The regression terms in which the exposure appears, with their errors."


class Metric(Explained):
    """The scale on which a question compares effects."""

    LOG_RISK_RATIO = "log-risk-ratio", "Natural logarithm of the ratio of two risks."
    LOG_ODDS_RATIO = "log-odds-ratio", "Natural logarithm of the ratio of two odds."
    RISK_DIFFERENCE = "risk-difference", "Difference of two risks, between -1 and 1."
    STANDARDISED_MEAN_DIFFERENCE = (
        "standardised-mean-difference",
        "Difference of two means in units of the pooled standard deviation, corrected for small samples.",
    )
    MEAN_DIFFERENCE = "mean-difference", "Difference of two means in the units of the outcome."
    LOG_RESPONSE_RATIO = "log-response-ratio", "Natural logarithm of the ratio of two means."
    FISHER_Z = "fisher-z", "Inverse hyperbolic tangent of a correlation, which steadies its variance."
    CORRELATION = "correlation", "Product-moment correlation, between -1 and 1."
    PARTIAL_CORRELATION = (
        "partial-correlation",
        "Correlation of outcome and exposure once the other regressors are held fixed.",
    )
    ELASTICITY = "elasticity", "Percentage change of the outcome for one per cent more of the exposure."
    SEMI_ELASTICITY = "semi-elasticity", "Relative change of the outcome for one unit more of the exposure."
    STANDARDISED_COEFFICIENT = (
        "standardised-coefficient",
        "Change of the outcome, in its standard deviations, for one standard deviation more of the exposure.",
    )
    RAW_COEFFICIENT = "raw-coefficient", "Change of the outcome in its units for one unit more of the exposure."


class EffectScale(Explained):
    """How a ready-made effect is printed."""

    AS_IS = "as-is", "The number is printed on the scale of its metric."
    RATIO = "ratio", "The number is printed as a ratio; logarithms are taken of the estimate and both limits."


class VariableScale(Explained):
    """How the outcome or the exposure enters a regression."""

    LEVEL = "level", "The variable enters in its own units."
    LOGARITHM = (
        "logarithm",
        "The natural logarithm of the variable enters; its mean and deviation are of the logarithm.",
    )


class TermForm(Explained):
    """The form in which the exposure appears in one regression term."""

    LINEAR = "linear", "The exposure as it stands."
    SQUARE = "square", "The square of the exposure."
    CUBE = "cube", "The cube of the exposure."
    LOGARITHM = "logarithm", "The natural logarithm of an exposure that otherwise enters in levels."
    INTERACTION = "interaction", "The exposure times a named moderator."


class PrecisionSource(Explained):
    """The printed item from which a standard error was recovered."""

    STANDARD_ERROR = "standard-error", "The standard error is printed."
    T = "t", "The estimate divided by the printed t statistic."
    Z = "z", "The estimate divided by the printed z statistic."
    INTERVAL = "interval", "The width of the printed interval divided by twice the quantile of its level."
    F = "f", "The estimate divided by the root of an F statistic with one numerator degree of freedom."
    P = "p", "The estimate divided by the quantile of the printed two-sided p value."
    P_BELOW = "p-below", "A significance threshold: it only says that the standard error is below a bound."


class Unrecovered(Explained):
    """Why no standard error could be recovered."""

    NOT_PRINTED = "precision-not-printed", "The paper prints no standard error, test, interval or p value for it."
    ESTIMATE_ROUNDS_TO_ZERO = (
        "estimate-rounds-to-zero",
        "The estimate is printed as zero, so a test statistic or p value cannot be turned into a standard error.",
    )
    TEST_STATISTIC_ZERO = (
        "test-statistic-zero",
        "The test statistic is printed as zero or the p value as one, which says nothing about the standard error.",
    )


class ErrorCode(Explained):
    """Why a reading is refused."""

    NOT_AN_OBJECT = "not-an-object", "An object with named fields was expected here."
    NOT_A_LIST = "not-a-list", "A list was expected here."
    UNKNOWN_KIND = "unknown-kind", "The kind of reading is not one of the five known kinds."
    UNKNOWN_KEY = "unknown-key", "The field does not belong to this kind of reading."
    UNKNOWN_CHOICE = "unknown-choice", "The value is not one of the allowed words."
    MISSING = "missing", "A field that this kind of reading cannot do without is missing."
    NUMBER_NOT_TEXT = "number-not-text", "Numbers are given as text, exactly as printed, so that their digits are kept."
    NOT_A_NUMBER = "not-a-number", "The text is not a number."
    NOT_FINITE = "not-finite", "Not-a-number and infinity are not printed results."
    NUMBER_TOO_LONG = "number-too-long", "The number has more characters than any printed result."
    NUMBER_OUT_OF_RANGE = "number-out-of-range", "The number is too large or too close to zero to be a printed result."
    AMBIGUOUS_COMMA = "ambiguous-comma", "A comma could mark thousands or decimals."
    STARS_IN_NUMBER = "stars-in-number", "Significance stars belong in p_below, not in the number."
    BOUND_IN_NUMBER = "bound-in-number", "A bound such as '<0.05' belongs in p_below, not in the number."
    BRACKETS_IN_NUMBER = "brackets-in-number", "The number is given without the brackets around it."
    PERCENT_IN_NUMBER = "percent-in-number", "The number is given without a per cent sign."
    NOT_A_WHOLE_NUMBER = "not-a-whole-number", "Counts are whole numbers."
    COUNT_TOO_SMALL = "count-too-small", "The count is smaller than it can be."
    COUNT_TOO_LARGE = "count-too-large", "The count is larger than any study."
    NOT_TEXT = "not-text", "Text was expected here."
    TEXT_EMPTY = "text-empty", "The text is empty."
    TEXT_TOO_LONG = "text-too-long", "The text is longer than a name or unit."
    TEXT_UNPRINTABLE = "text-unprintable", "The text holds control characters."
    NOT_TRUE_OR_FALSE = "not-true-or-false", "True or false was expected here."
    STANDARD_ERROR_NOT_POSITIVE = "standard-error-not-positive", "A standard error is above zero."
    STANDARD_DEVIATION_NEGATIVE = "standard-deviation-negative", "A standard deviation is never below zero."
    F_NEGATIVE = "f-negative", "An F statistic is never below zero."
    P_OUTSIDE_UNIT_INTERVAL = "p-outside-unit-interval", "A p value lies between zero and one."
    LEVEL_OUTSIDE_UNIT_INTERVAL = "level-outside-unit-interval", "An interval's level is a share between zero and one."
    LIMITS_SWAPPED = "limits-swapped", "The lower limit is above the upper limit."
    INTERVAL_WITHOUT_WIDTH = "interval-without-width", "Both limits are printed as the same number."
    INTERVAL_EXCLUDES_ESTIMATE = "interval-excludes-estimate", "The interval does not contain the estimate."
    EVENTS_EXCEED_TOTAL = "events-exceed-total", "There are more events than people or things they could happen to."
    CORRELATION_OUTSIDE_RANGE = "correlation-outside-range", "A correlation lies between -1 and 1."
    EFFECT_OUTSIDE_RANGE = "effect-outside-range", "The effect lies outside the range of its metric."
    RATIO_NOT_POSITIVE = "ratio-not-positive", "A ratio and its limits are above zero."
    RATIO_METRIC = "ratio-metric", "Only effects that are logarithms of ratios can be printed as ratios."
    RATIO_STANDARD_ERROR = (
        "ratio-standard-error",
        "A standard error beside a ratio may be of the ratio or of its logarithm, so it cannot be used.",
    )
    DEGREES_OF_FREEDOM_TOO_SMALL = "degrees-of-freedom-too-small", "Degrees of freedom are at least one."
    NO_TERMS = "no-terms", "A regression reading holds at least one term of the exposure."
    TOO_MANY_TERMS = "too-many-terms", "A regression reading holds only the terms in which the exposure appears."
    TERM_REPEATED = "term-repeated", "Each form of the exposure, and each moderator, appears once."
    TERM_UNKNOWN = "term-unknown", "A covariance names a term that the reading does not hold."
    COVARIANCE_REPEATED = "covariance-repeated", "The covariance of two terms is given once."
    COVARIANCE_OF_ONE_TERM = "covariance-of-one-term", "A covariance is between two different terms."
    MODERATOR_MISPLACED = "moderator-misplaced", "Only an interaction has a moderator and a value at which it is taken."
    LOGARITHM_TWICE = "logarithm-twice", "A logarithm term needs an exposure that enters in levels."
    MEAN_NOT_POSITIVE = "mean-not-positive", "A variable whose logarithm is a term has a mean above zero."
    CLUSTER_SIZE_TOO_SMALL = "cluster-size-too-small", "A cluster holds at least one unit."
    INTRACLASS_CORRELATION_OUTSIDE_RANGE = (
        "intraclass-correlation-outside-range",
        "An intraclass correlation lies between zero and one.",
    )


class DiscrepancyCode(Explained):
    """What cannot all be true on the page once rounding is allowed for; a warning to the coder, never a refusal."""

    INTERVAL_NOT_CENTRED = "interval-not-centred", "The estimate is not in the middle of its interval."
    SIGN_DISAGREES = "sign-disagrees", "A test statistic has the opposite sign of its estimate."
    STANDARD_ERROR_DISAGREES = (
        "standard-error-disagrees",
        "The printed standard error and another printed sign of precision cannot both be right.",
    )
    TEST_STATISTIC_DISAGREES = (
        "test-statistic-disagrees",
        "A printed test statistic and another printed sign of precision cannot both be right.",
    )
    INTERVAL_DISAGREES = "interval-disagrees", "The printed interval and a printed test cannot both be right."
    P_VALUE_DISAGREES = (
        "p-value-disagrees",
        "The printed p value and another printed sign of precision cannot both be right.",
    )
    JOINTLY_IMPOSSIBLE = (
        "jointly-impossible",
        "Every pair of the printed numbers can be right, but not all of them together.",
    )
    COVARIANCE_EXCEEDS_STANDARD_ERRORS = (
        "covariance-exceeds-standard-errors",
        "A covariance is larger than the product of its two standard errors.",
    )
    MARGINAL_EFFECT_DISAGREES = (
        "marginal-effect-disagrees",
        "The printed marginal effect is not what the printed coefficients give at the printed means.",
    )
    DEGREES_OF_FREEDOM_EXCEED_OBSERVATIONS = (
        "degrees-of-freedom-exceed-observations",
        "There are more residual degrees of freedom and terms than observations.",
    )
    CLUSTERS_EXCEED_OBSERVATIONS = "clusters-exceed-observations", "There are more clusters than observations."
