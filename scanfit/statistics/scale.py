"""Values on the scale on which an axis is drawn: plain, or log10.

Densities, bins and interpolation all live on this scale, so that a result does not depend on how a figure is drawn.
"""

from __future__ import annotations

import numpy as np

from scanfit.priors import FloatArray
from scanfit.results import Axis


def to_scale(values: FloatArray, axis: Axis) -> FloatArray:
    """Map values to the axis' scale; NaN where the scale has no place for them (zero on a logarithmic axis)."""
    values = np.asarray(values, dtype=float)
    if axis.scale == "linear":
        return np.where(np.isfinite(values), values, np.nan)
    usable = np.isfinite(values) & (values > 0.0)
    return np.log10(values, out=np.full(values.shape, np.nan), where=usable)


def from_scale(scaled: FloatArray, axis: Axis) -> FloatArray:
    """Inverse of `to_scale`."""
    scaled = np.asarray(scaled, dtype=float)
    return scaled if axis.scale == "linear" else np.power(10.0, scaled)


def bounds(axis: Axis) -> tuple[float, float]:
    """Prior range on the axis' scale, infinite where there is none."""
    ends = np.array([np.nan if end is None else end for end in (axis.low, axis.high)], dtype=float)
    low, high = to_scale(ends, axis)
    return (-np.inf if np.isnan(low) else float(low)), (np.inf if np.isnan(high) else float(high))
