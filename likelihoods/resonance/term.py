"""Likelihoods of searches for the mediator itself, as a bump in the mass of two jets or two leptons."""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Annotated, Any, ClassVar, Final, Self

import numpy as np
from pydantic import Field, PositiveFloat

from scanfit.contracts import BuildContext, ExclusionPlane, LimitCurve, Observable, Quantity, Term
from scanfit.errors import InputError, MissingPrediction, PointError, Problem
from scanfit.priors import FloatArray
from scanfit.validation import Options as BaseOptions

from ..candidate import Candidate, SpinOneMediator
from ..exclusion_plane import MASS_PLANES, mass_plane
from ..limit_statistics import confidence_from_ratios, limits_expected, upper_limit
from ..mediator_widths import FERMION_CHANNELS, spin_one_widths
from .limit_table import LimitTable
from .production import load_production

LEPTON_CHANNELS: Final = frozenset({"ee", "mumu", "tautau"})
LARGEST_COUPLING: Final = math.sqrt(4.0 * math.pi)


class ResonanceSearch(Term[Candidate]):
    """A table of upper limits, read as a Gaussian in the signal's cross section s.

    With the estimate s0 and its error sigma taken from observed and expected limits (arXiv:1007.1727),

        ln L = -(1/2) (s - s0)^2/(sigma^2 + u^2 s^2) + (1/2) (s0/sigma)^2,

    where u is the relative uncertainty of the predicted s, removed by profiling (and marginalised with the
    Gaussian's normalisation, when the run says so). The likelihood is a ratio to no signal: whatever its mass, a
    resonance is compared with the same data, so that this is the likelihood up to a constant.
    """

    class Options(BaseOptions):
        """Keys of the term in a run file."""

        data: str
        """Limit file, relative to the run file; see `LimitFile`."""
        k_factor: PositiveFloat = 1.0
        """Factor on the leading-order cross section; higher orders raise it by 1.1 to 1.4, from memory."""
        signal_uncertainty: Annotated[float, Field(ge=0.0, le=1.0)] = 0.10
        """Relative uncertainty of `k_factor`."""
        scale_uncertainty: bool = True
        """Whether the spread among factorisation scales adds to it: 4 % at 1 TeV, 15 % at 5 TeV."""

    cost: ClassVar[float] = 0.05
    leptonic: ClassVar[bool]
    """Whether the search looks at leptons rather than quarks."""
    curves: ClassVar[Mapping[str, str]] = {
        "cross-section": "cross section x branching fraction of a narrow resonance against its mass",
        "coupling": "coupling against mediator mass, with dark matter too heavy to be produced",
    }
    planes: ClassVar[Mapping[str, str]] = MASS_PLANES

    def __init__(self, options: Options, context: BuildContext) -> None:
        self.options = options
        path = Path(context.folder) / options.data
        self.table = LimitTable(path)
        file = self.table.file
        problems = [
            Problem("channels", f"{self.name} looks at {'leptons' if self.leptonic else 'quarks'} only", channel)
            for channel in file.channels
            if (channel in LEPTON_CHANNELS) != self.leptonic
        ]
        if len(set(file.channels)) < len(file.channels):
            problems.append(Problem("channels", "must differ from one another", file.channels))
        if problems:
            raise InputError(problems, str(path))
        self._channels = [FERMION_CHANNELS.index(channel) for channel in file.channels]
        try:
            self._production = load_production(file.sqrt_s)
        except InputError as error:
            raise InputError(error.problems, error.source or str(path)) from None
        self._pull = self.table.pull
        self._profiled = context.inner_nuisances == "profile"
        self.data_files = (*self.table.paths, self._production.path)
        self.caveats = (
            *((f"{file.title}: invented data",) if file.invented else ()),
            f"{self.name} signal: leading order times {options.k_factor:g}, narrow width, universal quark couplings, "
            "no interference; limits read as a Gaussian",
            *(
                ()
                if self.table.has_expected
                else (f"{file.title}: no expected limits, taken as equal to the observed",)
            ),
            *((f"{file.title}: says nothing outside its table",) if file.outside == "ignore" else ()),
        )

    def cross_section(self, mediator: SpinOneMediator) -> tuple[float, float]:
        """Return cross section x branching fraction into the search's channels in pb, and its log uncertainty.

        Raises
        ------
        PointError
            If the mediator's width is not positive, or its mass lies outside the production table.
        """
        if not mediator.width > 0.0:
            raise PointError(f"the mediator's width must be positive (it is {mediator.width:g} GeV)")
        unit, envelope = self._production(mediator.mass)
        visible = 0.0
        for axial, g_quark, _, g_lepton in mediator.currents:
            widths = spin_one_widths(mediator.mass, axial, 0.0, 0.0, g_quark, g_lepton)
            visible += float(widths[self._channels].sum())
        return self._times_k(mediator.g_quark_squared * unit * visible / mediator.width), self._uncertainty(envelope)

    def loglike(self, prediction: Candidate, values: Mapping[str, float]) -> float:
        mediator = _mediator(prediction)
        place = self._place(mediator)
        if place is None:
            return 0.0
        pull, sigma = place
        signal, spread = self.cross_section(mediator)
        strength = signal / sigma
        variance = 1.0 + (strength * math.expm1(spread)) ** 2
        loglike = 0.5 * pull**2 - 0.5 * (strength - pull) ** 2 / variance
        return loglike if self._profiled else loglike - 0.5 * math.log(variance)

    def confidence(self, prediction: Candidate) -> tuple[float, float]:
        """Observed CLs of the candidate and the median one without signal; both 1 where the search has no say."""
        mediator = _mediator(prediction)
        place = self._place(mediator)
        if place is None:
            return 1.0, 1.0
        pull, sigma = place
        signal, spread = self.cross_section(mediator)
        strength = signal / sigma
        variance = 1.0 + (strength * math.expm1(spread)) ** 2
        # Between the bounds of the test statistic: best strengths from zero up to the one that is tested.
        best = min(max(pull, 0.0), strength)
        observed = (strength - pull) ** 2 / variance - (best - pull) ** 2
        return (
            confidence_from_ratios(observed, strength**2 / variance),
            confidence_from_ratios(strength**2 / variance, strength**2 / variance),
        )

    def explain(self, prediction: Candidate, values: Mapping[str, float]) -> Sequence[Observable]:
        mediator, file = _mediator(prediction), self.table.file
        name = f"cross section x branching fraction into {' + '.join(file.channels)}"
        place = self._place(mediator)
        if place is None:
            return (Observable(name, math.nan, unit="pb", note="outside the table: the search has no say"),)
        pull, sigma = place
        signal, spread = self.cross_section(mediator)
        limit = float(upper_limit(np.array(pull), file.level, file.statistic)) * sigma
        note = (
            f"{100.0 * file.level:g} % confidence, {file.statistic}; predicted within {100 * math.expm1(spread):.0f} %"
        )
        return (Observable(name, signal, limit=limit, unit="pb", note=note),)

    def simulate(self, prediction: Candidate, values: Mapping[str, float], rng: np.random.Generator) -> Self:
        """Return the term with estimates drawn at this point, one for each node of the table, independently."""
        return self._with_pull(self._mean_pull(_mediator(prediction)) + rng.standard_normal(self._pull.shape))

    def expected(self, prediction: Candidate, values: Mapping[str, float]) -> Self:
        """Return the term whose estimate is this point's cross section near its mass, and zero elsewhere."""
        return self._with_pull(self._mean_pull(_mediator(prediction)))

    def limit_curve(
        self,
        curve: str,
        *,
        level: float | None = None,
        points: int = 40,
        pseudo_experiments: int = 200,
        rng: np.random.Generator | None = None,
    ) -> LimitCurve:
        """Limits of this search alone; the large-sample formula serves for the bands, no pseudo-data are drawn."""
        if curve not in self.curves:
            return super().limit_curve(curve)
        file = self.table.file
        level = file.level if level is None else level
        masses = np.geomspace(*self._covered, points)
        limits = np.array([self._limits_at(float(mass), curve, level) for mass in masses])
        if curve == "cross-section":
            y = Quantity("cross_section", "pb", r"\sigma \times \mathrm{BR}", "cross section x branching fraction")
        else:
            y = Quantity("coupling", "", "g" if self.leptonic else "g_q", "coupling to fermions")
        which = "quarks and leptons alike" if self.leptonic else "quarks only"
        return LimitCurve(
            title=f"{file.title}: {self.curves[curve]}",
            x=Quantity("mediator_mass", "GeV", "M", "mediator mass"),
            y=y,
            level=level,
            x_values=masses,
            observed=limits[:, 0],
            bands=limits[:, 1:] if self.table.has_expected and pseudo_experiments else None,
            caveats=(*self.caveats, *((f"coupled to {which}",) if curve == "coupling" else ())),
        )

    def exclusion_plane(self, plane: str, settings: Mapping[str, Any], *, points: int = 40) -> ExclusionPlane:
        """Plane of mediator mass and dark-matter mass; `settings` are keys of `MassPlaneOptions`."""
        if plane not in self.planes:
            return super().exclusion_plane(plane, settings)
        if self.leptonic and not settings.get("g_lepton"):
            raise InputError([Problem("g_lepton", "must be given: without it there are no leptons to see")])
        return mass_plane(self, self.table.file.title, plane, settings, self._covered, points)

    @property
    def _covered(self) -> tuple[float, float]:
        """Masses in GeV that limits and production both know."""
        low, high = float(self.table.mass[0]), float(self.table.mass[-1])
        return max(low, self._production.lightest), min(high, self._production.heaviest)

    def _limits_at(self, mass: float, curve: str, level: float) -> FloatArray:
        """Observed limit and its expected quantiles, shape (6,); infinite where no coupling in range is excluded."""
        statistic = self.table.file.statistic
        if curve == "cross-section":
            pull, sigma = self._place_at(mass, 0.0)
            observed = upper_limit(np.array([pull]), level, statistic)
            return sigma * np.concatenate([observed, limits_expected(level, statistic)])
        # Cross section over limit grows with the coupling: invert it on a grid.
        couplings = np.geomspace(1e-4, LARGEST_COUPLING, 400)
        ratios, inside = [], []
        for coupling in couplings:
            g_lepton = coupling if self.leptonic else 0.0
            width = float(spin_one_widths(mass, False, mass, 0.0, coupling, g_lepton).sum())
            if width / mass > self.table.largest_width:
                break
            pull, sigma = self._place_at(mass, width / mass)
            strength = self.cross_section(SpinOneMediator(mass, width, "vector", coupling, 0.0, g_lepton))[0] / sigma
            observed = upper_limit(np.array([pull]), level, statistic)
            ratios.append(strength / np.concatenate([observed, limits_expected(level, statistic)]))
            inside.append(coupling)
        if not inside:
            return np.full(6, math.inf)
        grid = np.log(np.array(ratios))
        return np.array([math.exp(np.interp(0.0, grid[:, k], np.log(inside), right=math.inf)) for k in range(6)])

    def _times_k(self, cross_section: float) -> float:
        return self.options.k_factor * cross_section

    def _uncertainty(self, envelope: float) -> float:
        own = math.log1p(self.options.signal_uncertainty)
        return math.hypot(own, envelope) if self.options.scale_uncertainty else own

    def _place(self, mediator: SpinOneMediator) -> tuple[float, float] | None:
        """Estimate over its error, and the error in pb, at this mediator; None where the search has no say."""
        ratio = mediator.width / mediator.mass
        return self._place_at(mediator.mass, ratio) if self.table.covers(mediator.mass, ratio) else None

    def _place_at(self, mass: float, width_ratio: float) -> tuple[float, float]:
        weights = self.table.weights(mass, width_ratio)
        return float((weights * self._pull).sum()), math.exp(float((weights * self.table.log_sigma).sum()))

    def _mean_pull(self, mediator: SpinOneMediator) -> FloatArray:
        place = self._place(mediator)
        if place is None:
            return np.zeros_like(self._pull)
        near = self.table.weights(mediator.mass, mediator.width / mediator.mass) > 0.0
        return np.where(near, self.cross_section(mediator)[0] / place[1], 0.0)

    def _with_pull(self, pull: FloatArray) -> Self:
        other: Any = copy.copy(self)
        other._pull = pull
        return other  # type: ignore[no-any-return]


class DijetResonance(ResonanceSearch):
    """Two jets: the mediator's decay into the quarks from which it was made."""

    name: ClassVar[str] = "dijet-resonance"
    summary: ClassVar[str] = "search for the mediator as a bump in the mass of two jets, from a table of limits"
    leptonic: ClassVar[bool] = False


class DileptonResonance(ResonanceSearch):
    """Two charged leptons; without a lepton coupling there is nothing to see."""

    name: ClassVar[str] = "dilepton-resonance"
    summary: ClassVar[str] = "search for the mediator as a bump in the mass of two leptons, from a table of limits"
    leptonic: ClassVar[bool] = True


def _mediator(prediction: Candidate) -> SpinOneMediator:
    if not isinstance(prediction.mediator, SpinOneMediator):
        raise MissingPrediction("a spin-one mediator")
    return prediction.mediator
