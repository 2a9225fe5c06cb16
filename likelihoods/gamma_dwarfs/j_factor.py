"""What is known of a target's J-factor: a normal in log10 J, with different widths below and above if need be.

The measurement is a density in the *measured* log10 J (form of arXiv:1503.02641, from memory), so its prefactor
does not depend on the true J. The same expression read as a density of the true log10 J is the prior of a
marginal analysis: flat in log J times the measurement. Writing J instead of the measured J in the prefactor
would add -ln J and move the maximum by -s^2 ln 10 dex; nothing here does.
"""

from __future__ import annotations

import math

import numpy as np

from scanfit.priors import FloatArray


def log_normalisation(minus: FloatArray, plus: FloatArray) -> FloatArray:
    """Log of the constant in front of exp(-y^2/(2 s^2)), y in dex, s = `minus` below zero and `plus` above."""
    return -np.log(math.sqrt(math.pi / 2.0) * (minus + plus))


def log_density(y: FloatArray, minus: FloatArray, plus: FloatArray) -> FloatArray:
    """Log density of y = log10 J - log10 J_measured, per dex; shapes broadcast."""
    width = np.where(y < 0.0, minus, plus)
    return log_normalisation(minus, plus) - 0.5 * (y / width) ** 2


def draw(minus: FloatArray, plus: FloatArray, rng: np.random.Generator) -> FloatArray:
    """Draw y from `log_density`, one per target."""
    below = rng.random(minus.shape) < minus / (minus + plus)
    return np.abs(rng.standard_normal(minus.shape)) * np.where(below, -minus, plus)
