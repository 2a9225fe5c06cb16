"""What one experiment excludes alone, observed and expected."""

from __future__ import annotations

import math
from collections.abc import Mapping
from itertools import pairwise
from typing import Final, Literal, TypeAlias

import numpy as np

from scanfit.contracts import LimitCurve, Quantity
from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray

from ..candidate import NucleonCouplings
from ..constants import GEV_M2_TO_CM2, NEUTRON_MASS, PROTON_MASS
from . import upper_limits
from .counting import BinnedCounts
from .data import Data
from .detector import Efficiency
from .experiment import Bins, Experiment
from .folding import CountingResponse
from .halo import Halo
from .neutrinos import BORON8_FLUX, FLUXES

LimitMethod: TypeAlias = Literal["flat-prior", "likelihood-ratio", "classical", "cls", "unified"]

FLOOR: Final = "neutrino-floor"
CURVES: Final[Mapping[str, str]] = {
    "si": "spin-independent cross section on nucleons, equal for protons and neutrons",
    "sd-proton": "spin-dependent cross section on protons alone",
    "sd-neutron": "spin-dependent cross section on neutrons alone",
    FLOOR: "spin-independent cross section that an ideal detector of this target, exposure and window would exclude",
}
_FLOOR_BINS: Final = 24
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
    if curve not in CURVES or curve == FLOOR:
        raise InputError([Problem("curve", "direct detection has no limit curve of this name", curve, tuple(CURVES))])
    nucleon = NEUTRON_MASS if curve == "sd-neutron" else PROTON_MASS
    reduced = mass * nucleon / (mass + nucleon)
    contact = math.sqrt(cross_section * math.pi / GEV_M2_TO_CM2) / reduced
    if curve == "si":
        return NucleonCouplings(f_proton=0.5 * contact, f_neutron=0.5 * contact)
    spin = contact / math.sqrt(12.0)
    return NucleonCouplings(a_proton=spin) if curve == "sd-proton" else NucleonCouplings(a_neutron=spin)


def upper_limit(counting: BinnedCounts, shape: FloatArray, level: float, method: LimitMethod) -> float:
    """Upper limit on the total signal in events; `shape` is the signal in each bin for one event in total.

    Raises
    ------
    InputError
        If the method asks for one bin, or for a known background, and there is none.
    """
    if method == "flat-prior":
        return upper_limits.flat_prior(counting, shape, level)
    if method == "likelihood-ratio":
        return upper_limits.likelihood_ratio(counting, shape, level)
    problem = None
    spread = float(np.sqrt((counting.loading**2).sum()))
    if counting.background.size != 1:
        problem = "this method needs an experiment with a single bin"
    elif spread > 0.0 and method == "unified":
        problem = "this method needs an exactly known background"
    if problem:
        raise InputError([Problem("limit_method", problem, method, ("flat-prior", "likelihood-ratio"))])
    background = float(counting.background[0])
    observed = float(counting.observed[0])
    if method == "unified":
        return upper_limits.unified(round(observed), background, level)[1]
    one_bin = upper_limits.cls if method == "cls" else upper_limits.classical
    return one_bin(observed, background, level, spread)


def yields(response: CountingResponse, curve: str, masses: FloatArray, halo: Halo) -> FloatArray:
    """Expected signal events at 1e-40 cm^2, shape (n_masses, n_bins)."""
    return np.array([response.counts(m, couplings_of(curve, m, _UNIT), halo) for m in masses])


def limits(counting: BinnedCounts, signal: FloatArray, level: float, method: LimitMethod) -> FloatArray:
    """Upper limits in cm^2 from `yields`, shape (n_masses,); infinite where no recoil is seen."""
    found = np.full(len(signal), np.inf)
    for index, row in enumerate(signal):
        total = float(row.sum())  # cells around single events are too narrow to count
        if total > 0.0:
            found[index] = _UNIT * upper_limit(counting, row / total, level, method) / total
    return found


def mass_range(response: CountingResponse, curve: str, halo: Halo, points: int) -> FloatArray:
    """Masses in GeV from where the experiment begins to see anything to 10 TeV, densest at first, where limits fall."""
    trial = np.geomspace(0.2, _HEAVIEST, 300)
    total = yields(response, curve, trial, halo).sum(axis=1)
    if not total.max() > 0.0:
        raise InputError([Problem("curve", "the target has no nuclei with the spin that this curve needs", curve)])
    lightest = trial[np.argmax(total > _LIGHTEST_YIELD * total.max())]
    return np.asarray(lightest * (_HEAVIEST / lightest) ** (np.linspace(0.0, 1.0, points) ** 1.5))


def ideal_experiment(experiment: Experiment) -> Experiment:
    """The same target, exposure and window, but every recoil seen as it is, and no background but neutrinos."""
    low, high = experiment.intervals_kev[0][0], experiment.intervals_kev[-1][1]
    low, high = (float(end) for end in experiment.true_energy(np.array([max(low, 0.1), high])))
    edges = np.geomspace(low, high, _FLOOR_BINS + 1)
    edges[0], edges[-1] = low, high
    return Experiment(
        title=experiment.title,
        source=experiment.source,
        planned=True,
        exposure_tonne_year=experiment.exposure_tonne_year,
        target=experiment.target,
        neutrinos=tuple(FLUXES),
        bins=Bins(intervals_kev=tuple(pairwise(edges.tolist())), background=(0.0,) * _FLOOR_BINS),
        efficiency=Efficiency(energy_kev=(low, high), value=(1.0, 1.0)),
    )


def limit_curve(
    title: str,
    data: Data,
    curve: str,
    *,
    level: float,
    points: int,
    pseudo_experiments: int,
    rng: np.random.Generator,
    method: LimitMethod,
    observed: bool,
    caveats: tuple[str, ...],
    halo: Halo | None = None,
) -> LimitCurve:
    """Build the curve of some data; see `scanfit.contracts.Term.limit_curve`.

    The background holds the neutrinos, whose fluxes vary as `neutrinos` says.
    """
    halo = halo or Halo()
    couplings_of(curve, 1.0, _UNIT)  # an unknown curve is an error before anything is computed
    masses = mass_range(data.response, curve, halo, points)
    signal = yields(data.response, curve, masses, halo)
    seen = limits(data.neutrinos_in_background(), signal, level, method) if observed else None
    bands = None
    if pseudo_experiments:
        drawn = []
        for _ in range(pseudo_experiments):
            flux = max(rng.normal(BORON8_FLUX, BORON8_FLUX * FLUXES["boron-8"].uncertainty), 0.0)
            twin = data.draw(lambda cells: np.zeros(cells.matrix.shape[-1]), flux, rng)
            same_cells = twin.response is data.response
            its_signal = signal if same_cells else yields(twin.response, curve, masses, halo)
            drawn.append(limits(twin.neutrinos_in_background(), its_signal, level, method))
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
