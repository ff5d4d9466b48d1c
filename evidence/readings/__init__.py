"""Readings: what is printed on the page, exactly, and what follows from the print alone.

``read`` takes JSON and gives one of the five kinds of reading, or raises ``ReadingErrors``; ``check_consistency`` says
which printed numbers cannot all be right; ``recover_precision`` finds a standard error. Turning a reading into an
effect is the business of ``analysis``.
"""

from evidence.readings.consistency import check_consistency, slope_at_printed_means
from evidence.readings.errors import Discrepancy, ReadingError, ReadingErrors
from evidence.readings.kinds import (
    Cluster,
    Correlation,
    Covariance,
    Interval,
    MarginalEffect,
    MeanArm,
    Precision,
    ProportionArm,
    Reading,
    ReadyMadeEffect,
    Regression,
    Term,
    TwoMeans,
    TwoProportions,
    Variable,
)
from evidence.readings.precision import (
    EstimateScale,
    RecoveredPrecision,
    degrees_of_freedom_of,
    exact_number,
    recover_precision,
    two_sided_quantile,
)
from evidence.readings.printed import NotPrinted, Printed, printed
from evidence.readings.reader import RATIO_METRICS, read
from evidence.readings.vocabulary import (
    DiscrepancyCode,
    EffectScale,
    ErrorCode,
    Kind,
    Metric,
    PrecisionSource,
    TermForm,
    Unrecovered,
    VariableScale,
)

__all__ = [
    "RATIO_METRICS",
    "Cluster",
    "Correlation",
    "Covariance",
    "Discrepancy",
    "DiscrepancyCode",
    "EffectScale",
    "ErrorCode",
    "EstimateScale",
    "Interval",
    "Kind",
    "MarginalEffect",
    "MeanArm",
    "Metric",
    "NotPrinted",
    "Precision",
    "PrecisionSource",
    "Printed",
    "ProportionArm",
    "Reading",
    "ReadingError",
    "ReadingErrors",
    "ReadyMadeEffect",
    "RecoveredPrecision",
    "Regression",
    "Term",
    "TermForm",
    "TwoMeans",
    "TwoProportions",
    "Unrecovered",
    "Variable",
    "VariableScale",
    "check_consistency",
    "degrees_of_freedom_of",
    "exact_number",
    "printed",
    "read",
    "recover_precision",
    "slope_at_printed_means",
    "two_sided_quantile",
]
