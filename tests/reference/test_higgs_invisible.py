"""Invisible Higgs decays against published limits and couplings computed outside this project."""

from __future__ import annotations

import dataclasses
import math
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import chi2

from scanfit.contracts import BuildContext
from scanfit.errors import InputError, MissingPrediction
from scanfit.likelihoods.candidate import Annihilation, Candidate
from scanfit.likelihoods.constants import HIGGS_MASS, HIGGS_VEV
from scanfit.likelihoods.higgs_invisible import HIGGS_WIDTH_SM, LIMITS, ONE_SIDED_95, HiggsInvisible
from scanfit.validation import check

NOTHING = Annihilation(channels=(), sigma_v=lambda s: np.zeros((0, len(s))), total=np.zeros_like)


def candidate(width: float | None) -> Candidate:
    return Candidate(
        mass=10.0, self_conjugate=True, spin_degrees_of_freedom=1, annihilation=NOTHING, higgs_invisible_width=width
    )


def build(**options) -> HiggsInvisible:
    return HiggsInvisible(HiggsInvisible.Options(**options), BuildContext(Path()))


def width_for(branching_ratio: float) -> float:
    return HIGGS_WIDTH_SM * branching_ratio / (1.0 - branching_ratio)


# arXiv:2301.10731, arXiv:2303.01214, Phys. Rev. D 105, 092007 and Phys. Rev. Lett. 122, 231801: from the abstracts;
# arXiv:2202.07953: from memory.
@pytest.mark.parametrize(
    ("paper", "observed"),
    [
        ("arxiv-2301.10731", 0.107),
        ("arxiv-2303.01214", 0.15),
        ("prd-105-092007", 0.18),
        ("arxiv-2202.07953", 0.145),
        ("prl-122-231801", 0.26),
    ],
)
def test_published_limits_lie_where_a_half_chi_squared_reaches_95_per_cent(paper, observed):
    term = build(limit=paper)
    gain = 2.0 * (term.loglike(candidate(0.0), {}) - term.loglike(candidate(width_for(observed)), {}))
    # Half of the probability sits at zero: 0.5 + 0.5 CDF = 0.95.
    assert 0.5 + 0.5 * chi2(1).cdf(gain) == pytest.approx(0.95, abs=1e-9)
    assert gain == pytest.approx(ONE_SIDED_95, rel=1e-12)


@pytest.mark.parametrize(("mass", "largest"), [(10.0, 0.01013), (40.0, 0.01147), (50.0, 0.01297), (60.0, 0.0188)])
def test_largest_portal_coupling_of_a_scalar_singlet(mass, largest):
    """Gamma(h -> SS) = lambda^2 v^2/(32 pi m_h) sqrt(1 - 4 m^2/m_h^2), arXiv:1306.4710; values computed elsewhere."""
    velocity = math.sqrt(1.0 - 4.0 * mass**2 / HIGGS_MASS**2)
    width = largest**2 * HIGGS_VEV**2 / (32.0 * math.pi * HIGGS_MASS) * velocity
    assert build().branching_ratio(candidate(width)) == pytest.approx(0.107, rel=4e-3)


def test_likelihood_is_one_without_invisible_decays_and_falls():
    term = build(limit_95=0.1)
    assert term.loglike(candidate(0.0), {}) == 0.0
    values = [term.loglike(candidate(width_for(b)), {}) for b in (0.05, 0.1, 0.2, 0.9)]
    np.testing.assert_allclose(values, [-0.5 * 2.705543 * (b / 0.1) ** 2 for b in (0.05, 0.1, 0.2, 0.9)], rtol=1e-6)


def test_expected_limits_and_own_limits():
    assert build(limit="prl-122-231801", use_expected=True).limit_95 == 0.17
    assert build(limit_95=0.03).limit_95 == 0.03
    assert build().limit_95 == LIMITS["arxiv-2301.10731"][0]
    for options, message in (
        ({"limit": "prl-122-231801", "limit_95": 0.1}, "not both"),
        ({"limit": "arxiv-2202.07953", "use_expected": True}, "no expected limit"),
        ({"limit": "arxiv-2301.10732"}, "did you mean 'arxiv-2301.10731'"),
        ({"limit_95": 1.5}, "less than 1"),
    ):
        with pytest.raises(InputError, match=message):
            check(HiggsInvisible.Options, options)


def test_a_model_that_leaves_the_higgs_boson_alone_is_named():
    with pytest.raises(MissingPrediction, match="invisible Higgs width"):
        build().loglike(candidate(None), {})


def test_pseudo_data_and_expected_data_centre_on_the_point():
    term, point = build(), candidate(width_for(0.06))
    expected = term.expected(point, {})
    assert expected.loglike(point, {}) == 0.0
    assert expected.loglike(candidate(0.0), {}) < 0.0
    rng = np.random.default_rng(4)
    best = np.array([term.simulate(point, {}, rng).best_fit for _ in range(2000)])
    assert best.mean() == pytest.approx(0.06, abs=5.0 * term.spread / math.sqrt(2000))
    assert best.std() == pytest.approx(term.spread, rel=0.1)
    assert term.best_fit == 0.0


def test_explanation_and_caveat_name_the_source():
    term = build(limit="arxiv-2303.01214")
    (row,) = term.explain(dataclasses.replace(candidate(width_for(0.02))), {})
    assert (row.predicted, row.limit) == (pytest.approx(0.02), 0.15)
    assert "arxiv-2303.01214" in row.note
    assert "arxiv-2303.01214" in term.caveats[0]
