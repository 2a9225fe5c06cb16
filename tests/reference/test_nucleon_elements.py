"""Nucleon matrix elements against published and independently computed numbers."""

from __future__ import annotations

from pathlib import Path

import pytest

from scanfit.contracts import BuildContext
from scanfit.likelihoods.models.scalar_singlet import ScalarSinglet
from scanfit.likelihoods.nucleon_elements import axial_couplings, higgs_nucleon_coupling


@pytest.mark.parametrize(
    ("light", "strange", "expected"),
    # Computed independently from f_N = 2/9 + (7/9) sum f_Tq; 59.1 MeV is arXiv:1506.04142, the rest from memory.
    [(59.1, 42.0, 0.3060), (40.0, 50.0, 0.2968)],
)
def test_higgs_coupling_from_sigma_terms(light: float, strange: float, expected: float) -> None:
    found = higgs_nucleon_coupling({"sigma_pi_nucleon": light, "sigma_strange": strange})
    assert found == pytest.approx(expected, abs=1e-4)
    # arXiv:1708.02245 gives 0.308 +- 0.018.
    assert abs(found - 0.308) < 0.018


def test_axial_charges_change_places_in_the_neutron() -> None:
    values = {"delta_u": 0.84, "delta_d": -0.43, "delta_s": -0.09}
    # Isovector charge: u - d gives g_A = 1.27 in the proton and -1.27 in the neutron (neutron beta decay, from memory).
    proton, neutron = axial_couplings(values, 1.0, -1.0, 0.0)
    assert proton == pytest.approx(1.27, abs=0.01)
    assert neutron == pytest.approx(-proton)
    assert axial_couplings(values, 1.0, 1.0, 1.0) == pytest.approx((0.32, 0.32))


def test_singlet_takes_either() -> None:
    context = BuildContext(Path())
    by_coupling = ScalarSinglet(ScalarSinglet.Options(), context)
    by_terms = ScalarSinglet(ScalarSinglet.Options(nucleon="sigma-terms"), context)
    names = [{p.name for p in model.parameters} for model in (by_coupling, by_terms)]
    assert names[0] ^ names[1] == {"higgs_nucleon_coupling", "sigma_pi_nucleon", "sigma_strange"}
    point = {"mass": 100.0, "portal": 0.01}
    first = by_coupling.predict({**point, "higgs_nucleon_coupling": 0.3060}).nucleon
    second = by_terms.predict({**point, "sigma_pi_nucleon": 59.1, "sigma_strange": 42.0}).nucleon
    assert first is not None
    assert second is not None
    assert second.f_proton == pytest.approx(first.f_proton, rel=3e-4)
