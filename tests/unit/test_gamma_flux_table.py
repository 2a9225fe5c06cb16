"""Tables of log-likelihood against flux: read, checked, and worth the same as the counts that they come from."""

import dataclasses

import numpy as np
import pytest

from scanfit.contracts import BuildContext
from scanfit.errors import InputError
from scanfit.likelihoods.gamma_dwarfs.flux_table import read_flux_table
from scanfit.likelihoods.gamma_dwarfs.likelihood import DwarfLikelihood
from scanfit.likelihoods.gamma_dwarfs.telescope import read_observation
from scanfit.likelihoods.gamma_dwarfs.term import GammaDwarfs
from tests.unit.test_gamma_dwarfs import SKUA, candidate

HEADER = "target,energy_low,energy_high,flux,log_likelihood\n"
SMALL = """
title = "small"
[flux_table]
file = "fluxes.csv"
flux = "photons"
[[targets]]
name = "one"
log10_j = 18.5
log10_j_error = [0.2, 0.3]
"""
ROWS = "".join(
    f"one,{low},{high},{flux},{-0.5 * (flux / 1e-10 - 1) ** 2}\n"
    for low, high in ((1, 3), (3, 10))
    for flux in (0.0, 1e-10, 2e-10, 4e-10, 8e-10)
)


def write(folder, text=SMALL, rows=ROWS):
    (folder / "fluxes.csv").write_text(HEADER + rows)
    (folder / "targets.toml").write_text(text)
    return folder / "targets.toml"


def tabulated(folder, targets, kind):
    """A file with the likelihoods of some Skua targets in bins that see true energies, and the same as counts."""
    data = read_observation(SKUA)
    edges = data.response.edges
    lines, tables = [], []
    for i in targets:
        error = f"[{data.j_minus[i]}, {data.j_plus[i]}]"
        tables.append(f'[[targets]]\nname = "{data.names[i]}"\nlog10_j = {data.log10_j[i]}\nlog10_j_error = {error}\n')
        for j in range(edges.size - 1):
            background, n = data.background[i, j], data.observed[i, j]
            photons = np.concatenate([[0.0], np.geomspace(0.02, 60.0, 50) * np.sqrt(background + 1.0)])
            flux = photons / data.acceptance[i, j]
            if kind == "energy":
                flux = flux * np.sqrt(edges[j] * edges[j + 1])
            value = n * np.log(background + photons) - photons
            lines += [
                f"{data.names[i]},{edges[j]},{edges[j + 1]},{x!r},{y!r}\n"
                for x, y in zip(flux.tolist(), value.tolist(), strict=True)
            ]
    text = f'title = "t"\n[flux_table]\nfile = "fluxes.csv"\nflux = "{kind}"\n' + "".join(tables)
    rows = np.array(targets)
    changed = {
        name: getattr(data, name)[rows]
        for name in ("acceptance", "log10_j", "j_minus", "j_plus", "background", "background_centre", "observed")
    }
    counts = dataclasses.replace(
        data, names=tuple(data.names[i] for i in targets), background_error=np.zeros(rows.size), **changed
    )
    return write(folder, text, "".join(lines)), counts


@pytest.mark.parametrize("inner", ["profile", "marginal"])
@pytest.mark.parametrize("kind", ["photons", "energy"])
def test_a_table_is_worth_the_counts_behind_it(tmp_path, inner, kind):
    path, counts = tabulated(tmp_path, [1, 5, 9], kind)
    term = GammaDwarfs(GammaDwarfs.Options(data=path.name), BuildContext(tmp_path, inner))
    assert term.data_files == (path, tmp_path / "fluxes.csv")
    response = term.likelihood.observation.response
    photons = dataclasses.replace(response, matrix=(response.matrix > 0.0).astype(float))
    reference = DwarfLikelihood(dataclasses.replace(counts, response=photons), inner)
    nothing = candidate(100.0, {"bb": 0.0})
    for sigma_v in (1e-27, 1e-26, 1e-25, 1e-24):
        found = candidate(100.0, {"bb": sigma_v})
        flux = term.flux_per_j(found)
        if kind == "energy":
            in_photons = dataclasses.replace(term.likelihood.observation, response=photons)
            other = GammaDwarfs(GammaDwarfs.Options(data=path.name), BuildContext(tmp_path, inner))
            other.likelihood = dataclasses.replace(term.likelihood, observation=in_photons)
            flux = other.flux_per_j(found)
        gain = term.loglike(found, {}) - term.loglike(nothing, {})
        expected = reference.total(flux) - reference.total(0.0 * flux)
        # Fifty points a bin leave 2e-3 of interpolation. In the table of energy fluxes the middle of the bin stands for
        # a photon's energy, which costs a few per cent of the flux.
        tolerance = 5e-3 if kind == "photons" else 0.05
        assert gain == pytest.approx(expected, abs=tolerance * max(1.0, abs(expected)))


def test_outside_the_table_the_likelihood_goes_on_along_its_tangent(tmp_path):
    write(tmp_path)
    data = read_flux_table(tmp_path / "targets.toml")
    assert data.flux.shape == (1, 2, 5)
    assert data.response.edges.tolist() == [1.0, 3.0, 10.0]
    term = GammaDwarfs(GammaDwarfs.Options(data="targets.toml"), BuildContext(tmp_path, "profile"))
    fluxes = np.array([1e-10 / 10.0**18.5, 0.0])
    inside, far, further = (term.likelihood.total(factor * fluxes) for factor in (1.0, 1e3, 1e4))
    assert inside > far > further
    # Profiling lowers J until the fit is good again: the penalty grows by 1/2 (3/0.2)^2 at least for three decades.
    assert inside - far < 0.5 * (3.0 / 0.2) ** 2 + 1.0


def test_a_table_has_limits_but_no_band_and_no_pseudo_data(tmp_path):
    path, _ = tabulated(tmp_path, [1], "photons")
    term = GammaDwarfs(GammaDwarfs.Options(data=path.name), BuildContext(tmp_path, "marginal"))
    curve = term.limit_curve("bb", points=2, pseudo_experiments=10)
    assert curve.bands is None
    assert np.all(np.isfinite(curve.observed))
    found = candidate(100.0, {"bb": 1e-26})
    with pytest.raises(NotImplementedError, match="pseudo-data"):
        term.simulate(found, {}, np.random.default_rng(1))
    with pytest.raises(NotImplementedError, match="expected"):
        term.expected(found, {})
    assert len(term.explain(found, {})) == 3


@pytest.mark.parametrize(
    ("text", "rows", "where"),
    [
        (SMALL, ROWS.replace("one,1,3,0.0", "one,1,3"), "line 2"),
        (SMALL, ROWS.replace("one,1,3,0.0", "one,1,3,-1.0"), "line 2"),
        (SMALL, ROWS.replace("one,1,3,1e-10", "one,1,3,0.0"), "one, 1 to 3 GeV"),
        (SMALL, ROWS.replace("one,3,10,", "one,4,10,"), "energy bins"),
        (SMALL, "".join(ROWS.splitlines(keepends=True)[:3]), "one, 1 to 3 GeV"),
        (SMALL + SMALL[SMALL.index("[[targets]]") :].replace("one", "two"), ROWS, "two"),
        (SMALL.replace('"one"', '"none"'), ROWS, ""),
        (SMALL.replace('"photons"', '"counts"'), ROWS, "flux_table.flux"),
        (SMALL.replace("fluxes.csv", "nowhere.csv"), ROWS, "flux_table.file"),
        (SMALL, "", ""),
    ],
)
def test_broken_tables_are_refused(tmp_path, text, rows, where):
    with pytest.raises(InputError) as caught:
        read_flux_table(write(tmp_path, text, rows))
    assert where in {problem.where for problem in caught.value.problems}


def test_a_wrong_header_is_shown(tmp_path):
    path = write(tmp_path)
    (tmp_path / "fluxes.csv").write_text("target,flux\n" + ROWS)
    with pytest.raises(InputError, match="target,energy_low,energy_high,flux,log_likelihood"):
        read_flux_table(path)
