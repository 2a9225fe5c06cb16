"""Physical constants and the few Standard Model inputs, in GeV unless the name says otherwise.

Values are those of the Review of Particle Physics tables as remembered, not read from the page; hbar c is exact in
the SI.
Inside the physics everything is in natural units, hbar = c = k_B = 1; the conversions here stand at the edges.
"""

from __future__ import annotations

import math
from typing import Final

HBAR_C_GEV_FM: Final = 0.1973269804
GEV_M2_TO_CM2: Final = 3.893793721e-28
"""One GeV^-2 in cm^2."""
SPEED_OF_LIGHT_CM_S: Final = 2.99792458e10
SPEED_OF_LIGHT_KM_S: Final = 2.99792458e5
GEV_M2_TO_CM3_S: Final = GEV_M2_TO_CM2 * SPEED_OF_LIGHT_CM_S
"""One GeV^-2 as cross section times velocity in cm^3/s."""
GEV_M2_TO_PB: Final = 0.3893793721e9
PLANCK_MASS: Final = 1.220890e19
FERMI_CONSTANT: Final = 1.1663788e-5
HIGGS_VEV: Final = (math.sqrt(2.0) * FERMI_CONSTANT) ** -0.5
FINE_STRUCTURE: Final = 1.0 / 137.035999

PROTON_MASS: Final = 0.93827209
NEUTRON_MASS: Final = 0.93956542
NUCLEON_MASS: Final = 0.5 * (PROTON_MASS + NEUTRON_MASS)
ATOMIC_MASS_UNIT: Final = 0.93149410
GEV_TO_GRAM: Final = 1.78266192e-24

ELECTRON_MASS: Final = 0.000510999
MUON_MASS: Final = 0.105658
TAU_MASS: Final = 1.77686
UP_MASS: Final = 0.00216
DOWN_MASS: Final = 0.00467
STRANGE_MASS: Final = 0.0934
CHARM_MASS: Final = 1.27
"""MSbar charm mass at its own scale."""
BOTTOM_MASS: Final = 4.18
"""MSbar bottom mass at its own scale."""
TOP_MASS: Final = 172.7
W_MASS: Final = 80.377
Z_MASS: Final = 91.1876
HIGGS_MASS: Final = 125.25
W_WIDTH: Final = 2.085
Z_WIDTH: Final = 2.4952
ALPHA_S_MZ: Final = 0.1179
SIN2_THETA_W_MZ: Final = 0.23122
SIN2_THETA_W_LOW: Final = 0.2387

QUARK_MASSES: Final = {
    "u": UP_MASS, "d": DOWN_MASS, "s": STRANGE_MASS, "c": CHARM_MASS, "b": BOTTOM_MASS, "t": TOP_MASS,
}  # fmt: skip
LEPTON_MASSES: Final = {"e": ELECTRON_MASS, "mu": MUON_MASS, "tau": TAU_MASS}

OMEGA_H2_OBSERVED: Final = 0.1200
"""Abundance of cold dark matter, arXiv:1807.06209 (0.120 +- 0.001 in its abstract)."""
ENTROPY_TODAY_CM3: Final = 2891.2
CRITICAL_DENSITY_GEV_CM3: Final = 1.05371e-5
"""Critical density over h^2."""
