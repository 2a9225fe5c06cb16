"""The run file: what to scan, against what, and how.

`load` checks everything that can be checked without evaluating a point and reports every broken rule at once.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any, Final

from pydantic import Field, NonNegativeInt, PositiveFloat, PositiveInt, ValidationError

from scanfit import plugins
from scanfit.contracts import BuildContext, Explorer, InnerNuisances, Model, Term
from scanfit.errors import InputError, Problem
from scanfit.posterior import Posterior
from scanfit.priors import PRIORS, Fixed, Prior
from scanfit.space import Parameter, Space
from scanfit.validation import Options, check, problems_in, read_toml


class RunSection(Options):
    """``[run]``: what the run is called and the rules it obeys."""

    title: str
    seed: NonNegativeInt
    inner_nuisances: InnerNuisances = "marginal"
    """How terms remove the nuisances that they keep to themselves."""
    failed_fraction_maximum: float = Field(default=0.2, gt=0.0, le=1.0)
    """The scan stops when more than this fraction of its points (of 200 at least) cannot be evaluated."""
    reject_flags: tuple[str, ...] = ()
    """Validity flags of the model that make a cut: where one is raised the likelihood is zero."""


class ComputeSection(Options):
    """``[compute]``: where the work is done. Nothing here changes a result."""

    workers: PositiveInt | None = None
    """Worker processes; by default one for each core this process may use."""
    cluster: str | None = None
    """Address of a Dask scheduler, or ``"local"``."""
    checkpoint_seconds: PositiveFloat = 15.0
    """At most this much work is lost when the process is killed."""
    seconds_per_point_maximum: PositiveFloat | None = None
    """A point that takes longer is given up, marked and counted."""


class FiguresSection(Options):
    """``[figures]``: what to draw."""

    planes: tuple[tuple[str, str], ...] = ()


class _Skeleton(Options):
    run: RunSection
    model: dict[str, Any]
    parameters: dict[str, Any] = Field(default_factory=dict)
    terms: dict[str, dict[str, Any]]
    explore: dict[str, Any]
    compute: ComputeSection = ComputeSection()
    figures: FiguresSection = FiguresSection()


# Keys of the run file that may change without changing any result.
HARMLESS_KEYS: Final = ("run.title", "run.failed_fraction_maximum", "compute", "figures")


@dataclass(frozen=True)
class PlannedExplorer:
    """An explorer that the run file asks for, with its checked options."""

    name: str
    kind: type[Explorer]
    options: Options


@dataclass(frozen=True)
class RunFile:
    """A checked run file.

    Parameters
    ----------
    path : Path
        Where it was read.
    data : mapping
        Its parsed content.
    posterior : Posterior
        Model, terms and space, built.
    explorers : tuple of PlannedExplorer
        In the order given.
    """

    path: Path
    data: Mapping[str, Any]
    run: RunSection
    compute: ComputeSection
    figures: FiguresSection
    posterior: Posterior
    explorers: tuple[PlannedExplorer, ...]

    @property
    def data_files(self) -> tuple[Path, ...]:
        """Every data file that a term read."""
        return tuple(path for term in self.posterior.terms.values() for path in term.data_files)

    @property
    def caveats(self) -> tuple[str, ...]:
        """What a reader of the result must know, each once."""
        found = [f"{name}: {text}" for name, term in self.posterior.terms.items() for text in term.caveats]
        return tuple(dict.fromkeys(found))


@dataclass
class _Findings:
    """Problems gathered while the rest of the file is still being checked."""

    problems: list[Problem] = field(default_factory=list)

    @contextmanager
    def collect(self, where: str = "") -> Iterator[None]:
        """Keep the problems of an `InputError`; those of another file are put under `where`."""
        try:
            yield
        except InputError as error:
            for problem in error.problems:
                inside = f"{error.source}: {problem.where}".rstrip(": ") if error.source else problem.where
                self.problems.append(replace(problem, where=f"{where}, {inside}" if error.source else inside))


def load(path: Path) -> RunFile:
    """Read and check a run file, and build its posterior.

    Raises
    ------
    InputError
        With every broken rule found.
    """
    data = read_toml(path)
    skeleton = check(_Skeleton, data, source=str(path))
    findings = _Findings()
    context = BuildContext(path.resolve().parent, skeleton.run.inner_nuisances)

    model: Model[Any] | None = None
    with findings.collect("model"):
        model = _built(plugins.find("models", _used(skeleton.model, "model"), context.folder, "model.use"),
                       skeleton.model, "model", context)  # fmt: skip
    terms: dict[str, Term[Any]] = {}
    if not skeleton.terms:
        choices = tuple(plugins.installed("terms"))
        findings.problems.append(Problem("terms", "at least one term is needed", None, choices))
    for name, table in skeleton.terms.items():
        with findings.collect(f"terms.{name}"):
            where = f"terms.{name}"
            if not name.isidentifier():
                raise InputError([Problem(where, "a term's name must be letters, digits and underscores", name)])
            kind = plugins.find("terms", _used(table, where), context.folder, f"{where}.use")
            terms[name] = _built(kind, table, where, context)
    explorers: tuple[PlannedExplorer, ...] = ()
    with findings.collect("explore"):
        explorers = _explorers(skeleton.explore, context.folder)

    posterior = None
    if model is not None and len(terms) == len(skeleton.terms):
        with findings.collect("parameters"):
            space = _space(model, terms, skeleton.parameters)
            posterior = Posterior(space, model, terms, skeleton.run.reject_flags)
            _check_planes(skeleton.figures, posterior)
    if findings.problems:
        raise InputError(findings.problems, str(path))
    assert posterior is not None  # no problems means that everything was built
    return RunFile(path, data, skeleton.run, skeleton.compute, skeleton.figures, posterior, explorers)


def load_posterior(path: Path) -> Posterior:
    """Build the posterior of a run file; what each worker process calls once."""
    return load(path).posterior


def _used(table: Mapping[str, Any], where: str) -> str:
    name = table.get("use")
    if not isinstance(name, str):
        raise InputError([Problem(f"{where}.use", "this key is required and must be a name", name)])
    return name


def _built(kind: type[Any], table: Mapping[str, Any], where: str, context: BuildContext) -> Any:
    options = check(kind.Options, {key: value for key, value in table.items() if key != "use"}, where)
    return kind(options, context)


def _explorers(table: Mapping[str, Any], folder: Path) -> tuple[PlannedExplorer, ...]:
    """One explorer with its options beside ``use``, or a list of them with a table of options each."""
    used = table.get("use")
    names = (used,) if isinstance(used, str) else used
    if not isinstance(names, tuple) or not names or not all(isinstance(name, str) for name in names):
        choices = tuple(plugins.installed("explorers"))
        raise InputError([Problem("explore.use", "must be a name or a list of names", used, choices)])
    findings = _Findings()
    if len(set(names)) < len(names):
        raise InputError([Problem("explore.use", "names an explorer twice", names)])
    planned = []
    for name in names:
        with findings.collect():
            kind = plugins.find("explorers", name, folder, "explore.use")
            own = table.get(name, {})
            if not isinstance(own, Mapping):
                raise InputError([Problem(f"explore.{name}", "must be a table of options", own)])
            beside = {key: value for key, value in table.items() if key not in ("use", *names)}
            if len(names) == 1:
                own, beside = {**beside, **own}, {}
            if beside:
                rule = "with several explorers, options belong in a table of the explorer's name"
                raise InputError([Problem(f"explore.{key}", rule, None, names) for key in beside])
            where = "explore" if len(names) == 1 else f"explore.{name}"
            planned.append(PlannedExplorer(name, kind, check(kind.Options, own, where)))
    if findings.problems:
        raise InputError({str(problem): problem for problem in findings.problems}.values())
    return tuple(planned)


def _space(model: Model[Any], terms: Mapping[str, Term[Any]], given: Mapping[str, Any]) -> Space:
    """Join the parameters of the model and of the terms by name, and give each the prior of the run file."""
    declared: dict[str, Parameter] = {parameter.name: parameter for parameter in model.parameters}
    problems = []
    for term_name, term in terms.items():
        for nuisance in term.nuisances:
            shared = declared.setdefault(nuisance.name, nuisance)
            if shared.prior != nuisance.prior and nuisance.name not in given:
                rule = f"terms.{term_name} and another sharer of this parameter suggest different priors; give one here"
                problems.append(Problem(f"parameters.{nuisance.name}", rule))
    for name in given:
        if name not in declared:
            problems.append(Problem(f"parameters.{name}", "no model or term has this parameter", None, tuple(declared)))
    findings = _Findings(problems)
    parameters = []
    for name, parameter in declared.items():
        prior = parameter.prior
        if name in given:
            with findings.collect():
                prior = _prior(given[name], f"parameters.{name}")
                parameters.append(replace(parameter, prior=prior))
        elif prior is None:
            rule = "this parameter needs a prior, or a number to fix it"
            findings.problems.append(Problem(f"parameters.{name}", rule, None, tuple(PRIORS)))
        else:
            parameters.append(parameter)
    if findings.problems:
        raise InputError(findings.problems)
    space = Space(parameters)
    if space.dimension == 0:
        raise InputError([Problem("parameters", "every parameter is fixed: there is nothing to scan")])
    return space


def _prior(given: Any, where: str) -> Prior:
    if isinstance(given, int | float) and not isinstance(given, bool):
        try:
            return Fixed(value=float(given))
        except ValidationError:
            raise InputError([Problem(where, "must be a finite number", given)]) from None
    if not isinstance(given, Mapping):
        raise InputError([Problem(where, "must be a number, or a table with a prior", given, tuple(PRIORS))])
    name = given.get("prior")
    if name not in PRIORS:
        rule = "this key is required" if name is None else "no prior has this name"
        raise InputError([Problem(f"{where}.prior", rule, name, tuple(PRIORS))])
    try:
        return PRIORS[str(name)].model_validate(dict(given))
    except ValidationError as error:
        raise InputError(problems_in(error, PRIORS[str(name)], where)) from None


def _check_planes(figures: FiguresSection, posterior: Posterior) -> None:
    choices = (*posterior.space.free_names, *(quantity.name for quantity in posterior.quantities))
    problems = [
        Problem(f"figures.planes.{number}", "no free parameter or derived quantity has this name", name, choices)
        for number, plane in enumerate(figures.planes)
        for name in plane
        if name not in choices
    ]
    if problems:
        raise InputError(problems)
