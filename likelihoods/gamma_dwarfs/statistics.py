"""Joint Poisson likelihood of all targets, with J-factors and background levels profiled or integrated out.

For one target with counts n_j, backgrounds b_j and signals s_j at the measured J-factor,

    mu_j = nu b_j + 10^y s_j,    lnL(y, nu) = sum_j [n_j ln mu_j - mu_j - ln n_j!] + ln p(y) + ln N(nu; centre, error),

where y is the distance of the true log10 J from the measured one (see `j_factor`) and nu scales the background. Targets
share neither, so each is handled alone; what they do share (`telescope`) is a parameter of the scan and arrives here
inside signals and backgrounds. How it is done: `profiling`, `marginal_quick`, `marginal_careful`.

On 400 random cases from no signal to 5e5 photons brute force agreed to 2e-7 in the log-likelihood with the careful
integral; tests/reference/test_gamma_statistics.py holds all to 1e-5, and to 3e-5 with an uncertain background.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from .marginal_careful import careful_integral
from .marginal_quick import MOST_NODES, NODE_COLUMNS, quick_integral
from .profiling import MOST_MODES, Target, maxima, profiled


@njit(cache=True, fastmath=False, error_model="numpy")
def target_log_likelihoods(  # type: ignore[no-untyped-def]
    signal, observed, order, background, background_error, background_centre, minus, plus, marginal
):
    """Log-likelihood of each target without constants.

    Parameters
    ----------
    signal, observed, background : ndarray, shape (n_targets, n_bins)
        Expected signal at the measured J-factor, counts, and positive expected background.
    order : ndarray of int, shape (n_targets, n_bins)
        Bins of each target by rising counts.
    background_error, background_centre : ndarray, shape (n_targets,)
        Relative error of the background, zero where it is exact, and the measured background scale.
    minus, plus : ndarray, shape (n_targets,)
        Errors of log10 J in dex.
    marginal : bool
        Integrate over the nuisances; otherwise take their best values.

    Returns
    -------
    ndarray, shape (n_targets,)
        Omits -sum ln n!, ln of the normalisation of p(y) and, when profiled, that of the background's density.
    """
    n_targets, n_bins = signal.shape
    result = np.empty(n_targets)
    counts, filled_background, filled_signal = np.empty(n_bins), np.empty(n_bins), np.empty(n_bins)
    found, nodes = np.empty(MOST_MODES), np.empty((MOST_NODES, NODE_COLUMNS))
    for i in range(n_targets):
        size, background_total, signal_total = 0, 0.0, 0.0
        for j in order[i]:
            background_total += background[i, j]
            signal_total += signal[i, j]
            if observed[i, j] > 0.0:
                counts[size] = observed[i, j]
                filled_background[size] = background[i, j]
                filled_signal[size] = signal[i, j]
                size += 1
        target = Target(
            counts, filled_background, filled_signal, size, background_total, signal_total,
            background_error[i], background_centre[i], minus[i], plus[i],
        )  # fmt: skip
        if marginal:
            result[i] = quick_integral(target, nodes)
            if math.isnan(result[i]):
                result[i] = careful_integral(target, found, maxima(target, found))
        else:
            result[i] = -math.inf
            for k in range(maxima(target, found)):
                result[i] = max(result[i], profiled(target, found[k]))
    return result
