"""One plain reading of each kind, all numbers invented, for tests to vary."""

from copy import deepcopy
from typing import Any

_SAMPLES: dict[str, dict[str, Any]] = {
    "ready-made-effect": {
        "kind": "ready-made-effect",
        "metric": "semi-elasticity",
        "scale": "as-is",
        "estimate": "0.120",
        "standard_error": "0.050",
        "t": "2.4",
        "interval": {"level": "0.95", "low": "0.022", "high": "0.218"},
        "p": "0.017",
        "degrees_of_freedom": 400,
        "observations": 410,
        "cluster": {"accounted_for": True},
    },
    "two-proportions": {
        "kind": "two-proportions",
        "treated": {"events": 4, "total": 123},
        "control": {"events": 11, "total": 139},
        "cluster": {"average_size": "29.8", "intraclass_correlation": "0.02", "accounted_for": False},
    },
    "two-means": {
        "kind": "two-means",
        "treated": {"mean": "103", "standard_deviation": "5.5", "observations": 50},
        "control": {"mean": "100", "standard_deviation": "4.5", "observations": 50},
    },
    "correlation": {"kind": "correlation", "correlation": "-.30", "observations": 28},
    "regression": {
        "kind": "regression",
        "outcome": {"scale": "logarithm"},
        "exposure": {"scale": "level", "unit": "messages a week", "mean": "2.1", "standard_deviation": "1.3"},
        "terms": [
            {"form": "linear", "coefficient": "0.052", "standard_error": "0.018"},
            {"form": "square", "coefficient": "-0.0061", "standard_error": "0.0030"},
            {
                "form": "interaction",
                "with": "distance to market",
                "at": "3.2",
                "coefficient": "−0.004",
                "t": "−1.9",
            },
        ],
        "covariances": [{"between": ["linear", "square"], "value": "-0.00004"}],
        "marginal_effect": {"estimate": "0.014", "p_below": "0.1"},
        "observations": 1240,
        "residual_degrees_of_freedom": 1228,
        "clusters": 61,
    },
}

KINDS = tuple(_SAMPLES)


def sample(kind: str, **changes: Any) -> dict[str, Any]:
    """A fresh reading of this kind; a change to ``None`` takes the field away."""
    reading = deepcopy(_SAMPLES[kind]) | changes
    return {key: value for key, value in reading.items() if value is not None}
