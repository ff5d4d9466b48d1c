"""Checks on the arrays every method takes, and the scaling under which the sums are computed."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .errors import InvalidInput, UnknownChoice

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

LARGEST_VARIANCE_RATIO = 1e150
LARGEST_DISTANCE = 1e70


@dataclass(frozen=True, slots=True)
class ScaledData:
    """Effects and variances in units of a power of two near the smallest standard error, from a reference effect.

    `effects = origin + unit * scaled effects`, `variances = unit**2 * scaled variances`. A power of two changes no
    digit, and it keeps every product of weights inside the range of floating point. The origin is the effect with
    the smallest variance.
    """

    effects: FloatArray
    variances: FloatArray
    origin: float
    unit: float

    @property
    def span(self) -> float:
        """Largest minus smallest scaled effect."""
        return float(self.effects.max() - self.effects.min())


def float_array(name: str, values: npt.ArrayLike) -> FloatArray:
    """One-dimensional array of finite numbers, as float64 of its own memory layout."""
    try:
        array = np.ascontiguousarray(values, dtype=np.float64)
    except (TypeError, ValueError) as error:
        raise InvalidInput(name, "must hold numbers only") from error
    if array.ndim != 1:
        raise InvalidInput(name, f"must have one dimension, not {array.ndim}")
    finite = np.isfinite(array)
    if not finite.all():
        index = int(np.argmin(finite))
        raise InvalidInput(name, f"must be finite, not {array[index]}", index)
    return array


def effects_and_variances(effects: npt.ArrayLike, variances: npt.ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Both arrays checked: one dimension, same length, finite, variances positive."""
    y = float_array("effects", effects)
    v = float_array("variances", variances)
    if y.size != v.size:
        raise InvalidInput("variances", f"has {v.size} values for {y.size} effects")
    positive = v > 0.0
    if not positive.all():
        index = int(np.argmin(positive))
        raise InvalidInput("variances", f"must be positive, not {v[index]}", index)
    return y, v


def group_ends(groups: npt.ArrayLike, rows: int) -> tuple[IntArray, IntArray]:
    """Labels of the groups and, for each, the number of rows up to and including it. Groups must not decrease."""
    raw = np.asarray(groups)
    if raw.ndim != 1 or raw.size != rows:
        raise InvalidInput("groups", f"must hold one integer for each of the {rows} effects")
    if raw.size and not np.issubdtype(raw.dtype, np.integer):
        raise InvalidInput("groups", f"must be integers, not {raw.dtype}")
    labels = raw.astype(np.int64)
    steps = np.diff(labels)
    if (steps < 0).any():
        index = int(np.argmax(steps < 0)) + 1
        raise InvalidInput("groups", "must not decrease; sort the rows in the order they enter", index)
    ends = np.append(np.flatnonzero(steps) + 1, rows)[: None if rows else 0].astype(np.int64)
    return labels[ends - 1], ends


def scaled(effects: FloatArray, variances: FloatArray) -> ScaledData:
    """Scale checked, non-empty data; see :class:`ScaledData`."""
    reference = int(np.argmin(variances))
    smallest = float(variances[reference])
    if float(variances.max()) / smallest > LARGEST_VARIANCE_RATIO:
        raise InvalidInput("variances", f"largest and smallest differ by more than a factor {LARGEST_VARIANCE_RATIO:g}")
    # frexp: smallest = m * 2**e with m in [0.5, 1), so v / 2**(2u) lies in [1, 4).
    exponent = int(np.frexp(smallest)[1])
    unit = float(np.ldexp(1.0, (exponent - 1) // 2))
    origin = float(effects[reference])
    scaled_effects = (effects - origin) / unit
    if not np.abs(scaled_effects).max() < LARGEST_DISTANCE:
        raise InvalidInput("effects", f"lie more than {LARGEST_DISTANCE:g} standard errors apart")
    return ScaledData(scaled_effects, variances / unit / unit, origin, unit)


def check_choice(field: str, value: str, known: tuple[str, ...]) -> None:
    """Raise :class:`UnknownChoice` unless `value` is one of `known`."""
    if value not in known:
        raise UnknownChoice(field, value, known)


def check_level(level: float) -> None:
    """Raise :class:`InvalidInput` unless `level` is a probability strictly between 0 and 1."""
    if not 0.0 < level < 1.0:
        raise InvalidInput("level", f"must lie between 0 and 1, not {level}")
