"""Full likelihoods published as HistFactory JSON: read and checked with pyhf, evaluated by our own compiled kernel.

The kernel knows every standard modifier. At loading it must reproduce pyhf's ln L at several parameter values.
"""

from __future__ import annotations

import copy
import json
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final, Self

import numpy as np
from scipy.special import gammaln, xlogy

from scanfit.errors import InputError, Problem
from scanfit.priors import FloatArray

from .histfactory_kernel import Constraints, IntArray, Layout, cost, expectations, minimise

if TYPE_CHECKING:
    import pyhf

_SETTINGS: Final = {"normsys": {"interpcode": "code4"}, "histosys": {"interpcode": "code4p"}}
_AGREEMENT: Final = 1e-8
"""Largest relative difference to pyhf's ln L."""


class HistFactoryLikelihood:
    """A workspace with the signal of scanfit in place of its own; nuisances are profiled.

    The workspace's parameter of interest is held at zero. Parameters of unconstrained normalisation are free within the
    workspace's bounds. Poisson terms keep their normalisation, constraints are one at their peak.

    Parameters
    ----------
    path : Path
        Workspace.
    channels : tuple of str
        Those whose bins receive the signal, in this order; the others constrain the background.
    measurement : str, optional
        The first by default.

    Raises
    ------
    InputError
        If pyhf is not installed, the file is no valid workspace, or a channel or measurement is unknown.
    """

    def __init__(self, path: Path, channels: tuple[str, ...], measurement: str | None = None) -> None:
        workspace, model = _read(path, channels, measurement)
        config = model.config
        self._layout = _flatten(model)
        self._constraints = _constraints(model)
        self._low, self._high = (np.array(side, dtype=float) for side in zip(*config.suggested_bounds(), strict=True))
        self._start = np.array(config.suggested_init(), dtype=float)
        fixed = np.array(config.suggested_fixed(), dtype=bool)
        if config.poi_index is not None:
            self._start[config.poi_index], fixed[config.poi_index] = 0.0, True
        self._low[fixed] = self._high[fixed] = self._start[fixed]
        # A factor of exactly zero would hide how its sample depends on it.
        self._low[~fixed & (self._low == 0.0)] = 1e-10
        self._data = np.array(workspace.data(model, include_auxdata=False), dtype=float)
        self._bins = np.concatenate([np.arange(*config.channel_slices[name].indices(1 << 30)) for name in channels])
        self._prove(model)

    sampled: Final = False
    """No marginal likelihood at all, see `marginal`."""

    @property
    def count(self) -> int:
        """Number of bins that receive the signal."""
        return len(self._bins)

    @property
    def observed(self) -> FloatArray:
        """Counts of these bins."""
        return np.asarray(self._data[self._bins])

    def profile(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> float:
        """Maximum of ln L over all nuisances; arguments as for `SimplifiedLikelihood.profile`."""
        counts = self._data
        saturated = float((xlogy(counts, counts) - counts - gammaln(counts + 1.0)).sum())
        return saturated - self._fit(signal, log_uncertainty)[0]

    def marginal(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> float:
        """Not to be had: free parameters have no density to integrate over. Raises NotImplementedError."""
        raise NotImplementedError("a full likelihood can only be profiled")

    def best_background(self, signal: FloatArray, log_uncertainty: FloatArray | None = None) -> FloatArray:
        """Expected background at the maximum of ln L, in the bins that receive the signal."""
        return np.asarray(self._rates(self._fit(signal, log_uncertainty)[1][:-1])[self._bins])

    def central(self) -> tuple[FloatArray, FloatArray]:
        """Background with every nuisance at its centre, and its standard deviation by linear propagation."""
        count = len(self._start)
        rate, slope = np.empty(len(self._data)), np.empty((len(self._data), count))
        expectations(self._layout, self._start, rate, slope)
        return rate[self._bins], np.sqrt(((slope[self._bins] * self._sigmas()) ** 2).sum(axis=1))

    def drawn(self, signal: FloatArray, log_uncertainty: FloatArray, rng: np.random.Generator) -> Self:
        """Return pseudo-data: constrained nuisances from their densities, then Poisson counts."""
        shaken = self._start + self._sigmas() * rng.standard_normal(len(self._start))
        theta = np.clip(shaken, self._low, self._high)
        mean = np.maximum(self._rates(theta), 0.0)
        mean[self._bins] += signal * np.exp(log_uncertainty * rng.standard_normal())
        return self._with_data(rng.poisson(mean).astype(float))

    def asimov(self, signal: FloatArray) -> Self:
        """Return the counts expected with every nuisance at its centre."""
        mean = self._rates(self._start)
        mean[self._bins] += signal
        return self._with_data(mean)

    def log_likelihood(self, theta: FloatArray, signal: FloatArray) -> float:
        """Ln L at given parameters of the workspace, without any uncertainty of the signal."""
        counts = self._data
        everywhere = np.zeros(len(counts))
        everywhere[self._bins] = signal
        rate, slope = np.empty(len(counts)), np.empty((len(counts), len(theta) + 1))
        value = cost(
            self._layout, self._constraints, counts, np.append(theta, 0.0), everywhere, 0.0 * everywhere, rate, slope
        )
        return float((xlogy(counts, counts) - counts - gammaln(counts + 1.0)).sum()) - value

    def _fit(self, signal: FloatArray, log_uncertainty: FloatArray | None) -> tuple[float, FloatArray]:
        everywhere, spread = np.zeros(len(self._data)), np.zeros(len(self._data))
        everywhere[self._bins] = signal
        if log_uncertainty is not None:
            spread[self._bins] = log_uncertainty
        free = 0.0 if not np.any(spread) else 50.0
        value, theta = minimise(
            self._layout, self._constraints, self._data, np.append(self._start, 0.0),
            np.append(self._low, -free), np.append(self._high, free), everywhere, spread,
        )  # fmt: skip
        return value, theta

    def _rates(self, theta: FloatArray) -> FloatArray:
        rate, slope = np.empty(len(self._data)), np.empty((len(self._data), len(theta)))
        expectations(self._layout, theta, rate, slope)
        return rate

    def _sigmas(self) -> FloatArray:
        """Standard deviation of every constrained parameter; zero for the free and the fixed ones."""
        kind, _, size = self._constraints
        sigma = np.where(kind == 1, size, np.where(kind == 2, 1.0 / np.sqrt(np.maximum(size, 1e-300)), 0.0))
        return np.where(self._low == self._high, 0.0, sigma)

    def _with_data(self, data: FloatArray) -> Self:
        other: Any = copy.copy(self)
        other._data = data
        return other  # type: ignore[no-any-return]

    def _prove(self, model: pyhf.Model) -> None:
        """Compare ln L with pyhf's at the start and at displaced parameters; a disagreement refuses the workspace."""
        nothing = np.zeros(self.count)
        data = [*self._data, *model.config.auxdata]
        rng = np.random.default_rng(1)
        ours, theirs = [], []
        for size in (0.0, 0.3, 0.7, 1.6):
            scale = np.where(self._constraints.kind == 1, self._sigmas(), 0.3)
            shift = size * scale * rng.uniform(-1.0, 1.0, len(self._start))
            theta = np.clip(self._start + shift, self._low, self._high)
            ours.append(self.log_likelihood(theta, nothing))
            theirs.append(float(model.logpdf(list(theta), data)[0]))
        # Constraints are normalised otherwise: differences to the first point are what must agree.
        gap = np.abs(np.diff(ours) - np.diff(theirs)) / np.maximum(np.abs(theirs[1:]), 1.0)
        if not np.all(gap < _AGREEMENT):
            rule = "the fast path does not reproduce the workspace's likelihood as pyhf computes it: unknown modifiers?"
            raise InputError([Problem("workspace", rule, float(np.nanmax(gap)))])


@contextmanager
def _quiet() -> Iterator[None]:
    """Silence what pyhf 0.7 cannot help: it uses a class that its schema library has deprecated."""
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", "jsonschema.RefResolver is deprecated", DeprecationWarning)
        yield


def _read(path: Path, channels: tuple[str, ...], measurement: str | None) -> tuple[pyhf.Workspace, pyhf.Model]:
    try:
        import pyhf
    except ImportError:
        rule = "needs pyhf, an optional extra: pip install 'scanfit[histfactory]'"
        raise InputError([Problem("workspace", rule)]) from None
    try:
        spec = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise InputError([Problem("workspace", f"the file cannot be read: {error.strerror}", str(path))]) from None
    except ValueError as error:
        raise InputError([Problem("workspace", f"the file is not valid JSON: {error}", str(path))]) from None
    try:
        with _quiet():
            workspace = pyhf.Workspace(spec)
    except pyhf.exceptions.InvalidSpecification as error:
        first_line = str(error).splitlines()[0]
        raise InputError([Problem("workspace", f"no valid HistFactory workspace: {first_line}", str(path))]) from None
    problems = [
        Problem("channels", "the workspace has no such channel", name, tuple(workspace.channels))
        for name in channels
        if name not in workspace.channels
    ]
    if measurement is not None and measurement not in workspace.measurement_names:
        names = tuple(workspace.measurement_names)
        problems.append(Problem("measurement", "the workspace has no such measurement", measurement, names))
    if problems:
        raise InputError(problems)
    try:
        with _quiet():
            return workspace, workspace.model(measurement_name=measurement, modifier_settings=_SETTINGS)
    except (pyhf.exceptions.InvalidModel, pyhf.exceptions.InvalidModifier) as error:
        raise InputError([Problem("workspace", f"the workspace makes no model: {error}", str(path))]) from None


def _flatten(model: pyhf.Model) -> Layout:
    nominal: list[float] = []
    row_first: list[int] = []
    row_at = [0]
    shifts: list[tuple[int, int, int]] = []
    up: list[float] = []
    down: list[float] = []
    scales: list[tuple[int, int]] = []
    shapes: list[FloatArray] = []
    factors: list[tuple[int, int, int]] = []
    for channel in model.spec["channels"]:
        for sample in channel["samples"]:
            row = len(row_first)
            row_first.append(model.config.channel_slices[channel["name"]].start)
            nominal += sample["data"]
            row_at.append(len(nominal))
            content = np.array(sample["data"], dtype=float)
            for modifier in sample["modifiers"]:
                kind, data = modifier["type"], modifier["data"]
                first = model.config.par_slice(modifier["name"]).start
                if kind == "histosys":
                    shifts.append((row, first, len(up)))
                    up += list(np.array(data["hi_data"]) - content)
                    down += list(content - np.array(data["lo_data"]))
                elif kind == "normsys":
                    scales.append((row, first))
                    shapes.append(_scale_shape(data["lo"], data["hi"]))
                else:
                    factors.append((row, first, 0 if kind in ("normfactor", "lumi") else 1))

    def column(rows: list[Any], index: int) -> IntArray:
        return np.array([entry[index] for entry in rows], dtype=np.int64)

    return Layout(
        nominal=np.array(nominal, dtype=float),
        row_first=np.array(row_first, dtype=np.int64),
        row_at=np.array(row_at, dtype=np.int64),
        shift_row=column(shifts, 0),
        shift_parameter=column(shifts, 1),
        shift_at=column(shifts, 2),
        shift_up=np.array(up, dtype=float),
        shift_down=np.array(down, dtype=float),
        scale_row=column(scales, 0),
        scale_parameter=column(scales, 1),
        scale_shape=np.array(shapes, dtype=float).reshape(-1, 8),
        factor_row=column(factors, 0),
        factor_parameter=column(factors, 1),
        factor_stride=column(factors, 2),
    )


def _scale_shape(low: float, high: float) -> FloatArray:
    """Logarithms of both variants, and the polynomial that meets value, slope and curvature at -1 and +1."""
    log_low, log_high = np.log(low), np.log(high)
    powers = np.arange(1, 7)
    rows = [
        sign**power * factor
        for power, factor in ((powers, 1.0 + 0 * powers), (powers - 1, powers), (powers - 2, powers * (powers - 1)))
        for sign in (1.0, -1.0)
    ]
    wanted = [
        high - 1.0, low - 1.0, high * log_high, -low * log_low, high * log_high**2, low * log_low**2
    ]  # fmt: skip
    return np.concatenate([[log_low, log_high], np.linalg.solve(np.array(rows, dtype=float), np.array(wanted))])


def _constraints(model: pyhf.Model) -> Constraints:
    count = model.config.npars
    kind, centre, size = np.zeros(count, dtype=np.int64), np.zeros(count), np.ones(count)
    for name in model.config.auxdata_order:
        parameters = model.config.param_set(name)
        place = model.config.par_slice(name)
        centre[place] = parameters.auxdata
        if parameters.pdf_type == "normal":
            kind[place] = 1
            size[place] = parameters.width()
        else:
            kind[place] = 2
            size[place] = parameters.factors
    return Constraints(kind, centre, size)
