"""Annihilation given by a few numbers or a table instead of a model, for effective candidates and for tests."""

from __future__ import annotations

import numpy as np

from scanfit.priors import FloatArray

from ..candidate import Annihilation
from ..constants import GEV_M2_TO_CM3_S


def constant_average(*, mass: float, sigma_v: float, channel: str = "bb") -> Annihilation:
    """Annihilation whose thermal average is `sigma_v` at every temperature.

    What stays constant is sigma times the velocity in the rest frame of one particle, because that is what the thermal
    average averages (Gondolo & Gelmini, Nucl. Phys. B 360 (1991) 145). As sigma v_rel in the sense of `Annihilation` it
    is 2 (s - 2 m^2)/s times its value at rest.

    Parameters
    ----------
    mass : float
        GeV.
    sigma_v : float
        cm^3/s.
    channel : str
        Name from `candidate.CHANNELS`.
    """
    at_rest = sigma_v / GEV_M2_TO_CM3_S

    def total(s: FloatArray) -> FloatArray:
        return 2.0 * at_rest * (1.0 - 2.0 * mass**2 / s)

    return Annihilation((channel,), lambda s: total(s)[None, :], total)


def velocity_expansion(*, mass: float, a: float, b: float, channel: str = "bb") -> Annihilation:
    """Annihilation with sigma v_rel = a + b v_rel^2, v_rel = 2 sqrt(1 - 4 m^2/s); `a` and `b` in cm^3/s.

    The thermal average is a + 6 b/x only to leading order in 1/x.
    """
    s_wave, p_wave = a / GEV_M2_TO_CM3_S, b / GEV_M2_TO_CM3_S

    def total(s: FloatArray) -> FloatArray:
        return s_wave + 4.0 * p_wave * (1.0 - 4.0 * mass**2 / s)

    return Annihilation((channel,), lambda s: total(s)[None, :], total)


def tabulated(
    *,
    mass: float,
    sqrt_s: FloatArray,
    sigma_v: FloatArray,
    channels: tuple[str, ...],
    poles: tuple[tuple[float, float], ...] = (),
    thresholds: tuple[float, ...] = (),
) -> Annihilation:
    """Annihilation from a table, interpolated linearly in ln(sqrt(s)) and constant outside.

    Parameters
    ----------
    mass : float
        GeV.
    sqrt_s : ndarray, shape (k,)
        GeV, ascending.
    sigma_v : ndarray, shape (n_channels, k)
        sigma v_rel in cm^3/s.
    channels : tuple of str
        Names from `candidate.CHANNELS`.
    poles, thresholds : tuple
        As for `Annihilation`.

    Raises
    ------
    ValueError
        If the shapes disagree, `sqrt_s` does not ascend or a cross section is negative.
    """
    place = np.log(np.asarray(sqrt_s, dtype=float))
    values = np.asarray(sigma_v, dtype=float) / GEV_M2_TO_CM3_S
    if values.shape != (len(channels), len(place)):
        raise ValueError(f"sigma_v must have the shape {(len(channels), len(place))}, not {values.shape}")
    if np.any(np.diff(place) <= 0.0):
        raise ValueError("sqrt_s must ascend")
    if np.any(values < 0.0) or not np.all(np.isfinite(values)):
        raise ValueError("sigma_v must be finite and not negative")
    summed = values.sum(axis=0)

    def by_channel(s: FloatArray) -> FloatArray:
        return np.array([np.interp(0.5 * np.log(s), place, row) for row in values])

    def total(s: FloatArray) -> FloatArray:
        return np.asarray(np.interp(0.5 * np.log(s), place, summed))

    return Annihilation(channels, by_channel, total, poles, thresholds)
