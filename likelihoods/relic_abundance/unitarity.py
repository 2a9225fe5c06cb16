r"""How large an annihilation cross section can be: the unitarity bound of s-wave scattering.

The S-matrix of one partial wave of two distinguishable particles with momentum k each is unitary only if its inelastic
cross section stays below pi (2 J + 1)/k^2 (Phys. Rev. Lett. 64 (1990) 615). In the convention of `Annihilation` that is

    sigma v_rel <= 8 pi / sqrt(s (s - 4 m^2))      for J = 0,

and its thermal average comes out in closed form (derived here; the test integrates it by quadrature):

    <sigma v> <= (4 pi/m^2) K_2(2 x)/K_2(x)^2  ->  (4 pi/m^2) sqrt(x/pi)    for large x.

At x = 25 the limiting form is 11 % too large. Identical bosons without spin could annihilate twice as fast, Majorana
particles in the s-wave only half as fast; the bound is quoted without these factors, as is usual.
"""

from __future__ import annotations

import math

from .bessel import smooth_factor_k2


def s_wave_bound(mass: float, x: float) -> float:
    """Largest <sigma v> of one s-wave at x = m/T >= 1, GeV^-2; `mass` in GeV."""
    # K_2(2 x)/K_2(x)^2 in smooth factors: the exponentials cancel.
    ratio: float = math.sqrt(x / math.pi) * smooth_factor_k2(0.5 / x) / smooth_factor_k2(1.0 / x) ** 2
    return 4.0 * math.pi / mass**2 * ratio
