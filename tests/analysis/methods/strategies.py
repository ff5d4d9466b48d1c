"""Data for property tests, and a walk over every number of a result."""

import dataclasses
import math
import numbers

import numpy as np
from hypothesis import strategies as st

from analysis.methods import NotEstimable


@st.composite
def estimates(draw, min_size=1, max_size=8, errors=(0.05, 1.0), spread=2.0):
    """Effects and variances of moderate size, all different from one another."""
    k = draw(st.integers(min_size, max_size))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    se = np.exp(rng.uniform(math.log(errors[0]), math.log(errors[1]), k))
    return spread * rng.standard_normal(k), se**2


@st.composite
def awkward_estimates(draw, max_size=5):
    """One to five estimates with standard errors from 1e-6 to 1e6, some equal, effects of any size."""
    k = draw(st.integers(1, max_size))
    se = draw(st.lists(st.sampled_from([1e-6, 1e-3, 0.1, 0.5, 1.0, 3.0, 1e3, 1e6]), min_size=k, max_size=k))
    y = draw(st.lists(st.sampled_from([-1e6, -3.0, -0.2, 0.0, 0.1, 0.37, 0.37, 2.0, 1e6]), min_size=k, max_size=k))
    return np.array(y), np.array(se) ** 2


def numbers_of(result, path="result"):
    """Every number in a result, with the way to it; a stated NotEstimable must say why."""
    if isinstance(result, NotEstimable):
        assert len(result.reason) > 10, path
        return
    if dataclasses.is_dataclass(result):
        for field in dataclasses.fields(result):
            yield from numbers_of(getattr(result, field.name), f"{path}.{field.name}")
    elif isinstance(result, np.ndarray):
        if result.dtype.kind == "f":
            for i, value in enumerate(result.ravel()):
                yield f"{path}[{i}]", float(value)
    elif isinstance(result, (tuple, list)):
        for i, value in enumerate(result):
            yield from numbers_of(value, f"{path}[{i}]")
    elif isinstance(result, numbers.Real) and not isinstance(result, (bool, int)):
        yield path, float(result)


def assert_sound(result, *, infinite=()):
    """No NaN anywhere, and infinity only in the fields named."""
    for path, value in numbers_of(result):
        assert not math.isnan(value), path
        if not any(name in path for name in infinite):
            assert math.isfinite(value), (path, value)
