"""Numbers behind the figures, and what is written on them."""

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.colors import to_rgb

from scanfit.plotting.convergence import draw_convergence, panels
from scanfit.plotting.corner import corner_data, draw_corner
from scanfit.plotting.decides import decides_data, draw_decides
from scanfit.plotting.marginals import draw_marginals, marginal_data, prior_density
from scanfit.plotting.material import INVENTED, free_priors, invented
from scanfit.plotting.planes import draw_plane, plane_data
from scanfit.plotting.style import COLOURS, PlainLogFormatter, figure_style, new_figure, tint
from scanfit.statistics.levels import LEVELS


def texts(figure):
    found = [text.get_text() for text in figure.texts]
    for axes in figure.axes:
        found += [axes.get_xlabel(), axes.get_ylabel(), axes.get_title()]
        if axes.get_legend():
            found += [text.get_text() for text in axes.get_legend().get_texts()]
    for legend in figure.legends:
        found += [text.get_text() for text in legend.get_texts()]
    return found


def test_plane_holds_what_it_says(material):
    data = plane_data(material, "mass", "coupling")
    best = material.points.loc[material.archive.best_row]
    assert data.best_fit == pytest.approx((best["mass"], best["coupling"]))
    for label, level in LEVELS.items():
        held = data.posterior.density.mass[data.posterior.density.height >= data.posterior.heights[label]].sum()
        assert held == pytest.approx(level, abs=0.01)
    assert np.nanmin(data.profile.two_delta) == 0.0
    weights = material.posterior["weight"]
    assert np.log10(data.mean[0]) == pytest.approx(np.average(np.log10(material.posterior["mass"]), weights=weights))
    (left, right), (bottom, top) = data.limits
    assert left < data.best_fit[0] < right
    assert bottom < data.best_fit[1] < top


def test_plane_is_labelled(material):
    with figure_style():
        figure = draw_plane(plane_data(material, "mass", "sigma_si_proton"), material.footnote)
    left, right = figure.axes[:2]
    assert left.get_xscale() == left.get_yscale() == right.get_xscale() == "log"
    found = texts(figure)
    for expected in (r"$m_\chi$ [GeV]", r"$\sigma^\mathrm{SI}_p$ [cm$^{2}$]", "68 % credible", "95 % profile",
                     "best fit", "posterior mean", "credible, ensemble", INVENTED):  # fmt: skip
        assert expected in found
    assert left.get_xlim() == right.get_xlim()


def test_footnote_only_where_data_are_invented(material):
    assert invented(material.run)
    with figure_style():
        figure = draw_plane(plane_data(material, "mass", "coupling"), "")
    assert INVENTED not in texts(figure)


def test_plane_without_extent_is_left_out(material):
    assert plane_data(material, "mass", "absent") is None
    assert decides_data(material, "mass", "absent") is None


def test_decides_map(material):
    data = decides_data(material, "mass", "coupling")
    assert data.decisions.terms == ("relic", "xenon", "dwarfs")
    assert data.share(-1) + sum(data.share(code) for code in range(3)) == pytest.approx(1.0)
    assert data.share(0) > 0.5  # the thin band forbids most of the plane
    with figure_style():
        figure = draw_decides(data, material.footnote)
    assert {"relic", "xenon", "nothing decides", "not explored", INVENTED} <= set(texts(figure))
    hatches = {patch.get_hatch() for patch in figure.axes[0].patches if patch.get_hatch()}
    assert len(hatches) >= 2  # told apart without colour


def test_marginals(material):
    data = marginal_data(material, ("mass", "local_density"))
    assert [panel.axis.name for panel in data] == ["mass", "local_density"]
    for panel in data:
        grid = panel.density.centres[0]
        assert np.trapezoid(panel.density.height, grid) == pytest.approx(1.0, abs=0.01)
        assert np.nanmin(panel.profile.two_delta) == 0.0
    # The nuisance is measured elsewhere only: 0.40 +- 0.05, in the posterior and in the profile.
    nuisance = data[1]
    assert np.average(nuisance.density.centres[0], weights=nuisance.density.height) == pytest.approx(0.4, abs=0.01)
    inside = nuisance.profile.places[0][nuisance.profile.two_delta < 1.0]
    assert np.ptp(inside) == pytest.approx(0.1, abs=0.03)
    with figure_style():
        assert "prior" in texts(draw_marginals(data))


@pytest.mark.parametrize("name", ["mass", "local_density"])
def test_prior_density_is_normalised_on_the_scale_of_the_axis(material, name):
    axis = material.axes[name]
    low, high = np.log10([10.0, 3000.0]) if name == "mass" else (0.1, 0.7)
    grid = np.linspace(low, high, 2001)
    density = prior_density(free_priors(material.run)[name], axis, grid)
    assert np.trapezoid(density, grid) == pytest.approx(1.0, abs=1e-6)


def test_corner(material):
    data = corner_data(material)
    assert list(data.names) == ["mass", "coupling", "local_density"]
    assert data.labels[0] == r"$\log_{10}\,$($m_\chi$/GeV)"
    assert data.best_fit[0] == pytest.approx(np.log10(material.best_fit("mass")))
    with figure_style():
        figure = draw_corner(data, material.footnote)
    assert {*data.labels, "68 % credible", INVENTED} <= set(texts(figure))


def test_convergence_draws_what_it_knows(material):
    nested, ensemble = material.run.history("nested"), material.run.history("ensemble")
    assert len(panels(nested)) == 3
    assert len(panels(ensemble)) == 3
    assert draw_convergence({"calls": np.arange(5.0), "unheard_of": np.arange(5.0)}) is None
    assert draw_convergence({}) is None
    figure = draw_convergence(ensemble)
    assert r"$\hat{R} - 1$ between ensembles" in texts(figure)
    worst = figure.axes[0].lines[-1].get_ydata()
    assert worst == pytest.approx(ensemble["autocorrelation_time"].max(axis=1))


def test_convergence_bears_what_samplers_record_before_they_know_anything():
    calls = np.arange(1.0, 41.0)
    times = np.where(calls[:, np.newaxis] < 5, np.nan, np.ones((40, 2)))
    log_likelihood = np.r_[-1e300, -np.inf, np.linspace(-50.0, 0.0, 38)]
    history = {"calls": calls, "autocorrelation_time": times, "r_hat": np.ones(40), "log_prior_volume": -calls / 4.0,
               "log_evidence": np.r_[-1e300, -np.inf, np.linspace(-30.0, -4.0, 38)],
               "log_likelihood": log_likelihood, "efficiency": np.full(40, np.nan)}  # fmt: skip
    with figure_style():
        figure = draw_convergence(history)
        figure.draw_without_rendering()
    assert len([axes for axes in figure.axes if axes.get_xlabel()]) == 4


def test_style_leaves_no_trace():
    before = dict(mpl.rcParams)
    with figure_style():
        assert mpl.rcParams["font.family"] == ["STIXGeneral"]
        new_figure(3.0, 2.0, "note")
    assert dict(mpl.rcParams) == before


def test_tint_and_tick_labels():
    assert tint("#000000", 0.25) == pytest.approx((0.75, 0.75, 0.75))
    assert tint(COLOURS["posterior"], 1.0) == pytest.approx(to_rgb(COLOURS["posterior"]))
    formatter = PlainLogFormatter()
    formatter.create_dummy_axis()
    formatter.axis.set_view_interval(1e-3, 1e4)
    assert formatter(100.0) == "100"
    assert "10^{-46}" in formatter(1e-46)
