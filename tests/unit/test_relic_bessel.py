"""Own scaled Bessel functions against scipy."""

from __future__ import annotations

import numpy as np
import pytest
from numba.core.registry import CPUDispatcher
from scipy.special import kve

from scanfit.likelihoods.relic_abundance.bessel import k1e, k2e


@pytest.mark.parametrize(("order", "function"), [(1, k1e), (2, k2e)])
def test_against_scipy(order: int, function: CPUDispatcher) -> None:
    z = np.concatenate([np.geomspace(1e-3, 1e8, 3000), [1.0, 4.0, 16.0], np.nextafter([1.0, 4.0, 16.0], 0.0)])
    own = np.array([function(value) for value in z.tolist()])
    np.testing.assert_allclose(own, kve(order, z), rtol=1e-14)
