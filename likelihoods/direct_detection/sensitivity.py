"""What one experiment excludes alone, observed and expected."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Final, Literal, TypeAlias

import numpy as np

from scanfit.contracts import LimitCurve, Quantity
from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray

from ..candidate import NucleonCouplings
from ..constants import GEV_M2_TO_CM2, NEUTRON_MASS, PROTON_MASS
from . import upper_limits
from .counting import BinnedCounts
from .halo import Halo

if TYPE_CHECKING:
    from .spectrum import CountingResponse

LimitMethod: TypeAlias = Literal["flat-prior", "likelihood-ratio", "classical", "cls", "unified"]

CURVES: Final[Mapping[str, str]] = {
    "si": "spin-independent cross section on nucleons, equal for protons and neutrons",
    "sd-proton": "spin-dependent cross section on protons alone",
    "sd-neutron": "spin-dependent cross section on neutrons alone",
}
_SYMBOLS: Final = {
    "si": r"\sigma^\mathrm{SI}_p", "sd-proton": r"\sigma^\mathrm{SD}_p", "sd-neutron": r"\sigma^\mathrm{SD}_n",
}  # fmt: skip
USUAL_LEVEL: Final = 0.90
BAND_QUANTILES: Final = (0.025, 0.16, 0.50, 0.84, 0.975)
_UNIT: Final = 1e-40
"""Cross section in cm^2 at which yields are computed; limits scale from it."""
_LIGHTEST_YIELD: Final = 1e-5
"""The curve begins where the yield has fallen to this share of its maximum."""
_HEAVIEST: Final = 1e4
_METHOD_CAVEATS: Final[Mapping[LimitMethod, str]] = {
    "flat-prior": "Limits are Bayesian, flat in the signal",
    "likelihood-ratio": "Limits are asymptotic profile-likelihood limits: too strong where few events are expected",
    "classical": "Limits are classical one-sided ones",
    "cls": "Limits are CLs limits",
    "unified": "Limits are the upper ends of unified intervals",
}


def couplings_of(curve: str, mass: float, cross_section: float) -> NucleonCouplings:
    """Couplings with this cross section in cm^2 on the curve's nucleon at zero momentum transfer.

    Raises
    ------
    InputError
        If there is no such curve.
    """
    if curve not in CURVES:
        raise InputError([Problem("curve", "direct detection has no limit curve of this name", curve, tuple(CURVES))])
    nucleon = NEUTRON_MASS if curve == "sd-neutron" else PROTON_MASS
    reduced = mass * nucleon / (mass + nucleon)
    contact = math.sqrt(cross_section * math.pi / GEV_M2_TO_CM2) / reduced
    if curve == "si":
        return NucleonCouplings(f_proton=0.5 * contact, f_neutron=0.5 * contact)
    spin = contact / math.sqrt(12.0)
    return NucleonCouplings(a_proton=spin) if curve == "sd-proton" else NucleonCouplings(a_neutron=spin)


def upper_limit(
    counting: BinnedCounts, shape: FloatArray, level: float, method: LimitMethod, fixed: FloatArray | None = None
) -> float:
    """Upper limit on the total signal in events; `shape` is the signal in each bin for one event in total.

    Raises
    ------
    InputError
        If the method asks for one bin, or for a known background, and there is none.
    """
    if method == "flat-prior":
        return upper_limits.flat_prior(counting, shape, level, fixed)
    if method == "likelihood-ratio":
        return upper_limits.likelihood_ratio(counting, shape, level, fixed)
    problem = None
    spread = float(np.sqrt((counting.loading**2).sum()))
    if counting.background.size != 1:
        problem = "this method needs an experiment with a single bin"
    elif spread > 0.0 and method == "unified":
        problem = "this method needs an exactly known background"
    elif spread > 0.0 and fixed is not None and fixed.any():
        problem = "this method takes no uncertain background beside neutrinos"
    if problem:
        raise InputError([Problem("limit_method", problem, method, ("flat-prior", "likelihood-ratio"))])
    background = float(counting.background[0] + (0.0 if fixed is None else fixed[0]))
    observed = float(counting.observed[0])
    if method == "unified":
        return upper_limits.unified(round(observed), background, level)[1]
    one_bin = upper_limits.cls if method == "cls" else upper_limits.classical
    return one_bin(observed, background, level, spread)


def yields(response: CountingResponse, curve: str, masses: FloatArray, halo: Halo) -> FloatArray:
    """Expected signal events at 1e-40 cm^2, shape (n_masses, n_bins)."""
    return np.array([response.counts(m, couplings_of(curve, m, _UNIT), halo) for m in masses])


def limits(
    counting: BinnedCounts, signal: FloatArray, level: float, method: LimitMethod, fixed: FloatArray | None = None
) -> FloatArray:
    """Upper limits in cm^2 from `yields`, shape (n_masses,); infinite where no recoil is seen."""
    found = np.full(len(signal), np.inf)
    for index, row in enumerate(signal):
        total = float(row.sum())
        if total > 0.0:
            found[index] = _UNIT * upper_limit(counting, row / total, level, method, fixed) / total
    return found


def mass_range(response: CountingResponse, curve: str, halo: Halo, points: int) -> FloatArray:
    """Masses in GeV, evenly spaced in the logarithm, from where the experiment begins to see anything to 10 TeV."""
    trial = np.geomspace(0.2, _HEAVIEST, 300)
    total = yields(response, curve, trial, halo).sum(axis=1)
    if not total.max() > 0.0:
        raise InputError([Problem("curve", "the target has no nuclei with the spin that this curve needs", curve)])
    return np.geomspace(trial[np.argmax(total > _LIGHTEST_YIELD * total.max())], _HEAVIEST, points)


def limit_curve(
    title: str,
    response: CountingResponse,
    counting: BinnedCounts,
    pseudo_data: Callable[[np.random.Generator], tuple[CountingResponse, BinnedCounts]],
    curve: str,
    *,
    level: float,
    points: int,
    pseudo_experiments: int,
    rng: np.random.Generator,
    method: LimitMethod,
    observed: bool,
    caveats: tuple[str, ...],
    fixed: FloatArray | None = None,
    halo: Halo | None = None,
) -> LimitCurve:
    """Build the curve; `pseudo_data` gives response and counts of a data set without a signal."""
    halo = halo or Halo()
    couplings_of(curve, 1.0, _UNIT)  # an unknown curve is an error before anything is computed
    masses = mass_range(response, curve, halo, points)
    signal = yields(response, curve, masses, halo)
    seen = limits(counting, signal, level, method, fixed) if observed else None
    bands = None
    if pseudo_experiments:
        drawn = []
        for _ in range(pseudo_experiments):
            its_response, its_counting = pseudo_data(rng)
            its_signal = signal if its_response is response else yields(its_response, curve, masses, halo)
            drawn.append(limits(its_counting, its_signal, level, method, fixed))
        # Order statistics, not interpolation: some limits may be infinite.
        bands = np.quantile(np.array(drawn), BAND_QUANTILES, axis=0, method="inverted_cdf").T
    conventions = (
        f"{_METHOD_CAVEATS[method]}. Halo: {halo.local_density:g} GeV/cm³, v0 {halo.most_probable_speed:g}, "
        f"escape {halo.escape_speed:g}, Earth {halo.earth_speed:g} km/s"
    )
    return LimitCurve(
        title=title,
        x=Quantity("mass", "GeV", "m", "dark-matter mass"),
        y=Quantity(f"sigma_{curve.replace('-', '_')}", "cm²", _SYMBOLS[curve], f"upper limit on the {CURVES[curve]}"),
        level=level,
        x_values=masses,
        observed=seen,
        bands=bands,
        caveats=(*(text for text in caveats if curve != "si" or "spin-dependent" not in text), conventions),
    )
