"""Numbers only: arrays in, frozen dataclasses out, nothing of Django or of the rest of this project.

Where to start:

- `pool_effects`: one pooled answer with its heterogeneity.  `trail`: the answer after every paper.
- `errors`: what is raised; `NotEstimable` is returned, not raised.
- `warm`: compile everything ahead of the first request (`python -m analysis.methods.warm`).
"""

from .errors import InvalidInput, MethodsError, NotEstimable, UnknownChoice
from .intervals import INTERVALS, Interval
from .pooling import (
    FLAGS,
    MODELS,
    PooledEffect,
    SampleSizePooledEffect,
    pool_by_sample_size,
    pool_effects,
)
from .trail import Trail, TrailStep, trail

__all__ = [
    "FLAGS",
    "INTERVALS",
    "MODELS",
    "Interval",
    "InvalidInput",
    "MethodsError",
    "NotEstimable",
    "PooledEffect",
    "SampleSizePooledEffect",
    "Trail",
    "TrailStep",
    "UnknownChoice",
    "pool_by_sample_size",
    "pool_effects",
    "trail",
]
